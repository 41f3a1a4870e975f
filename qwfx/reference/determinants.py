"""Sums of determinants as they stand in FORMAT.md (F12 to F15), without regard for speed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Expansion

__all__ = ["DeterminantSum", "LocalValues", "determinant_sum", "evaluate_determinants", "occupied"]


@dataclass(frozen=True)
class DeterminantSum:
    """The expansion, with the orbitals that each string occupies."""

    up: NDArray[np.int64]
    """(U, n_up) orbitals of each up string, ascending."""
    down: NDArray[np.int64]
    """(D, n_down)."""
    rows: NDArray[np.int64]
    """(E) up string of each entry."""
    columns: NDArray[np.int64]
    """(E) down string of each entry."""
    coefficients: NDArray[Any]
    """(states, E)."""

    @property
    def cost(self) -> float:
        """Floating-point operations for one configuration, roughly."""
        return float(sum(len(s) * (1.0 + 4 * s.shape[1]) * max(s.shape[1], 1) ** 3 for s in (self.up, self.down)))


@dataclass(frozen=True)
class LocalValues:
    """D and its derivatives at one configuration."""

    log_abs: NDArray[np.float64]
    """(states)."""
    sign: NDArray[Any]
    """(states)."""
    gradients: NDArray[Any]
    """(states, electrons, 3) of log D."""
    laplacian: NDArray[Any]
    """(states) of D over D."""


def occupied(strings: NDArray[np.uint64], electrons: int) -> NDArray[np.int64]:
    """(k, electrons) orbitals of each of (k, W) strings, ascending."""
    n_strings, n_words = strings.shape
    shifts = np.arange(64, dtype=np.uint64)
    bits = ((strings[:, :, None] >> shifts) & np.uint64(1)).astype(bool).reshape(n_strings, 64 * n_words)
    return np.nonzero(bits)[1].reshape(n_strings, electrons).astype(np.int64)


def _determinants(phi: NDArray[Any], strings: NDArray[np.int64]) -> tuple[NDArray[Any], float]:
    """(k, 1 + 4n) determinants of each string, scaled by exp(-shift), and the shift.

    First the determinant itself, then for electron i and each of d/dx, d/dy, d/dz, Laplacian the determinant with row i
    so differentiated: a determinant is linear in each row, so this is its derivative exactly. phi: (5, n, M).
    """
    n = phi.shape[1]
    plain = np.moveaxis(phi[0][:, strings], 1, 0)  # (k, electron, occupied orbital)
    matrices = np.repeat(plain[:, None], 1 + 4 * n, axis=1)
    for electron in range(n):
        for k in range(4):
            matrices[:, 1 + 4 * electron + k, electron, :] = phi[k + 1][electron][strings]
    sign, log = np.linalg.slogdet(matrices) if n else (np.ones(matrices.shape[:2]), np.zeros(matrices.shape[:2]))
    finite = log[np.isfinite(log)]
    shift = float(finite.max()) if finite.size else 0.0
    return sign * np.exp(log - shift), shift


def evaluate_determinants(total: DeterminantSum, phi_up: NDArray[Any], phi_down: NDArray[Any]) -> LocalValues:
    """D = sum_IJ C_IJ det_I det_J and its derivatives from orbitals (5, n_up, M) and (5, n_down, M) at one place."""
    up, up_shift = _determinants(phi_up, total.up)
    down, down_shift = _determinants(phi_down, total.down)
    states = len(total.coefficients)
    kind = np.result_type(total.coefficients, up, down)
    for_up = np.zeros((states, len(total.up)), dtype=kind)
    for_down = np.zeros((states, len(total.down)), dtype=kind)
    for s in range(states):
        np.add.at(for_up[s], total.rows, total.coefficients[s] * down[total.columns, 0])
        np.add.at(for_down[s], total.columns, total.coefficients[s] * up[total.rows, 0])
    by_up, by_down = for_up @ up, for_down @ down  # (states, 1 + 4n)
    D = by_up[:, 0]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = np.concatenate([by_up[:, 1:], by_down[:, 1:]], axis=1).reshape(states, -1, 4) / D[:, None, None]
        return LocalValues(np.log(np.abs(D)) + up_shift + down_shift, D / np.abs(D), ratios[..., :3],
                           ratios[..., 3].sum(axis=1))  # fmt: skip


def determinant_sum(expansion: Expansion, n_up: int, n_down: int) -> DeterminantSum:
    """The expansion of a model, read in full."""
    row_start = np.asarray(expansion.row_start)
    return DeterminantSum(
        occupied(np.asarray(expansion.up_strings), n_up),
        occupied(np.asarray(expansion.down_strings), n_down),
        np.repeat(np.arange(len(row_start) - 1), np.diff(row_start)),
        np.asarray(expansion.columns),
        np.asarray(expansion.coefficients),
    )
