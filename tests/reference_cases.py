"""Small bases for the tests of the reference, and the size of the largest term of a formula."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Basis, Radial
from qwfx.reference.functions import shells
from qwfx.reference.harmonics import evaluate_monomials, shell_polynomials


@dataclass(frozen=True)
class ShellData:
    """One shell in words: centre, l, kind, and primitives (exponent, coefficient, power)."""

    center: int
    l: int
    monomial: bool
    primitives: tuple[tuple[float, float, int], ...]


def make_basis(radial: Radial, data: Sequence[ShellData], *, powers: bool = True) -> Basis:
    """A basis of these shells."""
    primitives = [p for shell in data for p in shell.primitives]
    return Basis(
        radial=radial,
        shell_center=np.array([s.center for s in data], dtype=np.int32),
        shell_l=np.array([s.l for s in data], dtype=np.int32),
        shell_monomial=np.array([s.monomial for s in data], dtype=np.int8),
        primitive_start=np.cumsum([0, *(len(s.primitives) for s in data)]),
        exponents=np.array([p[0] for p in primitives]),
        coefficients=np.array([p[1] for p in primitives]),
        powers=np.array([p[2] for p in primitives], dtype=np.int32) if powers else None,
    )


def largest_terms(basis: Basis, positions: NDArray[np.float64], points: NDArray[np.float64]) -> NDArray[np.float64]:
    """(5, n, F): the largest term of each sum in the formulas of value, gradient and Laplacian.

    The terms are those of the product rule, primitive by primitive and monomial by monomial, signs dropped: what
    rounding errors of a sound evaluation are proportional to.
    """
    result = np.zeros((5, len(points), basis.n_functions))
    for shell in shells(basis):
        x = points - positions[shell.center]
        r = np.linalg.norm(x, axis=1)[:, None]
        monomials = np.abs(evaluate_monomials(shell.l, x))
        polynomials = np.abs(shell_polynomials(shell.l, shell.monomial))
        terms = polynomials * monomials[:, :, None, :]  # (5, n, functions, monomials)
        for a, c, n in zip(shell.exponents, shell.coefficients, shell.powers.tolist(), strict=True):
            t = shell.q * a * r**shell.q
            radial = np.abs(c) * r**n * np.exp(-a * r**shell.q)
            slope = radial * np.maximum(n, t) / r**2
            bend = radial * np.maximum(n * (n + 2 * shell.l + 1), np.maximum(t**2, 2 * (n + shell.l + 2) * t)) / r**2
            value = terms[0].max(axis=-1)
            rows = [radial * value]
            rows += [np.maximum(slope * np.abs(x[:, k, None]) * value, radial * terms[1 + k].max(-1)) for k in range(3)]
            rows += [np.maximum(bend * value, radial * terms[4].max(-1))]
            result[:, :, shell.functions] = np.maximum(result[:, :, shell.functions], np.array(rows))
    return result
