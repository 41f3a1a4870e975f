"""Expansions in determinants by the table method, many walkers at once.

For each spin and walker, one determinant is factorised, that of a reference set of orbitals; the others are small
minors of one table, ``T = A^-1 Phi`` with A the columns of Phi that the reference occupies. A determinant is linear in
each row of Phi, so that D with the row of electron i replaced by v is ``D sum_p v_p gamma[p, i]``: gradients,
Laplacians, ratios of moves and projectors all follow from `gamma`, at no cost per determinant. It is the derivative of
log D with respect to Phi, by Jacobi's formula. Source: B. K. Clark, M. A. Morales, J. McMinis, J. Kim, G. E. Scuseria,
J. Chem. Phys. 135, 244105 (2011).
"""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import EvaluationError
from qwfx.kernels.bilinear import bilinear, largest_entries
from qwfx.kernels.minors import NARROW, WIDE, add_cofactors, fill_minors
from qwfx.kernels.strings import SpinStrings
from qwfx.kernels.tables import Table, gamma_of, make_table
from qwfx.model import Expansion
from qwfx.reference.strings import check_expansion

__all__ = ["Determinants", "Values"]

LARGEST_ENTRY = 1e4
"""Of the table: beyond, another reference is taken for the walker. With entries of size x, log D loses about the digits
of x, and gamma those of x^2."""

ROOM = 1 << 26
"""Bytes that the minors of the walkers at work may take in any case; more only up to the size of the expansion."""

FEW = 3
"""Walkers that are faster done one by one than as a block with idle lanes."""


@dataclass(frozen=True, eq=False)
class Values:
    """D of W walkers and S states."""

    log_abs: NDArray[np.float64]
    """(S, W); -inf where D vanishes."""
    sign: NDArray[Any]
    """(S, W) D / |D|; 0 where D vanishes."""
    gamma_up: NDArray[Any]
    """(S, W, M, n_up): D with the row of electron i replaced by v, over D, is sum_p v_p gamma[p, i]."""
    gamma_down: NDArray[Any]
    """(S, W, M, n_down)."""
    singular: NDArray[np.bool_]
    """(W) where D of some state vanishes or is no number: gamma means nothing there."""


