"""Tier *consistency*: spin strings and the sparse matrix of the CI expansion, in one pass and bounded memory."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.reference.strings import (
    allowed_bits,
    beyond_orbitals,
    popcount,
    precedes,
    wrong_column,
    wrong_count,
    wrong_order,
)
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every

__all__ = ["row_slices"]

TRIAL: tuple[Purpose, ...] = ("trial",)
WORD = 64
STRINGS = ("/expansion/up_strings", "/expansion/down_strings")
MATRIX = ("/expansion/row_start", "/expansion/columns", *STRINGS)
ONE_PASS_STRINGS = "one pass over the strings"
ONE_PASS_MATRIX = "one pass over row_start and columns"

def _words(block: NDArray[Any]) -> NDArray[np.uint64]:
    return np.ascontiguousarray(block, dtype=np.uint64)


def _spin_of(member: str) -> str:
    return "up" if member.endswith("up_strings") else "down"


@rule(
    name="string-electrons",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=(*STRINGS, "/system"), rules=("electron-count",)),
    cost=ONE_PASS_STRINGS,
    purposes=TRIAL,
    summary="each spin string occupies as many orbitals as there are electrons of its spin",
)
def string_electrons(file: Inspection) -> Iterator[Remark]:
    for member in STRINGS:
        spin = _spin_of(member)
        electrons = file.integer("/system", f"n_{spin}")
        bad, first, seen = 0, (0, 0), 0
        for start, block in file.blocks(member):
            counts = popcount(_words(block))
            wrong = counts != electrons
            if wrong.any() and not bad:
                k = int(np.argmax(wrong))
                first = (start + k, int(counts[k]))
            bad += int(wrong.sum())
            seen += len(block)
        if bad:
            yield Problem.of(wrong_count(spin, first[0], electrons, first[1]), bad)
        yield Covered(every(seen, f"{spin} string"))


@rule(
    name="string-order",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=STRINGS),
    cost=ONE_PASS_STRINGS,
    purposes=TRIAL,
    summary="spin strings are unique and strictly ascending",
)
def string_order(file: Inspection) -> Iterator[Remark]:
    for member in STRINGS:
        bad, first, seen = 0, (0, False), 0
        for start, block in file.blocks(member, overlap=1):
            words = _words(block)
            wrong = ~precedes(words[:-1], words[1:])
            if wrong.any() and not bad:
                k = int(np.argmax(wrong))
                first = (start + k + 1, bool(np.array_equal(words[k], words[k + 1])))
            bad += int(wrong.sum())
            seen = start + len(block)
        if bad:
            yield Problem.of(wrong_order(_spin_of(member), *first), bad)
        yield Covered(every(seen, f"{_spin_of(member)} string"))


@rule(
    name="string-range",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=(*STRINGS, "/orbitals"), rules=("named-sets",)),
    cost=ONE_PASS_STRINGS,
    purposes=TRIAL,
    summary="strings occupy orbitals that exist, in as many words as that takes",
)
def string_range(file: Inspection) -> Iterator[Remark]:
    sizes = {}
    for member in STRINGS:
        spin = _spin_of(member)
        name = file.attribute("/expansion", f"{spin}_set")
        if name not in file.orbital_sets or not file.usable(f"/orbitals/{name}/coefficients"):
            continue
        n_orbitals = file.shape(f"/orbitals/{name}/coefficients")[0]
        n_words, sizes[name] = file.shape(member)[1], n_orbitals
        allowed = allowed_bits(n_orbitals, n_words)
        bad, first = 0, 0
        for start, block in file.blocks(member):
            beyond = (_words(block) & ~allowed).any(axis=1)
            if beyond.any() and not bad:
                first = start + int(np.argmax(beyond))
            bad += int(beyond.sum())
        if bad:
            yield Problem.of(beyond_orbitals(spin, first, n_orbitals, name), bad)
        yield Covered(every(file.shape(member)[0], f"{spin} string"))
    enough = max([1, *(-(-n_orbitals // WORD) for n_orbitals in sizes.values())])
    n_words = file.shape(STRINGS[0])[1]
    if sizes and n_words != enough:
        yield Problem(
            "/expansion/up_strings",
            f"strings of {enough} words of 64 bits, for {max(sizes.values())} orbitals",
            f"{n_words} words",
            "use as many words as the larger of the two sets takes",
        )


@rule(
    name="row-offsets",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=MATRIX),
    cost="one pass over row_start",
    purposes=TRIAL,
    summary="row_start begins with 0, does not fall, and ends with the number of entries",
)
def row_offsets(file: Inspection) -> Iterator[Remark]:
    member = "/expansion/row_start"
    entries = file.shape("/expansion/columns")[0]
    remedy = "row I owns the entries row_start[I] up to, not including, row_start[I+1]"
    falls, first, last = 0, (0, 0, 0), 0
    for start, block in file.blocks(member, overlap=1):
        if start == 0 and len(block) and block[0] != 0:
            yield Problem(at(member, 0), "0", str(block[0]), remedy)
        down = block[1:] < block[:-1]
        if down.any() and not falls:
            k = int(np.argmax(down))
            first = (start + k + 1, int(block[k]), int(block[k + 1]))
        falls += int(down.sum())
        last = int(block[-1])
    if falls:
        yield Problem(
            at(member, first[0]), f"{first[1]} or more, the offset before it", str(first[2]), remedy, count=falls
        )
    if last != entries:
        yield Problem(at(member, file.shape(member)[0] - 1), f"{entries}, the number of entries", str(last), remedy)
    yield Covered(every(file.shape(member)[0], "offset"))


ROWS_AT_A_TIME = 1 << 20
"""Rows, and entries, of the sparse matrix that are held at once."""


@dataclass(frozen=True)
class Piece:
    """A part of the sparse matrix: some rows, and some of their entries."""

    first_row: int
    offsets: NDArray[np.int64]
    """row_start of these rows and one more."""
    begin: int
    """Number of the first of the entries."""
    columns: NDArray[np.int64]
    repeated: int
    """Entries at the beginning that the piece before had too, so that neighbours can be compared: 0 or 1."""


def row_slices(file: Inspection) -> Iterator[Piece]:
    """The sparse matrix in pieces. Rows with more entries than `ROWS_AT_A_TIME` come in several pieces."""
    size = ROWS_AT_A_TIME
    n_rows = file.shape("/expansion/row_start")[0] - 1
    for first in range(0, n_rows, size):
        stop = min(first + size, n_rows)
        offsets = np.asarray(file.raw.read("/expansion/row_start", first, stop + 1), dtype=np.int64)
        low, high = int(offsets[0]), int(offsets[-1])
        for start in range(low, max(high, low + 1), size):
            begin = max(low, start - 1)
            columns = np.asarray(file.raw.read("/expansion/columns", begin, min(start + size, high)), dtype=np.int64)
            yield Piece(first, offsets, begin, columns, start - begin)


@rule(
    name="column-order",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=MATRIX, rules=("row-offsets",)),
    cost=ONE_PASS_MATRIX,
    purposes=TRIAL,
    summary="columns are strictly ascending within a row and name down strings that exist",
)
def column_order(file: Inspection) -> Iterator[Remark]:
    n_down = file.shape("/expansion/down_strings")[0]
    outside = disorder = entries = 0
    first_outside, first_disorder = (0, 0), (0, 0, 0)
    for piece in row_slices(file):
        begin, columns = piece.begin, piece.columns
        beyond = (columns < 0) | (columns >= n_down)
        beyond[: piece.repeated] = False
        if beyond.any() and not outside:
            k = int(np.argmax(beyond))
            first_outside = (begin + k, int(columns[k]))
        outside += int(beyond.sum())
        starts_row = np.zeros(len(columns) + 1, dtype=bool)
        inside = piece.offsets[(piece.offsets >= begin) & (piece.offsets <= begin + len(columns))]
        starts_row[inside - begin] = True
        wrong = (columns[1:] <= columns[:-1]) & ~starts_row[1:-1]
        if wrong.any() and not disorder:
            k = int(np.argmax(wrong))
            first_disorder = (begin + k + 1, int(columns[k]), int(columns[k + 1]))
        disorder += int(wrong.sum())
        entries = begin + len(columns)
    if outside:
        yield Problem.of(wrong_column(first_outside[0], n_down, first_outside[1], None), outside)
    if disorder:
        index, before, here = first_disorder
        yield Problem.of(wrong_column(index, n_down, here, before), disorder)
    yield Covered(every(entries, "entry"))


@rule(
    name="unused-strings",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=MATRIX, rules=("row-offsets", "column-order")),
    cost=ONE_PASS_MATRIX,
    purposes=TRIAL,
    summary="each string belongs to an entry",
)
def unused_strings(file: Inspection) -> Iterator[Remark]:
    used = np.zeros(file.shape("/expansion/down_strings")[0], dtype=bool)
    empty, first_empty, previous = 0, 0, -1
    for piece in row_slices(file):
        used[piece.columns] = True
        if piece.first_row != previous:
            previous = piece.first_row
            idle = np.flatnonzero(np.diff(piece.offsets) == 0)
            if len(idle) and not empty:
                first_empty = previous + int(idle[0])
            empty += len(idle)
    remedy = "leave out strings that no entry uses: each costs a determinant in every step of a run"
    if empty:
        yield Problem(
            at("/expansion/up_strings", first_empty),
            "an entry in the row of each up string",
            "an empty row",
            remedy,
            count=empty,
        )
    if not used.all():
        yield Problem(
            at("/expansion/down_strings", int(np.argmin(used))),
            "a column for each down string",
            "a string that no entry uses",
            remedy,
            count=int((~used).sum()),
        )
    yield Measured(f"{empty} up and {int((~used).sum())} down strings unused")
