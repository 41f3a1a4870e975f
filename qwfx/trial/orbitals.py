"""The orbitals that the strings of one spin use, at the electrons of that spin."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.kernels import evaluate_orbitals
from qwfx.kernels.plan import make_plan
from qwfx.model import Basis, System

__all__ = ["SpinOrbitals"]


class SpinOrbitals:
    """Rows of an orbital set, evaluated for batches of walkers."""

    def __init__(self, basis: Basis, system: System, coefficients: NDArray[Any], threads: int | None) -> None:
        self.basis, self.positions, self.threads = basis, np.asarray(system.positions), threads
        self.coefficients = np.ascontiguousarray(coefficients)
        self.plan = make_plan(basis, self.positions)

    def at(self, places: NDArray[np.float64], derivatives: int) -> NDArray[Any]:
        """(k, M, ...) at places (..., 3), k = 1, 4 or 5: value, gradient, Laplacian. In C order."""
        shape = places.shape[:-1]
        if not len(self.coefficients) or not np.prod(shape):
            return np.zeros(({0: 1, 1: 4, 2: 5}[derivatives], len(self.coefficients), *shape), self.coefficients.dtype)
        found = evaluate_orbitals(
            self.basis, self.positions, self.coefficients, places.reshape(-1, 3),
            derivatives=derivatives, threads=self.threads, plan=self.plan,
        )  # fmt: skip
        return np.ascontiguousarray(found.transpose(0, 2, 1)).reshape(len(found), len(self.coefficients), *shape)
