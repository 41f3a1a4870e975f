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
from qwfx.kernels.bilinear import bilinear
from qwfx.kernels.minors import LANES, add_cofactors, fill_minors
from qwfx.kernels.strings import SpinStrings
from qwfx.kernels.tables import Table, gamma_of, make_table
from qwfx.model import Expansion
from qwfx.reference.determinants import occupied
from qwfx.reference.strings import check_expansion

__all__ = ["Determinants", "Values"]

LARGEST_ENTRY = 1e6
"""Of the table: beyond, minors have lost so many digits that another reference is taken for the walker."""

ODD = 256
"""Minors of a class whose elimination breaks down that there is room for at first."""


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

    def __init__(
        self, expansion: Expansion, n_up: int, n_down: int, n_orbitals_up: int, n_orbitals_down: int
    ) -> None:
        check_expansion(expansion, (n_up, n_down), (n_orbitals_up, n_orbitals_down))
        self.row_start = np.asarray(expansion.row_start, dtype=np.int64)
        n_down_strings = len(expansion.down_strings)
        self.columns = np.asarray(expansion.columns).astype(np.int32 if n_down_strings < 2**31 else np.int64)
        self.coefficients = np.ascontiguousarray(np.asarray(expansion.coefficients))
        weight = np.zeros(len(self.columns))
        for state in self.coefficients:
            np.maximum(weight, np.abs(state), out=weight)
        for_up = np.maximum.reduceat(weight, self.row_start[:-1])
        for_down = np.zeros(n_down_strings)
        np.maximum.at(for_down, self.columns, weight)
        self.spins = (
            SpinStrings(occupied(np.asarray(expansion.up_strings), n_up), for_up),
            SpinStrings(occupied(np.asarray(expansion.down_strings), n_down), for_down),
        )

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
        for spin, strings, phi in zip(("up", "down"), self.spins, (phi_up, phi_down), strict=True):
            wanted = (len(phi_up), strings.occupied.shape[1], len(strings.used))
            if phi.shape != wanted:
                raise EvaluationError(
                    f"an array of shape {phi.shape}",
                    where=f"phi_{spin}",
                    expected=f"{wanted}: walkers, {spin} electrons, orbitals that occur in {spin} strings",
                )
        up, down = (
            make_table(strings, phi, LARGEST_ENTRY)
            for strings, phi in zip(self.spins, (phi_up, phi_down), strict=True)
        )
        return self.from_tables(up, down, gammas=gammas, threads=threads)

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
            found = [
                gamma_of(table, None if self.single or slope is None else slope / total[:, :, None, None], self.n_states)
                if gammas else np.zeros((self.n_states, 0, 0, 0))
                for table, slope in zip((up, down), slopes, strict=True)
            ]  # fmt: skip
        singular = ~(np.isfinite(log_abs) & (sign != 0)).all(axis=0)
        return Values(log_abs, sign, found[0], found[1], singular)

    def _sum(
        self, up: Table, down: Table, total: NDArray[Any], slopes: list[NDArray[Any] | None], threads: int
    ) -> None:
        """Blocks of walkers with like references, in threads."""
        blocks: list[NDArray[np.int64]] = []
        kinds = np.stack([up.reference_of, down.reference_of], axis=1)
        for kind in np.unique(kinds, axis=0):
            own = np.flatnonzero((kinds == kind).all(axis=1))
            blocks += [own[start : start + LANES] for start in range(0, len(own), LANES)]
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
        lanes = np.append(block, np.full(LANES - len(block), block[-1]))  # the last walker fills the block up
        kind = total.dtype
        classes, tables, minors = [], [], []
        for strings, side in zip(self.spins, (up, down), strict=True):
            own = strings.classes(side.references[side.reference_of[block[0]]])
            table = np.ascontiguousarray(np.moveaxis(side.table[lanes], 0, -1), kind)
            values = np.empty((strings.n_strings, LANES), kind)
            for c in own:
                fill_minors(table, c.string, c.holes, c.particles, c.sign, values)
            classes.append(own)
            tables.append(table)
            minors.append(values)
        partial = [np.empty((self.n_states, *values.shape), kind) for values in minors]
        sums = np.empty(LANES, kind)
        for s, coefficients in enumerate(self.coefficients):
            bilinear(self.row_start, self.columns, coefficients, *minors, sums, partial[0][s], partial[1][s])
            total[s, block] = sums[: len(block)]
        for slope, own, table, weight in zip(slopes, classes, tables, partial, strict=True):
            if slope is not None:
                found = np.zeros((self.n_states, *table.shape), kind)
                for c in own:
                    if c.rank:
                        _add(table, c, weight, found)
                slope[:, block] = np.moveaxis(found, -1, 1)[:, : len(block)]


def _add(table: NDArray[Any], c: Any, weight: NDArray[Any], found: NDArray[Any]) -> None:
    """Cofactors of one class; those whose elimination broke down by the singular value decomposition."""
    odd = np.zeros((ODD, 2), dtype=np.int64)
    before = found.copy() if c.rank > 2 else found
    n_odd = add_cofactors(table, c.string, c.holes, c.particles, c.sign, weight, found, odd)
    if n_odd > len(odd):
        found[:] = before
        odd = np.zeros((n_odd, 2), dtype=np.int64)
        add_cofactors(table, c.string, c.holes, c.particles, c.sign, weight, found, odd)
    for m, b in odd[:n_odd].tolist():
        grid = np.ix_(c.holes[m], c.particles[m])
        cofactors = _cofactors(table[:, :, b][grid])
        for s in range(len(found)):
            found[s, :, :, b][grid] += c.sign[m] * weight[s, c.string[m], b] * cofactors


def _cofactors(a: NDArray[Any]) -> NDArray[Any]:
    """Cofactors of a matrix that may be singular: with A = U S V+, det(U V+) conj(U) (cofactors of S) conj(V)^T."""
    u, s, vh = np.linalg.svd(a)
    others = np.array([np.prod(np.delete(s, j)) for j in range(len(s))])
    return np.asarray(np.linalg.det(u) * np.linalg.det(vh) * (u.conj() * others) @ vh.conj())
