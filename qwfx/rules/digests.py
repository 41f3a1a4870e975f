"""Tier *digests*: are these the bytes that were written?"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, Problem, Remark, rule

__all__: list[str] = []


@rule(
    name="member-digests",
    tier="digests",
    severity=Severity.ERROR,
    premise=Premise(members=("/digests",), rules=("dimensions",)),
    cost="one pass over the whole file",
    summary="each data set has the SHA-256 digests that were stored with it",
)
def member_digests(file: Inspection) -> Iterator[Remark]:
    yield from _offsets(file)
    check = file.digests
    for mismatch in check.mismatches:
        attributes = mismatch.path.endswith("@")
        place = f", the first at byte {mismatch.offset}" if mismatch.block >= 0 and not attributes else ""
        yield Problem(
            mismatch.path.rstrip("@"),
            "the digest stored when it was written",
            f"{'attributes differ' if attributes else mismatch.reason}{place}",
            "restore the file from a copy; if the change was meant, save it anew so that digests agree",
            count=mismatch.blocks,
        )
    for path in check.missing:
        yield Problem(
            path, "the member that /digests lists", "it is absent", "restore the file from a copy, or save it anew"
        )
    for path in check.extra:
        yield Problem(
            path,
            "a digest for each member",
            "none is stored",
            "save the file anew so that digests are complete",
            Severity.WARNING,
        )
    yield Measured(f"{check.checked} members, {check.bytes} bytes")
    yield Covered("every byte of every data set")


def _offsets(file: Inspection) -> Iterator[Problem]:
    """Offsets of the blocks, without which a damaged block could not be named."""
    start = file.read("/digests/block_start").astype(np.int64)
    blocks = file.shape("/digests/block_digest")[0]
    if not (start[0] == 0 and start[-1] == blocks and (np.diff(start) > 0).all()):
        yield Problem(
            "/digests/block_start",
            f"offsets that rise from 0 to {blocks}, the number of block digests",
            f"offsets from {start[0]} to {start[-1]}",
            "save the file anew",
        )


@rule(
    name="content-digest",
    tier="digests",
    severity=Severity.ERROR,
    premise=Premise(members=("/digests",), rules=("dimensions",)),
    cost="one pass over the whole file",
    summary="the content digest at the root is that of the physics in the file",
)
def content_digest(file: Inspection) -> Iterator[Remark]:
    stored = file.attribute("/", "content_digest")
    computed = file.digests.content_digest_computed
    if stored != computed:
        yield Problem(
            "/@content_digest",
            f"{computed[:16]}..., that of the members",
            f"{str(stored)[:16]}..." if stored else "no such attribute",
            "two files with one content digest hold the same wave function: save the file anew",
        )
    yield Covered("the groups that make up the wave function")
