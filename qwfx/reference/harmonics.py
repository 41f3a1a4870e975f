"""Monomials and real regular solid harmonics, as exact polynomials (FORMAT.md, Functions).

A homogeneous polynomial of degree l is a row of coefficients over the monomials ``x^i y^j z^k``, i + j + k = l, in the
order of the format: i descending, then j descending.
"""

from __future__ import annotations

import math
from fractions import Fraction
from functools import cache

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "evaluate_monomials", "mean_over_sphere", "monomial_powers", "monomial_values", "shell_polynomials",
    "solid_from_monomial",
]  # fmt: skip

Polynomial = dict[tuple[int, int, int], Fraction]


@cache
def monomial_powers(l: int) -> tuple[tuple[int, int, int], ...]:
    """Powers (i, j, k) of the (l+1)(l+2)/2 monomials of degree l, in the order of the format."""
    return tuple((i, j, l - i - j) for i in range(l, -1, -1) for j in range(l - i, -1, -1))


@cache
def solid_from_monomial(l: int) -> NDArray[np.float64]:
    """Coefficients of the solid harmonics ``S_lm = r^l Y_lm`` in monomials.

    ``int |Y_lm|^2 dOmega = 1``, no Condon-Shortley phase, m = -l..l as rows; m < 0 goes with sin |m|phi, m > 0 with
    cos m phi. Source: H. B. Schlegel and M. J. Frisch, Int. J. Quantum Chem. 54, 83 (1995):

    ``S_lm = sqrt((2l+1)/(4 pi) (2 - delta_m0) (l-|m|)!/(l+|m|)!) Pi_l^|m|(z, r) A_m(x, y)``,
    ``Pi_l^m = sum_k (-1)^k 2^-l C(l,k) C(2l-2k,l) (l-2k)!/(l-2k-m)! r^2k z^(l-2k-m)``,
    ``A_m = Re (x+iy)^m`` (m >= 0) or ``Im (x+iy)^|m|`` (m < 0).

    Returns
    -------
    (2l+1, (l+1)(l+2)/2), read-only; each entry is within one rounding of the exact number.
    """
    column = {powers: c for c, powers in enumerate(monomial_powers(l))}
    matrix = np.zeros((2 * l + 1, len(column)))
    for m in range(-l, l + 1):
        size = abs(m)
        square = Fraction((2 * l + 1) * (1 if m == 0 else 2) * math.factorial(l - size), 4 * math.factorial(l + size))
        norm = math.sqrt(square / Fraction(math.pi))
        for powers, coefficient in _product(_polar_part(l, size), _azimuthal_part(m)).items():
            matrix[m + l, column[powers]] = norm * float(coefficient)
    matrix.flags.writeable = False
    return matrix


def shell_polynomials(l: int, monomial: bool) -> NDArray[np.float64]:
    """(functions of the shell, monomials of degree l): the polynomial of each function of a shell."""
    return np.eye((l + 1) * (l + 2) // 2) if monomial else solid_from_monomial(l)


def monomial_values(l: int, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n, (l+1)(l+2)/2): values of the monomials of degree l at points (n, 3), bohr, relative to the centre."""
    return _monomial_derivatives(l, points, (0, 0, 0))


def evaluate_monomials(l: int, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """Values, gradients and Laplacians of the monomials of degree l.

    Parameters
    ----------
    l : degree.
    points : (n, 3) bohr, relative to the centre.

    Returns
    -------
    (5, n, (l+1)(l+2)/2): value, d/dx, d/dy, d/dz, Laplacian.
    """
    first = [_monomial_derivatives(l, points, order) for order in ((0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1))]
    second = [_monomial_derivatives(l, points, order) for order in ((2, 0, 0), (0, 2, 0), (0, 0, 2))]
    return np.array([*first, sum(second)])


def _monomial_derivatives(l: int, points: NDArray[np.float64], order: tuple[int, int, int]) -> NDArray[np.float64]:
    powers = np.array(monomial_powers(l))
    factor = np.ones(len(powers))
    product = np.ones((len(points), len(powers)))
    for axis in range(3):
        left = powers[:, axis]
        for _ in range(order[axis]):
            factor *= left
            left = np.maximum(left - 1, 0)  # the factor is 0 where the power would become negative
        product *= points[:, axis, None] ** left
    return np.asarray(factor * product)


def mean_over_sphere(i: int, j: int, k: int) -> float:
    """Mean of ``x^i y^j z^k`` over the unit sphere: (i-1)!! (j-1)!! (k-1)!! / (i+j+k+1)!! if all are even, else 0."""
    if i % 2 or j % 2 or k % 2:
        return 0.0
    top = _double_factorial(i - 1) * _double_factorial(j - 1) * _double_factorial(k - 1)
    return float(Fraction(top, _double_factorial(i + j + k + 1)))


def _double_factorial(n: int) -> int:
    return math.prod(range(n, 0, -2))


def _polar_part(l: int, m: int) -> Polynomial:
    """``Pi_l^m(z, r)`` with ``r^2k = (x^2 + y^2 + z^2)^k`` written out."""
    total: Polynomial = {}
    for k in range((l - m) // 2 + 1):
        factor = Fraction((-1) ** k * math.comb(l, k) * math.comb(2 * l - 2 * k, l), 2**l)
        factor *= Fraction(math.factorial(l - 2 * k), math.factorial(l - 2 * k - m))
        for a in range(k + 1):
            for b in range(k - a + 1):
                powers = (2 * a, 2 * b, 2 * (k - a - b) + l - 2 * k - m)
                number = math.comb(k, a) * math.comb(k - a, b)
                total[powers] = total.get(powers, Fraction(0)) + factor * number
    return total


def _azimuthal_part(m: int) -> Polynomial:
    """``Re (x+iy)^m`` for m >= 0, ``Im (x+iy)^|m|`` for m < 0."""
    size = abs(m)
    first = 0 if m >= 0 else 1  # even powers of iy are real, odd ones imaginary
    return {(size - b, b, 0): Fraction((-1) ** (b // 2) * math.comb(size, b)) for b in range(first, size + 1, 2)}


def _product(one: Polynomial, other: Polynomial) -> Polynomial:
    total: Polynomial = {}
    for (i, j, k), c in one.items():
        for (p, q, r), d in other.items():
            powers = (i + p, j + q, k + r)
            total[powers] = total.get(powers, Fraction(0)) + c * d
    return total
