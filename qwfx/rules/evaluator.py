"""Which implementation evaluates functions for a rule: the plain one for small files, the fast one for the rest.

Both give the same numbers (property tests hold them together). The plain one needs no compiler, so a small file is
judged in a fraction of a second even where the compiled kernels are not cached yet.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Basis
from qwfx.reference.determinants import DeterminantSum, occupied
from qwfx.rules.inspection import Inspection

__all__ = ["evaluate_orbitals", "expansion_of", "overlap"]

PLAIN_PRIMITIVE_PAIRS = 3_000
"""Pairs of primitives up to which the plain overlap integrals take less time than loading the compiled ones."""
PLAIN_VALUES = 100_000
"""Primitives times points, likewise for values at points."""


def evaluate_orbitals(
    basis: Basis,
    positions: NDArray[np.float64],
    coefficients: NDArray[Any],
    points: NDArray[np.float64],
    *,
    derivatives: int = 2,
    progress: Callable[[str, float], None] | None = None,
) -> NDArray[Any]:
    """(k, n, M) values and derivatives of orbitals; see `qwfx.reference.evaluate_orbitals`."""
    room = _implementation(len(basis.exponents) * len(points) <= PLAIN_VALUES, progress)
    # Absurd exponents overflow; the rules judge the infinities that come of it.
    with np.errstate(over="ignore", invalid="ignore"):
        return np.asarray(room.evaluate_orbitals(basis, positions, coefficients, points, derivatives=derivatives))


def overlap(
    basis: Basis, positions: NDArray[np.float64], progress: Callable[[str, float], None] | None = None
) -> NDArray[np.float64]:
    """(F, F) overlap of the functions; see `qwfx.reference.overlap`."""
    room = _implementation(len(basis.exponents) ** 2 <= PLAIN_PRIMITIVE_PAIRS, progress)
    with np.errstate(over="ignore", invalid="ignore"):
        return np.asarray(room.overlap(basis, positions))


def _implementation(plain: bool, progress: Callable[[str, float], None] | None) -> Any:
    if plain:
        from qwfx import reference

        return reference
    from qwfx import kernels

    if not kernels.compiled():
        kernels.prepare(progress)
    return kernels


def expansion_of(file: Inspection) -> DeterminantSum:
    """The expansion of a file, read in full."""
    row_start = file.read("/expansion/row_start").astype(np.int64)
    strings = {
        spin: occupied(file.read(f"/expansion/{spin}_strings").astype(np.uint64), file.integer("/system", f"n_{spin}"))
        for spin in ("up", "down")
    }
    return DeterminantSum(
        strings["up"],
        strings["down"],
        np.repeat(np.arange(len(row_start) - 1), np.diff(row_start)),
        file.read("/expansion/columns").astype(np.int64),
        np.asarray(file.read("/expansion/coefficients")),
    )