class Determinants:
    """The determinantal part of a file (FORMAT.md, F12 to F14).

    Parameters
    ----------
    expansion : of the model; read in full, once.
    n_up, n_down : electrons of each spin.
    n_orbitals_up, n_orbitals_down : orbitals of the sets that the strings count.

    Raises FormatError for strings of another number of electrons, or with bits beyond the orbitals.
    """

    def __init__(self, expansion: Expansion, n_up: int, n_down: int, n_orbitals_up: int, n_orbitals_down: int) -> None:
        up, down, row_start, columns, coefficients = (
            np.asarray(member)
            for member in (
                expansion.up_strings, expansion.down_strings, expansion.row_start, expansion.columns,
                expansion.coefficients,
            )
        )  # fmt: skip
        up, down = (np.ascontiguousarray(strings, dtype=np.uint64) for strings in (up, down))
        check_expansion(
            Expansion(expansion.up_set, expansion.down_set, up, down, row_start, columns, coefficients),
            (n_up, n_down), (n_orbitals_up, n_orbitals_down),
        )  # fmt: skip
        self._stored = sum(member.nbytes for member in (up, down, row_start, columns, coefficients))
        kind = np.complex128 if np.iscomplexobj(coefficients) else np.float64
        self.coefficients = np.ascontiguousarray(coefficients, dtype=kind)
        self.row_start = row_start.astype(np.int64, copy=False)
        self.columns = columns.astype(np.int32 if len(down) < 2**31 else np.int64)
        for_up, for_down = np.zeros(len(up)), np.zeros(len(down))
        largest_entries(self.row_start, self.columns, self.coefficients, for_up, for_down)
        self.spins = SpinStrings(up, n_up, for_up), SpinStrings(down, n_down, for_down)

    @property
    def n_states(self) -> int:
        """Number of states S."""
        return len(self.coefficients)

    @property
    def single(self) -> bool:
        """Whether there is one determinant only, of which Phi is all orbitals that are used."""
        return len(self.columns) == 1

    @property
    def used_up(self) -> NDArray[np.int64]:
        """Orbitals that occur in any up string, ascending."""
        return self.spins[0].used

    @property
    def used_down(self) -> NDArray[np.int64]:
        """Orbitals that occur in any down string, ascending."""
        return self.spins[1].used

    def evaluate(
        self, phi_up: NDArray[Any], phi_down: NDArray[Any], *, gammas: bool = True, threads: int | None = None
    ) -> Values:
        """D and gamma of walkers whose orbitals are `phi_up` (W, n_up, M) and `phi_down` (W, n_down, M).

        M are the orbitals `used_up` and `used_down`. Without `gammas` they are empty. Nothing is raised and no warning
        given where D vanishes or is no number: see `Values`. Without `threads` all processors are taken. Raises
        EvaluationError for arrays of another shape.
        """
        up, down = self.tables(phi_up, phi_down)
        return self.from_tables(up, down, gammas=gammas, threads=threads)

    def tables(self, phi_up: NDArray[Any], phi_down: NDArray[Any]) -> tuple[Table, Table]:
        """The factorised determinants and tables of each spin; arguments and errors as of `evaluate`."""
        for spin, strings, phi in zip(("up", "down"), self.spins, (phi_up, phi_down), strict=True):
            wanted = (len(phi_up), strings.occupied.shape[1], len(strings.used))
            if phi.shape != wanted:
                raise EvaluationError(
                    f"an array of shape {phi.shape}",
                    where=f"phi_{spin}",
                    expected=f"{wanted}: walkers, {spin} electrons, orbitals that occur in {spin} strings",
                )
        up, down = (
            make_table(strings, phi, LARGEST_ENTRY) for strings, phi in zip(self.spins, (phi_up, phi_down), strict=True)
        )
        return up, down

    def from_tables(self, up: Table, down: Table, *, gammas: bool = True, threads: int | None = None) -> Values:
        """As `evaluate`, from tables that are there already: of the same walkers."""
        kind = np.result_type(up.table, down.table, self.coefficients)
        n_walkers = len(up.log)
        total = np.zeros((self.n_states, n_walkers), kind)
        slopes = [
            np.zeros((self.n_states, n_walkers, *side.table.shape[1:]), kind) if gammas else None for side in (up, down)
        ]
        if self.single:
            total[:] = self.coefficients[:, 0, None]
        else:
            self._sum(up, down, total, slopes, threads or os.cpu_count() or 1)
        scale = up.sign * down.sign
        with np.errstate(all="ignore"):
            size = np.abs(total)
            vanishes = (size == 0) | (scale == 0)  # a spin whose orbitals are dependent has a sign of 0
            log_abs = np.where(vanishes, -np.inf, np.log(size) + up.log + down.log)
            sign = np.where(vanishes, 0, total / size * scale)
            found = []
            for table, slope in zip((up, down), slopes, strict=True):
                x = None if self.single or slope is None else slope / total[:, :, None, None]
                found.append(gamma_of(table, x, self.n_states) if gammas else np.zeros((self.n_states, 0, 0, 0)))
        singular = ~(np.isfinite(log_abs) & (sign != 0)).all(axis=0)
        return Values(log_abs, sign, found[0], found[1], singular)

    def _sum(
        self, up: Table, down: Table, total: NDArray[Any], slopes: list[NDArray[Any] | None], threads: int
    ) -> None:
        """Blocks of walkers with like references, in threads."""
        per_walker = sum(x.n_strings for x in self.spins) * (1 + self.n_states) * total.itemsize
        room = max(ROOM, self._stored) // per_walker
        threads = max(1, min(threads, room // len(WIDE)))
        size = len(WIDE) if room >= len(WIDE) else 1
        blocks: list[NDArray[np.int64]] = []
        kinds = np.stack([up.reference_of, down.reference_of], axis=1)
        for kind in np.unique(kinds, axis=0):
            own = np.flatnonzero((kinds == kind).all(axis=1))
            rest = len(own) % size
            whole = len(own) - rest if rest <= FEW else len(own)
            blocks += [own[start : start + size] for start in range(0, whole, size)]
            blocks += [own[k : k + 1] for k in range(whole, len(own))]
        threads = min(threads, len(blocks))
        if threads <= 1:
            for block in blocks:
                self._block(up, down, block, total, slopes)
            return
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(lambda block: self._block(up, down, block, total, slopes), blocks))

    def _block(
        self, up: Table, down: Table, block: NDArray[np.int64], total: NDArray[Any], slopes: list[NDArray[Any] | None]
    ) -> None:
        width = NARROW if len(block) == 1 else WIDE
        lanes = np.append(block, np.full(len(width) - len(block), block[-1]))  # the last walker fills the block up
        kind = total.dtype
        classes, tables, minors = [], [], []
        for strings, side in zip(self.spins, (up, down), strict=True):
            own = strings.classes(side.references[side.reference_of[block[0]]])
            table = np.ascontiguousarray(np.moveaxis(side.table[lanes], 0, -1), kind).reshape(-1, len(width))
            values = np.empty((strings.n_strings, len(width)), kind)
            for c in own:
                fill_minors(table, len(strings.used), c.string, c.holes, c.particles, c.sign, values, width)
            classes.append(own)
            tables.append(table)
            minors.append(values)
        partial = [np.empty((self.n_states, *values.shape), kind) for values in minors]
        sums = np.empty((1, len(width)), kind)
        for s, coefficients in enumerate(self.coefficients):
            bilinear(self.row_start, self.columns, coefficients, *minors, sums, partial[0][s], partial[1][s], width)
            total[s, block] = sums[0, : len(block)]
        for slope, own, table, weight in zip(slopes, classes, tables, partial, strict=True):
            if slope is not None:
                found = np.zeros((self.n_states, *table.shape), kind)
                for c in own:
                    if c.rank:
                        add_cofactors(
                            table, slope.shape[3], c.string, c.holes, c.particles, c.sign, weight, found, width
                        )
                slope[:, block] = np.moveaxis(found[:, :, : len(block)], 2, 1).reshape(slope[:, block].shape)
