"""Factors that give a primitive function unit norm, and the norms of the functions of a basis, in closed form.

The format normalises nothing; converters from sources that do normalise take their factors from here. All follow from
``int_0^inf r^N exp(-a r^q) dr = Gamma((N+1)/q) / (q a^((N+1)/q))`` (NIST DLMF 5.9.1).
"""

from __future__ import annotations

import math
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Basis, Radial
from qwfx.reference.functions import Shell, shells
from qwfx.reference.harmonics import mean_over_sphere, monomial_powers, shell_polynomials, solid_from_monomial

__all__ = [
    "gaussian_norm", "monomial_norm", "one_center_overlap", "radial_integral", "radial_norm", "self_overlaps",
    "slater_monomial_norm", "slater_norm", "solid_from_monomial",
]  # fmt: skip

Real = TypeVar("Real", float, NDArray[np.float64])


def radial_integral(degree: float, exponent: Real, q: int) -> Real:
    """``int_0^inf r^degree exp(-exponent r^q) dr``; degree > -1, exponent (a number or an array) > 0."""
    power = (degree + 1) / q
    result: Real = math.gamma(power) / q * exponent**-power
    return result


def radial_norm(degree: int, exponent: Real, radial: Radial) -> Real:
    """N such that ``N r^degree exp(-a r^q) Y_lm`` has unit norm: ``N^2 int r^(2 degree + 2) exp(-2 a r^q) dr = 1``.

    Parameters
    ----------
    degree : power of r in all, that of the solid harmonic included.
    exponent : a number or an array; bohr^-2 (gaussian) or bohr^-1 (slater).
    radial : ``gaussian`` (q = 2) or ``slater`` (q = 1).
    """
    result: Real = radial_integral(2 * degree + 2, 2 * exponent, 2 if radial == "gaussian" else 1) ** -0.5
    return result


def gaussian_norm(l: int, exponent: Real) -> Real:
    """N such that ``N S_lm exp(-a r^2)`` has unit norm: ``N^2 = 2 (2a)^(l+3/2) / Gamma(l+3/2)``."""
    return radial_norm(l, exponent, "gaussian")


def slater_norm(n: int, exponent: Real) -> Real:
    """N such that ``N r^(n-1) exp(-zeta r) Y_lm`` has unit norm: ``N = (2 zeta)^(n+1/2) / sqrt((2n)!)``.

    In the format this is a solid shell with power ``n - 1 - l`` and coefficient N.
    """
    return radial_norm(n - 1, exponent, "slater")


def monomial_norm(i: int, j: int, k: int, exponent: Real) -> Real:
    """N such that ``N x^i y^j z^k exp(-a r^2)`` has unit norm."""
    angular = 4.0 * math.pi * mean_over_sphere(2 * i, 2 * j, 2 * k)
    result: Real = gaussian_norm(i + j + k, exponent) * angular**-0.5
    return result


def slater_monomial_norm(i: int, j: int, k: int, power: int, exponent: Real) -> Real:
    """N such that ``N x^i y^j z^k r^power exp(-zeta r)`` has unit norm."""
    angular = 4.0 * math.pi * mean_over_sphere(2 * i, 2 * j, 2 * k)
    result: Real = slater_norm(i + j + k + power + 1, exponent) * angular**-0.5
    return result


def one_center_overlap(one: Shell, other: Shell) -> NDArray[np.float64]:
    """(functions of one, functions of the other): overlap of two shells on the same centre, for any powers."""
    radial = 0.0
    for a, c, n in zip(one.exponents.tolist(), one.coefficients.tolist(), one.powers.tolist(), strict=True):
        degrees = n + other.powers + one.l + other.l + 2
        for b, d, degree in zip(other.exponents.tolist(), other.coefficients.tolist(), degrees.tolist(), strict=True):
            radial += c * d * radial_integral(degree, a + b, one.q)
    angular = np.array([
        [4.0 * math.pi * mean_over_sphere(i + p, j + q, k + r) for p, q, r in monomial_powers(other.l)]
        for i, j, k in monomial_powers(one.l)
    ])  # fmt: skip
    left, right = shell_polynomials(one.l, one.monomial), shell_polynomials(other.l, other.monomial)
    return np.asarray(radial * (left @ angular @ right.T))


def self_overlaps(basis: Basis) -> NDArray[np.float64]:
    """(F) ``int chi^2`` of each function of a basis: the diagonal of its overlap matrix."""
    known: dict[tuple[Any, ...], NDArray[np.float64]] = {}  # atoms of one element have the same shells
    blocks = []
    for shell in shells(basis):
        radial = (shell.exponents.tobytes(), shell.coefficients.tobytes(), shell.powers.tobytes())
        key = (shell.l, shell.monomial, shell.q, radial)
        if key not in known:
            known[key] = np.diag(one_center_overlap(shell, shell))
        blocks.append(known[key])
    return np.concatenate([np.zeros(0), *blocks])
