"""The functions of a Molden file in the terms of the format, and what the ways of normalising make of them."""

from __future__ import annotations

from dataclasses import replace
from math import prod

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.order import shell_order
from qwfx.converters.molden.sections import Molden
from qwfx.converters.molden.slater import slater_basis
from qwfx.kernels import overlap
from qwfx.model import Basis
from qwfx.reference.harmonics import monomial_powers
from qwfx.reference.norms import gaussian_norm, monomial_norm, self_overlaps

__all__ = ["Trial", "in_our_order"]


def in_our_order(molden: Molden, rows: NDArray[np.int64]) -> NDArray[np.float64]:
    """(M, F) some orbitals of the file in the order of functions of the format."""
    coefficients = molden.orbitals.coefficients
    if molden.slater:
        basis, place, _ = slater_basis(molden)
        matrix = np.zeros((len(rows), basis.n_functions))
        matrix[:, place] = coefficients[rows]
        return matrix
    parts, start = [np.zeros(0, dtype=np.int64)], 0
    for shell in molden.shells:
        own = shell_order(shell.l, _monomial(molden, shell.l))
        parts.append(start + own)
        start += len(own)
    return np.asarray(coefficients[np.ix_(rows, np.concatenate(parts))])


class Trial:
    """One way of forming primitives, with its overlap matrix; the readings scale rows and columns of it.

    The matrix is computed when it is asked for and was not kept.
    """

    def __init__(self, molden: Molden, positions: NDArray[np.float64], factors_included: bool) -> None:
        self.slater = bool(molden.slater)
        if self.slater:
            self.basis, _, self.components = slater_basis(molden)
        else:
            self.basis = _basis(molden, factors_included)
            self.components = _component_factors(self.basis)
        self.positions = positions
        self._overlap: NDArray[np.float64] | None = None
        self.signs = _reversed_signs(self.basis)
        diagonal = self_overlaps(self.basis)
        self.lengths = np.sqrt(np.where(diagonal > 0, diagonal, 1.0))

    @property
    def overlap(self) -> NDArray[np.float64]:
        """(F, F)."""
        if self._overlap is None:
            self._overlap = overlap(self.basis, self.positions)
        return self._overlap

    def release(self) -> None:
        """Forget the overlap matrix."""
        self._overlap = None

    def _per_shell(self, normalised: bool) -> NDArray[np.float64]:
        # The first function of a monomial shell is x^l; all functions of a solid shell have the same norm.
        if not normalised or self.slater:
            return np.ones(self.basis.n_shells)
        return np.asarray(1.0 / self.lengths[self.basis.function_start[:-1]])

    def _factors(self, normalised: bool, shared: bool, reversed_signs: bool) -> NDArray[np.float64]:
        if self.slater:
            return np.asarray(1.0 / self.lengths) if normalised else self.components
        factors = np.ones_like(self.components) if shared else self.components
        return factors * self.signs if reversed_signs else factors

    def function_scale(self, normalised: bool, shared: bool, reversed_signs: bool) -> NDArray[np.float64]:
        """(F) factor of every function under a reading, relative to those of `basis`."""
        per_function = np.repeat(self._per_shell(normalised), self.basis.shell_size)
        return np.asarray(per_function * self._factors(normalised, shared, reversed_signs))

    def final(self, normalised: bool, shared: bool, reversed_signs: bool) -> tuple[Basis, NDArray[np.float64]]:
        """The basis under a reading, and the factors (F) that go to the orbital coefficients."""
        lengths = np.diff(self.basis.primitive_start)
        scaled = self.basis.coefficients * np.repeat(self._per_shell(normalised), lengths)
        return replace(self.basis, coefficients=scaled), self._factors(normalised, shared, reversed_signs)


def _monomial(molden: Molden, l: int) -> bool:
    """s and p functions are the same either way; they go with the rest of the file."""
    if l < 2:
        higher = [shell.l for shell in molden.shells if shell.l > 1]
        return bool(higher) and all(molden.cartesian[k] for k in higher)
    return molden.cartesian[l]


def _basis(molden: Molden, factors_included: bool) -> Basis:
    """The shells with the primitives' factors, as printed otherwise."""
    coefficients = [np.zeros(0)]
    for shell in molden.shells:
        monomial = _monomial(molden, shell.l)
        if factors_included:
            # The factor of the primitive x^l is inside; a solid function has another angular constant.
            angular = 1.0 if monomial else float(gaussian_norm(shell.l, 1.0) / monomial_norm(shell.l, 0, 0, 1.0))
            coefficients.append(shell.coefficients * angular)
        elif monomial:
            coefficients.append(shell.coefficients * monomial_norm(shell.l, 0, 0, shell.exponents))
        else:
            coefficients.append(shell.coefficients * gaussian_norm(shell.l, shell.exponents))
    return Basis(
        "gaussian",
        np.array([shell.atom for shell in molden.shells], dtype=np.int32),
        np.array([shell.l for shell in molden.shells], dtype=np.int32),
        np.array([_monomial(molden, shell.l) for shell in molden.shells], dtype=np.int8),
        np.cumsum([0] + [len(shell.exponents) for shell in molden.shells], dtype=np.int64),
        np.concatenate([np.zeros(0), *(shell.exponents for shell in molden.shells)]),
        np.concatenate(coefficients),
    )


def _component_factors(basis: Basis) -> NDArray[np.float64]:
    """(F) what makes each Cartesian component as long as xx..x: sqrt((2l-1)!! / ((2i-1)!! (2j-1)!! (2k-1)!!))."""

    def odd(n: int) -> int:
        return prod(range(2 * n - 1, 0, -2))

    parts = [np.zeros(0)]
    for l, monomial in zip(basis.shell_l.tolist(), basis.shell_monomial.tolist(), strict=True):
        own = [np.sqrt(odd(l) / (odd(i) * odd(j) * odd(k))) for i, j, k in monomial_powers(l)] if monomial else []
        parts.append(np.array(own) if monomial else np.ones(2 * l + 1))
    return np.concatenate(parts)


def _reversed_signs(basis: Basis) -> NDArray[np.float64]:
    """(F) -1 for solid functions with l >= 3 and m = 3, -3, 4, -4."""
    parts = [np.zeros(0)]
    for l, monomial, size in zip(basis.shell_l.tolist(), basis.shell_monomial.tolist(), basis.shell_size, strict=True):
        own = np.ones(size)
        if l > 2 and not monomial:
            m = np.abs(np.arange(-l, l + 1))
            own[(m == 3) | (m == 4)] = -1.0
        parts.append(own)
    return np.concatenate(parts)
