"""A file under inspection: raw arrays for the rules, read in blocks, with what earlier rules said of them."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import suppress
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Finding, Severity
from qwfx.model import Basis
from qwfx.rules.registry import PremiseError, foundation

if TYPE_CHECKING:
    from qwfx.schema_check import SchemaProblem
    from qwfx.storage import DigestCheck

__all__ = ["BLOCK_BYTES", "Inspection", "RawFile", "member_of", "overlaps"]

BLOCK_BYTES = 1 << 24
"""Bytes read at a time from a member: bounds the memory of every streaming rule."""
KEEP_BYTES = 1 << 22
"""Members up to this size are kept after the first reading."""


class RawFile(Protocol):
    """What the rules need of an open file (`qwfx.storage.open_raw` returns it)."""

    @property
    def path(self) -> Path: ...

    @property
    def outline(self) -> Mapping[str, Any]: ...

    def has(self, member: str) -> bool: ...

    def members(self, group: str) -> Any: ...

    def attributes(self, group: str) -> Mapping[str, Any]: ...

    def shape(self, member: str) -> tuple[int, ...]: ...

    def read(self, member: str, start: int | None = None, stop: int | None = None, axis: int = 0) -> NDArray[Any]: ...


def member_of(where: str) -> str:
    """The path of the member that a location names, without index and attribute."""
    path = where.partition("[")[0].partition("@")[0]
    return path.rstrip("/") or "/"


def overlaps(a: str, b: str) -> bool:
    """Whether one of two member paths contains the other. The root stands for itself only."""
    if "/" in (a, b):
        return a == b
    return a == b or a.startswith(b + "/") or b.startswith(a + "/")


class Inspection:
    """One file, one purpose: reading with a cache, and the damage found so far."""

    def __init__(
        self, raw: RawFile, purpose: str = "trial", progress: Callable[[str, float], None] | None = None
    ) -> None:
        self.raw = raw
        self.purpose = purpose
        self.progress = progress
        self._kept: dict[str, NDArray[Any]] = {}
        self._damage: dict[str, set[str]] = {}
        self.schema_problems: tuple[SchemaProblem, ...] | None = None
        """Filled by the first rule of the structure tier."""

    # -- what earlier rules found ----------------------------------------------------------------------------

    def record(self, rule: str, findings: tuple[Finding, ...]) -> None:
        """Remember which members the errors of `rule` are about."""
        self._damage[rule] = {member_of(f.where) for f in findings if f.severity is Severity.ERROR}

    def damaged(self, member: str, rules: frozenset[str] | None = None) -> str:
        """The first rule (of `rules`, or of all so far) with an error about `member`, or an empty string."""
        for name, paths in self._damage.items():
            if (rules is None or name in rules) and any(overlaps(member, path) for path in paths):
                return name
        return ""

    def usable(self, member: str, *rules: str) -> bool:
        """Whether `member` is there and free of errors from `rules` (and those they rest on; default: ``schema``)."""
        names = rules or ("dimensions",)
        base = frozenset(names).union(*(foundation(name) for name in names))
        return self.raw.has(member) and not self.damaged(member, base)

    # -- reading ---------------------------------------------------------------------------------------------

    def has(self, member: str) -> bool:
        """Whether the file has this group or data set."""
        return self.raw.has(member)

    def members(self, group: str) -> tuple[str, ...]:
        """Names of the members of a group, sorted; none if the group is absent."""
        return tuple(sorted(self.raw.members(group))) if self.raw.has(group) else ()

    def shape(self, member: str) -> tuple[int, ...]:
        """Shape of a data set."""
        return tuple(self.raw.shape(member))

    def attribute(self, group: str, name: str, default: Any = None) -> Any:
        """An attribute of a group, or `default`."""
        return self.raw.attributes(group).get(name, default) if self.raw.has(group) else default

    def integer(self, group: str, name: str) -> int:
        """An integer attribute. The schema rule has seen to its kind."""
        return int(self.attribute(group, name))

    def read(self, member: str) -> NDArray[Any]:
        """The whole of a data set, kept if small."""
        if member not in self._kept:
            array = np.asarray(self.raw.read(member))
            if array.nbytes > KEEP_BYTES:
                return array
            self._kept[member] = array
        return self._kept[member]

    def strings(self, member: str) -> list[str]:
        """A data set of strings."""
        return [str(x) for x in np.asarray(self.read(member)).ravel()]

    def blocks(self, member: str, overlap: int = 0) -> Iterator[tuple[int, NDArray[Any]]]:
        """A data set in slices along axis 0 of at most about `BLOCK_BYTES`, each with the index of its first row.

        With `overlap` > 0 each slice after the first starts so many rows earlier, for tests of neighbours.
        """
        shape = self.shape(member)
        if not shape:
            yield 0, np.asarray(self.raw.read(member))
            return
        width = 16 * int(np.prod(shape[1:], dtype=np.int64))
        rows = max(1, BLOCK_BYTES // max(width, 1))
        for start in range(0, shape[0], rows):
            if self.progress is not None:
                self.progress(f"reading {member}", start / shape[0])
            first = max(0, start - overlap)
            yield first, np.asarray(self.raw.read(member, first, min(start + rows, shape[0])))

    def pieces(self, member: str) -> Iterator[tuple[tuple[int, ...], NDArray[Any]]]:
        """A data set cut along its longest axis, each part with the index of its first element."""
        shape = self.shape(member)
        if not shape:
            yield (), np.asarray(self.raw.read(member))
            return
        axis = int(np.argmax(shape))
        width = 16 * int(np.prod(shape, dtype=np.int64)) // max(shape[axis], 1)
        step = max(1, BLOCK_BYTES // max(width, 1))
        for start in range(0, shape[axis], step):
            if self.progress is not None:
                self.progress(f"reading {member}", start / shape[axis])
            origin = tuple(start if k == axis else 0 for k in range(len(shape)))
            yield origin, np.asarray(self.raw.read(member, start, min(start + step, shape[axis]), axis))

    # -- pieces that several rules need ----------------------------------------------------------------------

    @cached_property
    def orbital_sets(self) -> tuple[str, ...]:
        """Names of the orbital sets, sorted."""
        return self.members("/orbitals")

    def spin(self, name: str) -> str:
        """Spin word of an orbital set."""
        return str(self.attribute(f"/orbitals/{name}", "spin", ""))

    def datasets(self, group: str = "/") -> Iterator[tuple[str, Mapping[str, Any]]]:
        """All data sets below `group` with their entry of the outline, depth first by name."""
        node: Mapping[str, Any] = self.raw.outline
        for part in group.strip("/").split("/"):
            if part:
                node = node["members"][part]
        yield from _walk(node, "" if group == "/" else group.rstrip("/"))

    @cached_property
    def basis(self) -> Basis:
        """The basis as a model; call only where its premise holds."""
        return Basis(
            radial=self.attribute("/basis", "radial"),
            shell_center=self.read("/basis/shell_center").astype(np.int32),
            shell_l=self.read("/basis/shell_l").astype(np.int32),
            shell_monomial=self.read("/basis/shell_monomial").astype(np.int8),
            primitive_start=self.read("/basis/primitive_start").astype(np.int64),
            exponents=self.read("/basis/exponents").astype(np.float64),
            coefficients=self.read("/basis/coefficients").astype(np.float64),
            powers=self.read("/basis/powers").astype(np.int32) if self.has("/basis/powers") else None,
        )

    @cached_property
    def positions(self) -> NDArray[np.float64]:
        """(A, 3) bohr."""
        return self.read("/system/positions").astype(np.float64)

    @cached_property
    def digests(self) -> DigestCheck:
        """The stored digests against those of the bytes."""
        from qwfx.storage import check_digests

        return check_digests(self.raw.path, progress=self.progress)

    @cached_property
    def overlap(self) -> NDArray[np.float64]:
        """(F, F) analytic overlap of the functions."""
        n = self.basis.n_functions
        if n > OVERLAP_LIMIT:
            raise PremiseError(f"{n} functions; the overlap matrix is formed for up to {OVERLAP_LIMIT}")
        if self.progress is not None:
            self.progress("overlap integrals", 0.0)
        from qwfx.rules.evaluator import overlap

        return np.asarray(overlap(self.basis, self.positions, self.progress))


OVERLAP_LIMIT = 8000
"""Functions up to which the overlap matrix is formed (0.5 GB)."""


def _walk(node: Mapping[str, Any], path: str) -> Iterator[tuple[str, Mapping[str, Any]]]:
    for name, child in sorted(node.get("members", {}).items()):
        below = f"{path}/{name}"
        if child.get("kind") == "dataset":
            yield below, child
        else:
            with suppress(RecursionError):
                yield from _walk(child, below)
