"""From records to integrals: which spins the indices mean, where each value goes, what contradicts what."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.fcidump.header import Header
from qwfx.converters.fcidump.records import Records, Survey, batches, line_at
from qwfx.converters.plugin import Progress
from qwfx.errors import ConversionError
from qwfx.kernels.packing import positions
from qwfx.model import TwoBody
from qwfx.reference.packing import packed_length

__all__ = ["Integrals", "Layout", "assemble", "choose_layout"]

DENSE_FACTOR = 8
"""Integrals are stored densely unless that takes more than this many times the values that the file has."""
NOISE = 1e-10
"""hartree; records of one integral that differ by less than this agree."""
RESTRICTED, INTERLEAVED, BLOCKS = "restricted", "interleaved", "blocks"
PAIRS = {"both": True, "up_up": True, "down_down": True, "up_down": False}
"""Spin pair -> whether its spins are alike."""


@dataclass(frozen=True)
class Layout:
    """How the file lays out spins."""

    kind: str
    n_orbitals: int
    """Spatial orbitals."""
    is_complex: bool
    note: str = ""


def _error(where: str, found: str, expected: str, remedy: str) -> ConversionError:
    return ConversionError(found, where=where, expected=expected, remedy=remedy)


def choose_layout(header: Header, seen: Survey, name: str) -> Layout:
    """Tell the layouts apart. Raises ConversionError where the file fits none."""
    n, largest = header.n_orbitals, seen.largest_index
    is_complex = seen.is_complex and seen.any_imaginary
    zero_imaginary = seen.is_complex and not is_complex
    note = "complex records whose imaginary parts are all zero: stored as real" if zero_imaginary else ""
    if seen.n_zero >= 5 or (header.spin_resolved and seen.n_zero >= 2):
        if seen.n_zero not in (5, 6):
            raise _error(
                f"{name}",
                f"{seen.n_zero} records have only zero indices",
                "6 for spin-resolved blocks: one behind each of five blocks, and the core energy",
                "the file is cut off or a block is missing: write it again",
            )
        if largest > n:
            raise _out_of_range(name, n, largest)
        return Layout(BLOCKS, n, is_complex, note or "spin-resolved, in blocks")
    if header.spin_resolved and not seen.any_mixed:
        kind = "spin-resolved, interleaved; NORB counts "
        if largest <= n and n % 2 == 0:
            return Layout(INTERLEAVED, n // 2, is_complex, note or kind + "spin orbitals")
        if largest <= 2 * n:
            return Layout(INTERLEAVED, n, is_complex, note or kind + "spatial orbitals")
    if largest > n:
        raise _out_of_range(name, n, largest)
    if header.spin_resolved:
        note = "the namelist says spin-resolved, but indices of both parities are joined: read as spin-restricted"
    return Layout(RESTRICTED, n, is_complex, note)


def _out_of_range(name: str, n: int, largest: int) -> ConversionError:
    return _error(name, f"an index is {largest}", f"1 to NORB = {n}", "mend NORB or the record")


@dataclass
class _Table:
    """One packed vector or matrix being filled."""

    size: int
    dense: bool
    dtype: Any
    values: NDArray[Any] = field(init=False)
    record: NDArray[np.int64] = field(init=False)
    parts: list[tuple[NDArray[np.int64], NDArray[Any], NDArray[np.int64]]] = field(default_factory=list)

    def __post_init__(self) -> None:
        if self.dense:
            self.values = np.zeros(self.size, dtype=self.dtype)
            self.filled = np.zeros(self.size, dtype=bool)


@dataclass
class Integrals:
    """Everything that the records say."""

    one_body: dict[str, NDArray[Any]]
    two_body: dict[str, TwoBody]
    orbital_energies: dict[str, NDArray[np.float64]]
    core_energy: float | None
    n_repeated: int
    """Records that repeat an earlier one."""


class _Assembler:
    def __init__(self, text: NDArray[np.uint8], start: int, name: str, layout: Layout, seen: Survey) -> None:
        self.text, self.start, self.name, self.layout, self.seen = text, start, name, layout, seen
        n = layout.n_orbitals
        self.n = n
        self.dtype = np.complex128 if layout.is_complex else np.float64
        restricted = layout.kind == RESTRICTED
        self.spins = ("both",) if restricted else ("up", "down")
        self.pairs = ("both",) if restricted else ("up_up", "up_down", "down_down")
        wanted = {pair: packed_length(self.packing(pair), n, PAIRS[pair]) for pair in self.pairs}
        self.dense = sum(wanted.values()) <= DENSE_FACTOR * max(seen.n_two_body, 1 << 16)
        self.two = {pair: _Table(size, self.dense, self.dtype) for pair, size in wanted.items()}
        self.one = {spin: _Table(n * n, True, self.dtype) for spin in self.spins}
        self.energy = {spin: _Table(n, True, np.float64) for spin in self.spins}
        self.any_energy = False
        self.core: float | None = None
        self.core_line = 0
        self.block = 0
        self.n_repeated = 0
        # The last printed digit may differ by one between two records of the same integral, and programs compute
        # integrals to about 1e-12 hartree, each index order with its own rounding (common practice).
        self.last_digit = 2.0 * 10.0 ** (1 - seen.digits)

    def apart(self, one: Any, other: Any) -> Any:
        """Whether numbers differ by more than printing and rounding explain."""
        return np.abs(one - other) > np.maximum(self.last_digit * np.maximum(np.abs(one), np.abs(other)), NOISE)

    def packing(self, pair: str) -> str:
        if self.layout.is_complex:
            return "pairs"
        return "eightfold" if PAIRS[pair] else "fourfold"

    def take(self, batch: Records) -> None:
        """Sort one batch of records into the tables."""
        index = batch.index
        zero = ~index.any(axis=1)
        if self.layout.kind != BLOCKS:
            self.sort(batch, np.ones(len(index), dtype=bool))
            return
        ends = np.flatnonzero(zero)
        begin = 0
        for end in [*ends.tolist(), len(index)]:
            own = np.zeros(len(index), dtype=bool)
            own[begin:end] = True
            self.sort(batch, own)
            if end < len(index):
                self.separator(batch, end)
            begin = end + 1

    def separator(self, batch: Records, row: int) -> None:
        value = float(batch.real[row])
        if self.block == 5 or (self.block == 4 and self.seen.n_zero == 5 and value != 0.0):
            self.set_core(value, batch, row)  # in the second case the core energy itself ends the last block
        elif value != 0.0:
            raise _error(
                self.where(batch, row),
                f"the record behind block {self.block + 1} of five has the value {value}",
                "0.0 0 0 0 0",
                "the file is cut off or a block is missing: write it again",
            )
        self.block += 1

    def where(self, batch: Records, row: int) -> str:
        return f"{self.name}:{line_at(self.text, int(batch.place[row]))}"

    def set_core(self, value: float, batch: Records, row: int) -> None:
        if self.core is not None and self.apart(value, self.core):
            raise _error(
                self.where(batch, row),
                f"the core energy is {value!r}, but line {self.core_line} says {self.core!r}",
                "one core energy",
                "remove the wrong record",
            )
        self.n_repeated += self.core is not None
        self.core, self.core_line = value, line_at(self.text, int(batch.place[row]))

    def sort(self, batch: Records, own: NDArray[np.bool_]) -> None:
        """Records of one block (all of them, where there are no blocks)."""
        index = batch.index
        value = batch.real + 1j * batch.imaginary if self.layout.is_complex else batch.real
        some = index != 0
        kinds = {
            "two": some.all(axis=1),
            "one": some[:, :2].all(axis=1) & ~some[:, 2:].any(axis=1),
            "energy": some[:, 0] & ~some[:, 1:].any(axis=1),
            "zero": ~some.any(axis=1),
        }
        strange = own & ~np.any(list(kinds.values()), axis=0)
        if strange.any():
            row = int(np.flatnonzero(strange)[0])
            raise _error(
                self.where(batch, row),
                f"the indices {' '.join(map(str, index[row]))} mean nothing",
                "i j k l, or i j 0 0, or i 0 0 0, or 0 0 0 0",
                "mend the record",
            )
        for row in np.flatnonzero(own & kinds["zero"]):
            self.set_core(float(batch.real[row]), batch, int(row))
        for kind in ("two", "one", "energy"):
            rows = np.flatnonzero(own & kinds[kind])
            if len(rows):
                self.check_block(batch, rows, kind)
                getattr(self, f"put_{kind}")(batch, rows, index[rows].astype(np.int64) - 1, value[rows])

    def check_block(self, batch: Records, rows: NDArray[np.int64], kind: str) -> None:
        """In the layout by blocks two-body integrals fill blocks 1 to 3, the rest blocks 4 and 5."""
        if self.layout.kind == BLOCKS and (self.block < 3) != (kind == "two"):
            raise _error(
                self.where(batch, int(rows[0])),
                f"a record of {'two' if kind == 'two' else 'one'} electrons stands in block {self.block + 1}",
                "three blocks of two-electron integrals, then two of one-electron integrals",
                "the file is cut off or a block is missing: write it again",
            )

    def spin_of(self, orbital: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Spatial orbital and spin (0 up, 1 down) of interleaved indices from 0."""
        return orbital // 2, orbital % 2

    def put_two(self, batch: Records, rows: NDArray[np.int64], index: NDArray[np.int64], value: NDArray[Any]) -> None:
        if self.layout.kind == RESTRICTED:
            self.put_pair("both", batch, rows, index, value)
        elif self.layout.kind == BLOCKS:
            self.put_pair(("up_up", "down_down", "up_down")[self.block], batch, rows, index, value)
        else:
            spatial, spin = self.spin_of(index)
            self.same_spin(batch, rows, spin[:, 0] != spin[:, 1], value)
            self.same_spin(batch, rows, spin[:, 2] != spin[:, 3], value)
            for pair, one, other in (("up_up", 0, 0), ("down_down", 1, 1), ("up_down", 0, 1), ("up_down", 1, 0)):
                own = (spin[:, 0] == one) & (spin[:, 2] == other) & (spin[:, 1] == one) & (spin[:, 3] == other)
                order = [2, 3, 0, 1] if (one, other) == (1, 0) else [0, 1, 2, 3]
                self.put_pair(pair, batch, rows[own], spatial[own][:, order], value[own])

    def same_spin(self, batch: Records, rows: NDArray[np.int64], bad: NDArray[np.bool_], value: NDArray[Any]) -> None:
        bad = bad & (value != 0)
        if bad.any():
            raise _error(
                self.where(batch, int(rows[np.flatnonzero(bad)[0]])),
                "a pair joins an up and a down orbital",
                "both indices of a pair odd, or both even",
                "mend the record",
            )

    def put_pair(
        self, pair: str, batch: Records, rows: NDArray[np.int64], index: NDArray[np.int64], value: NDArray[Any]
    ) -> None:
        packing, like = self.packing(pair), PAIRS[pair]
        place = positions(packing, self.n, index, like)
        self.put(self.two[pair], batch, rows, place, value)
        if packing == "pairs":  # (qp|sr) is the complex conjugate of (pq|rs)
            again = positions(packing, self.n, index[:, [1, 0, 3, 2]], like)
            self.put(self.two[pair], batch, rows, again, np.conj(value), count=False)

    def put_one(self, batch: Records, rows: NDArray[np.int64], index: NDArray[np.int64], value: NDArray[Any]) -> None:
        i, j = index[:, 0], index[:, 1]
        if self.layout.kind == INTERLEAVED:
            spatial, spin = self.spin_of(index[:, :2])
            self.same_spin(batch, rows, spin[:, 0] != spin[:, 1], value)
            groups = [(s, spin[:, 0] == s, spatial[:, 0], spatial[:, 1]) for s in (0, 1)]
        else:
            groups = [(max(self.block - 3, 0) if self.layout.kind == BLOCKS else 0, np.ones(len(i), bool), i, j)]
        for s, own, p, q in groups:
            table = self.one[self.spins[s]]
            self.put(table, batch, rows[own], (p * self.n + q)[own], value[own])
            self.put(table, batch, rows[own], (q * self.n + p)[own], np.conj(value[own]), count=False)

    def put_energy(
        self, batch: Records, rows: NDArray[np.int64], index: NDArray[np.int64], value: NDArray[Any]
    ) -> None:
        self.any_energy = self.any_energy or bool(np.any(value != 0))
        i = index[:, 0]
        for s, spin in enumerate(self.spins):
            if self.layout.kind == INTERLEAVED:
                own, place = i % 2 == s, i // 2
            else:
                own = np.full(len(i), self.layout.kind == RESTRICTED or self.block - 3 == s)
                place = i
            self.put(self.energy[spin], batch, rows[own], place[own], value[own].real)

    def put(
        self, table: _Table, batch: Records, rows: NDArray[np.int64], place: NDArray[np.int64], value: NDArray[Any],
        count: bool = True,
    ) -> None:  # fmt: skip
        """Values into a table; a place that is filled already must hold the same."""
        if not len(rows):
            return
        if not table.dense:
            table.parts.append((place, value.copy(), batch.place[rows].copy()))
            return
        known = table.filled[place]
        same_batch = len(np.unique(place)) < len(place)
        if known.any() or same_batch:
            self.put_carefully(table, batch, rows, place, value, count)
            return
        table.values[place] = value
        table.filled[place] = True

    def put_carefully(
        self, table: _Table, batch: Records, rows: NDArray[np.int64], place: NDArray[np.int64], value: NDArray[Any],
        count: bool,
    ) -> None:  # fmt: skip
        order = np.argsort(place, kind="stable")
        spot, number, row = place[order], value[order], rows[order]
        first = np.concatenate([[True], spot[1:] != spot[:-1]])
        known = table.filled[spot]
        fresh = first & ~known
        table.values[spot[fresh]] = number[fresh]
        table.filled[spot[fresh]] = True
        told = table.values[spot]
        apart = self.apart(told, number)
        if apart.any():
            at = int(np.flatnonzero(apart)[0])
            self.contradiction(batch, int(row[at]), told[at], number[at])
        if count:
            self.n_repeated += int((~fresh).sum())

    def contradiction(self, batch: Records, row: int, told: Any, number: Any) -> None:
        """Say which earlier record says something else: found by going through the file once more."""
        wanted, shown = self.key(batch.index[row]), " ".join(map(str, batch.index[row]))
        line = self.where(batch, row)
        for earlier in batches(self.text, self.start, self.name):
            for k in range(len(earlier.index)):
                if earlier.place[k] >= batch.place[row]:
                    break
                if self.key(earlier.index[k]) == wanted and earlier.real[k] == np.real(told):
                    first = line_at(self.text, int(earlier.place[k]))
                    raise _error(
                        line,
                        f"the integral {shown} is {number}, but line {first} says {told}",
                        "records of one integral that agree",
                        "remove the wrong record",
                    )
        raise _error(line, f"an integral is {number} here, {told} elsewhere", "one value", "remove the wrong record")

    def key(self, index: NDArray[np.int32]) -> frozenset[Any]:
        """What records of one integral have in common, in all the index orders that are equivalent."""
        i, j, k, l = (int(x) for x in index)
        return frozenset([frozenset([i, j]), frozenset([k, l])])

    def finish(self) -> Integrals:
        two = {}
        for pair, table in self.two.items():
            two[pair] = TwoBody(table.values) if table.dense else self.sparse(table)
        return Integrals(
            {spin: table.values.reshape(self.n, self.n) for spin, table in self.one.items()},
            two,
            {spin: table.values for spin, table in self.energy.items()} if self.any_energy else {},
            self.core,
            self.n_repeated,
        )

    def sparse(self, table: _Table) -> TwoBody:
        if not table.parts:
            return TwoBody(np.zeros(0, dtype=self.dtype), np.zeros(0, dtype=np.uint64))
        place, value, byte = (np.concatenate([part[k] for part in table.parts]) for k in range(3))
        table.parts.clear()
        order = np.argsort(place, kind="stable")
        place, value, byte = place[order], value[order], byte[order]
        first = np.concatenate([[True], place[1:] != place[:-1]])
        told = value[np.maximum.accumulate(np.where(first, np.arange(len(place)), 0))]
        apart = self.apart(told, value)
        if apart.any():
            at = int(np.flatnonzero(apart)[0])
            start = int(np.flatnonzero(first[: at + 1])[-1])
            raise _error(
                f"{self.name}:{line_at(self.text, int(byte[at]))}",
                f"an integral is {value[at]}, but line {line_at(self.text, int(byte[start]))} says {told[at]}",
                "records of one integral that agree",
                "remove the wrong record",
            )
        self.n_repeated += int((~first).sum())
        keep = first & (value != 0)
        return TwoBody(value[keep], place[keep].astype(np.uint64))


def assemble(
    text: NDArray[np.uint8], start: int, name: str, layout: Layout, seen: Survey, progress: Progress | None = None
) -> Integrals:
    """Put all records in their places. Raises ConversionError with the line of what is wrong."""
    work = _Assembler(text, start, name, layout, seen)
    for batch in batches(text, start, name):
        if progress:
            progress("integrals", batch.first / max(seen.n_records, 1))
        work.take(batch)
    if layout.kind == BLOCKS and work.block < 5:
        raise _error(
            f"{name}:{line_at(text, len(text))}",
            f"the file ends in block {work.block + 1} of five",
            "five blocks, each closed by 0.0 0 0 0 0",
            "the file is cut off: write it again",
        )
    return work.finish()
