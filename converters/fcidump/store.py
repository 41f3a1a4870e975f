"""Where each record belongs, and putting it there: compiled.

All numbers of a file go into one flat vector: the core energy; the orbital energies of each spin; the lower triangle
of each one-electron matrix; the packed two-electron integrals of each pair of spins (see `qwfx.reference.packing`).
Of numbers that are complex conjugates of each other one is kept.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.numbers import JIT
from qwfx.kernels.stale import forget_stale
from qwfx.reference.packing import packed_length

__all__ = [
    "BLOCKS", "BLOCK_CORE", "FINE", "INTERLEAVED", "NOISE", "NOT_REAL", "OUT_OF_RANGE", "RESTRICTED",
    "SEPARATOR", "SLACK", "SPINS", "STRANGE", "UNSEEN", "WRONG_BLOCK", "Places", "agree", "locate", "store",
]  # fmt: skip

RESTRICTED, INTERLEAVED, BLOCKS = 0, 1, 2
FINE, OUT_OF_RANGE, STRANGE, SPINS, WRONG_BLOCK, SEPARATOR, NOT_REAL = range(7)
BLOCK_CORE = 5
"""Number of the block that holds nothing but the core energy."""
UNSEEN = 127
NOISE = 1e-11
"""hartree; programs that print an integral in several index orders compute each with its own rounding."""
SLACK = 1 + 1e-6


@dataclass(frozen=True)
class Places:
    """Offsets of the parts of the flat vector."""

    n: int
    kind: int
    is_complex: bool

    @property
    def spins(self) -> tuple[str, ...]:
        """Keys of the one-electron parts."""
        return ("both",) if self.kind == RESTRICTED else ("up", "down")

    @property
    def pairs(self) -> tuple[str, ...]:
        """Keys of the two-electron parts, in their order in the file."""
        return ("both",) if self.kind == RESTRICTED else ("up_up", "down_down", "up_down")

    def packing(self, pair: str) -> tuple[str, bool]:
        """Packing of a pair of spins, and whether the spins are alike."""
        like = pair != "up_down"
        return ("pairs" if self.is_complex else "eightfold" if like else "fourfold"), like

    @property
    def lengths(self) -> tuple[int, ...]:
        """Packed lengths of the two-electron parts."""
        return tuple(packed_length(p, self.n, like) for p, like in (self.packing(pair) for pair in self.pairs))

    @property
    def offsets(self) -> NDArray[np.int64]:
        """Start of the energies, of the matrices, of up to three two-electron parts, and the total length."""
        one = 1 + len(self.spins) * self.n
        starts = [1, one, one + len(self.spins) * (self.n * (self.n + 1) // 2)]
        for length in self.lengths:
            starts.append(starts[-1] + length)
        return np.array([*starts[:-1], *[starts[-1]] * (7 - len(starts))], dtype=np.int64)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _triangle(p: Any, q: Any) -> Any:
    return p * (p + 1) // 2 + q if p >= q else q * (q + 1) // 2 + p


@njit(**JIT)  # type: ignore[untyped-decorator]
def _two_body(p: Any, q: Any, r: Any, s: Any, n: Any, like: bool, is_complex: bool) -> tuple[Any, int]:
    """Position, and 1 if the conjugate belongs there, 2 if the value must be real."""
    if not is_complex:
        first, second = _triangle(p, q), _triangle(r, s)
        return (_triangle(first, second) if like else first * (n * (n + 1) // 2) + second), 0
    if like:
        here, there = _triangle(p * n + q, r * n + s), _triangle(q * n + p, s * n + r)
    else:
        here, there = (p * n + q) * n * n + r * n + s, (q * n + p) * n * n + s * n + r
    return min(here, there), 2 if here == there else 0 if here < there else 1


@njit(**JIT)  # type: ignore[untyped-decorator]
def locate(
    kind: int, n: int, is_complex: bool, offsets: Any, block: int, last_is_core: bool,
    index: Any, real: Any, imaginary: Any, unit: Any, place: Any, turn: Any,
) -> tuple[int, int, int]:  # fmt: skip
    """Positions in the flat vector of all records (-1 for a separator), and what to do with the value (`_two_body`).

    Returns the number of the record that has no place (or of all records), why, and the present block.
    `last_is_core`: the record behind the one-electron integrals of the down electrons is the core energy itself.
    """
    triangle = n * (n + 1) // 2
    top = 2 * n if kind == INTERLEAVED else n
    for m in range(len(index)):
        i, j, k, l = np.int64(index[m, 0]), np.int64(index[m, 1]), np.int64(index[m, 2]), np.int64(index[m, 3])
        if max(i, j, k, l) > top:
            return m, OUT_OF_RANGE, block
        two = i > 0 and j > 0 and k > 0 and l > 0
        if not two and (k > 0 or l > 0 or (j > 0 and i == 0)):
            return m, STRANGE, block
        turn[m] = 0
        if i == 0:
            place[m], turn[m] = 0, 2
            if kind == BLOCKS:
                core = block == BLOCK_CORE or (block == BLOCK_CORE - 1 and last_is_core)
                if block > BLOCK_CORE or (not core and (real[m] != 0.0 or imaginary[m] != 0.0)):
                    return m, SEPARATOR, block
                if not core:
                    place[m] = -1
                block += 1
        else:
            one_spin = other_spin = np.int64(0)
            if kind == BLOCKS:
                if (block < 3) != two or block >= BLOCK_CORE:
                    return m, WRONG_BLOCK, block
                one_spin = np.int64(max(block - 3, 0))
            elif kind == INTERLEAVED:
                one_spin = (i - 1) & 1
                other_spin = (k - 1) & 1
                mixed = (j > 0 and (j - 1) & 1 != one_spin) or (two and (l - 1) & 1 != other_spin)
                if mixed and real[m] == 0.0 and imaginary[m] == 0.0:
                    place[m] = -1
                    continue
                if mixed:
                    return m, SPINS, block
                i, j, k, l = (i + 1) // 2, (j + 1) // 2, (k + 1) // 2, (l + 1) // 2
            if two:
                part = np.int64(block if kind == BLOCKS else 0)
                if kind == INTERLEAVED:
                    part = np.int64(2) if one_spin != other_spin else one_spin
                    if part == 2 and one_spin == 1:
                        i, j, k, l = k, l, i, j
                position, turned = _two_body(i - 1, j - 1, k - 1, l - 1, n, part != 2, is_complex)
                place[m], turn[m] = offsets[2 + part] + position, turned
            elif j > 0:
                place[m] = offsets[1] + one_spin * triangle + _triangle(i - 1, j - 1)
                turn[m] = 2 if i == j else 1 if i < j else 0
            else:
                place[m], turn[m] = offsets[0] + one_spin * n + i - 1, 2
        if turn[m] == 1:
            imaginary[m] = -imaginary[m]
        elif turn[m] == 2 and imaginary[m] != 0.0:
            if abs(imaginary[m]) > 0.5 * 10.0 ** unit[m] + NOISE:
                return m, NOT_REAL, block
            imaginary[m] = 0.0
    return len(index), FINE, block


@njit(**JIT)  # type: ignore[untyped-decorator]
def agree(a: float, b: float, unit: int, other: int) -> bool:
    """Whether two prints of one number agree within half a unit of their last digits, and rounding."""
    return abs(a - b) <= 0.5 * SLACK * (10.0**unit + 10.0**other) + NOISE + 1e-15 * abs(a)


@njit(**JIT)  # type: ignore[untyped-decorator]
def store(flat: Any, units: Any, place: Any, real: Any, imaginary: Any, unit: Any) -> tuple[int, int]:
    """Put located records into the flat vector (length, 1 or 2), `units` telling which are there already.

    Returns the number of records that repeat another and that of the first that contradicts one, or -1.
    """
    repeated = 0
    is_complex = flat.shape[1] == 2
    for m in range(len(place)):
        k = place[m]
        if k < 0:
            continue
        if units[k] == UNSEEN:
            flat[k, 0] = real[m]
            if is_complex:
                flat[k, 1] = imaginary[m]
            units[k] = unit[m]
            continue
        same = flat[k, 0] == real[m] or agree(flat[k, 0], real[m], units[k], unit[m])
        if is_complex and same:
            same = agree(flat[k, 1], imaginary[m], units[k], unit[m])
        if not same:
            return repeated, m
        repeated += 1
    return repeated, -1


forget_stale(_triangle, Path(__file__).parent, Path(__file__).parents[1])
