"""From records to integrals: everything in its place, and what contradicts what."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, NoReturn

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.fcidump.layout import Layout
from qwfx.converters.fcidump.records import Records, Source
from qwfx.converters.fcidump.store import (
    BLOCK_CORE,
    FINE,
    INTERLEAVED,
    NOISE,
    NOT_REAL,
    OUT_OF_RANGE,
    SEPARATOR,
    SLACK,
    SPINS,
    STRANGE,
    UNSEEN,
    WRONG_BLOCK,
    agree,
    locate,
    store,
)
from qwfx.converters.plugin import Progress
from qwfx.errors import ConversionError

__all__ = ["Filled", "fill"]

SMALL = 4096
"""Packed vectors up to this length are always dense."""
COLLECT_DENSELY = 0.3
"""Dense collecting takes less memory than the sparse way if the file has more than this fraction of all integrals (of
complex ones half as many: the others are conjugates)."""

BLOCK_NAMES = (
    "two-electron up-up", "two-electron down-down", "two-electron up-down", "one-electron up", "one-electron down",
    "core energy",
)  # fmt: skip


@dataclass
class Filled:
    """The flat vector of `store.Places`, in full or as positions and values, and what was met on the way."""

    values: NDArray[Any]
    index: NDArray[np.int64] | None
    """Ascending positions of `values` in the flat vector; None if `values` is the flat vector itself."""
    seen_core: bool
    seen_one_body: bool
    seen_two_body: bool
    n_energies: int
    """Records of orbital energies."""
    any_energy: bool
    """Whether one of them is not zero."""
    n_repeated: int
    block: int
    """Blocks that were closed."""

    def part(self, begin: int, end: int) -> NDArray[Any]:
        """Part of the flat vector, in full."""
        if self.index is None:
            return self.values[begin:end]
        part = np.zeros(end - begin, dtype=self.values.dtype)
        first, last = np.searchsorted(self.index, [begin, end])
        part[self.index[first:last] - begin] = self.values[first:last]
        return part


    def at(self, position: NDArray[np.int64]) -> NDArray[Any]:
        """Elements of the flat vector."""
        if self.index is None:
            return np.asarray(self.values[position])
        place = np.minimum(np.searchsorted(self.index, position), len(self.index) - 1)
        return np.where(self.index[place] == position, self.values[place], 0.0)


@dataclass
class _Located:
    records: Records
    place: NDArray[np.int64]
    block: int


def _located(source: Source, layout: Layout) -> Iterator[_Located]:
    """All records with their places. Raises ConversionError with the line of the first that has none."""
    places = layout.places
    offsets = places.offsets
    block, room = 0, 0
    for batch in source.records():
        n = len(batch.index)
        if n > room:
            room = n
            place, turn = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int8)
        row, status, block = locate(
            places.kind, places.n, places.is_complex, offsets, block, layout.last_is_core,
            batch.index, batch.real, batch.imaginary, batch.unit, place[:n], turn[:n],
        )  # fmt: skip
        if status != FINE:
            _misplaced(source, layout, batch, row, status, block)
        yield _Located(batch, place[:n], block)


def _misplaced(source: Source, layout: Layout, batch: Records, row: int, status: int, block: int) -> NoReturn:
    """Say why a record has no place."""
    indices = " ".join(str(i) for i in batch.index[row])
    n = layout.places.n
    top = 2 * n if layout.places.kind == INTERLEAVED else n
    name = BLOCK_NAMES[min(block, BLOCK_CORE)]
    incomplete = "the file is cut off or a block is missing: write it again"
    found, expected, remedy = {
        OUT_OF_RANGE: (f"an index is {batch.index[row].max()}", f"1 to {top}", "mend NORB or the record"),
        STRANGE: (
            f"the indices {indices} mean nothing",
            "i j k l, or i j 0 0, or i 0 0 0, or 0 0 0 0",
            "mend the record",
        ),
        SPINS: (
            f"a pair of {indices} joins an odd (up) and an even (down) spin orbital",
            "spin orbitals, odd ones up and even ones down, and no integral between them",
            "remove UHF from the namelist if the integrals are spin-restricted; other spin orbitals are not supported",
        ),
        WRONG_BLOCK: (
            f"the record {indices} stands in block {block + 1} ({name})",
            "blocks up-up, down-down, up-down of two electrons, up, down of one electron, each closed by 0.0 0 0 0 0",
            incomplete,
        ),
        SEPARATOR: (
            f"the record {indices} behind block {block + 1} ({name}) has the value {batch.real[row]!r}",
            "0.0 0 0 0 0, and one core energy at the end",
            incomplete,
        ),
        NOT_REAL: (
            f"the integral {indices} has the imaginary part {batch.imaginary[row]!r}",
            "a real number, as the symmetry of Hermitian integrals demands",
            "mend the record",
        ),
    }[status]
    raise ConversionError(found, where=source.where(int(batch.place[row])), expected=expected, remedy=remedy)


def _contradiction(source: Source, layout: Layout, position: int) -> NoReturn:
    """Go through the file once more for the first two records of one place that disagree."""
    first: tuple[int, complex, int, str] | None = None
    for located in _located(source, layout):
        batch = located.records
        for row in np.flatnonzero(located.place == position):
            value = complex(batch.real[row], batch.imaginary[row])
            unit, shown = int(batch.unit[row]), " ".join(str(i) for i in batch.index[row])
            if first is None:
                first = source.line(int(batch.place[row])), value, unit, shown
                continue
            same = agree(first[1].real, value.real, first[2], unit) and agree(first[1].imag, value.imag, first[2], unit)
            if not same:
                numbers = (value, first[1]) if layout.places.is_complex else (value.real, first[1].real)
                raise ConversionError(
                    f"{shown} is {numbers[0]!r}, but line {first[0]} says that {first[3]}, the same number, is "
                    f"{numbers[1]!r}",
                    where=source.where(int(batch.place[row])),
                    expected="records of one number that agree to the digits printed",
                    remedy="remove the wrong one, or write the file again",
                )
    raise ConversionError(
        "the file changed while it was read", where=source.name, expected="a file at rest", remedy="read it again"
    )


class _Counts:
    """What kinds of records there are."""

    def __init__(self, offsets: NDArray[np.int64]) -> None:
        self.offsets = offsets
        self.core = self.one = self.two = self.any_energy = False
        self.n_energies = 0

    def take(self, located: _Located) -> None:
        place, records = located.place, located.records
        energy, one, two = (int(x) for x in self.offsets[:3])
        self.two = self.two or bool((place >= two).any())
        few = place[place < two]
        self.one = self.one or bool((few >= one).any())
        self.core = self.core or bool((few == 0).any())
        energies = (place >= energy) & (place < one)
        self.n_energies += int(np.count_nonzero(energies))
        self.any_energy = self.any_energy or bool(records.real[energies].any())


def _close(a: NDArray[Any], b: NDArray[Any], unit: NDArray[Any], other: NDArray[Any]) -> NDArray[np.bool_]:
    """`store.agree` for arrays."""
    return np.asarray(np.abs(a - b) <= 0.5 * SLACK * (unit + other) + NOISE + 1e-15 * np.abs(a))


class _Collected:
    """Places, values and units in the order of the file, for files that have few of all possible integrals."""

    def __init__(self) -> None:
        self.places: list[NDArray[np.int64]] = []
        self.values: list[NDArray[Any]] = []
        self.units: list[NDArray[np.int8]] = []

    def take(self, located: _Located, is_complex: bool) -> None:
        own, records = located.place >= 0, located.records
        self.places.append(located.place[own])
        self.values.append(records.real[own] + 1j * records.imaginary[own] if is_complex else records.real[own])
        self.units.append(records.unit[own])

    def sort_out(self, source: Source, layout: Layout) -> tuple[NDArray[np.int64], NDArray[Any], int]:
        """Places in ascending order, each once, and values; how many records repeat one. What was collected goes."""
        place, value, unit = _joined(self.places), _joined(self.values), _joined(self.units)
        order = np.argsort(place, kind="stable")
        place = place[order]
        fresh = np.empty(len(place), dtype=bool)
        fresh[:1] = True
        np.not_equal(place[1:], place[:-1], out=fresh[1:])
        rows = np.flatnonzero(~fresh)
        if not len(rows):
            return place, value[order], 0
        first = np.searchsorted(place, place[rows])  # records that repeat one are compared with the first of that place
        a, b = value[order[first]], value[order[rows]]
        units = 10.0 ** unit[order[first]].astype(np.float64), 10.0 ** unit[order[rows]].astype(np.float64)
        apart = ~(_close(a.real, b.real, *units) & _close(a.imag, b.imag, *units))
        if apart.any():
            _contradiction(source, layout, int(place[rows[np.argmax(apart)]]))
        return place[fresh], value[order[fresh]], len(rows)


def _joined(parts: list[Any]) -> NDArray[Any]:
    """The parts in one array; the list is emptied."""
    whole = np.concatenate(parts)
    parts.clear()
    return whole


def fill(
    source: Source, layout: Layout, progress: Progress | None = None, restart_if_unclear: bool = False
) -> Filled | None:
    """Put all records in their places. Raises ConversionError with the line of what is wrong.

    With `restart_if_unclear`, None is returned where a record of zero indices is not the last one or a value is
    complex: then the file may mean something else than `layout`.
    """
    places = layout.places
    offsets = places.offsets
    total, two = int(offsets[-1]), int(offsets[2])
    dtype = np.complex128 if places.is_complex else np.float64
    counts = _Counts(offsets)
    flat: NDArray[Any] | None = None
    units = np.zeros(0, dtype=np.int8)
    collected = _Collected()
    repeated = block = 0
    decided = False
    for located in _located(source, layout):
        batch, place, block = located.records, located.place, located.block
        if not decided:
            decided = True
            expected = len(place) / max(batch.done, 1e-9)
            if total - two <= SMALL or expected > COLLECT_DENSELY * total / (1 + places.is_complex):
                flat, units = np.zeros(total, dtype=dtype), np.full(total, UNSEEN, dtype=np.int8)
        if restart_if_unclear and (counts.core or (place[:-1] == 0).any() or batch.imaginary.any()):
            return None
        counts.take(located)
        if progress:
            progress("reading integrals", batch.done)
        if flat is None:
            collected.take(located, places.is_complex)
            continue
        view = flat.view(np.float64).reshape(total, -1)
        again, row = store(view, units, place, batch.real, batch.imaginary, batch.unit)
        if row >= 0:
            _contradiction(source, layout, int(place[row]))
        repeated += again
    index: NDArray[np.int64] | None = None
    if flat is None:
        index, flat, repeated = collected.sort_out(source, layout)
    return Filled(
        flat, index, counts.core, counts.one, counts.two, counts.n_energies, counts.any_energy, repeated, block
    )
