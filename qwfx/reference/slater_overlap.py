"""Overlap integrals of Slater functions on two centres, by quadrature that is exact to rounding.

In prolate spheroidal coordinates about the centres A and B, at distance R, with the axis from A to B (R. S. Mulliken,
C. A. Rieke, D. Orloff and H. Orloff, J. Chem. Phys. 17, 1248 (1949)):

``r_A = R/2 (xi + eta)``, ``r_B = R/2 (xi - eta)``, ``dV = (R/2)^3 (xi^2 - eta^2) dxi deta dphi``,

and the product of two functions is a polynomial in xi, eta and (after integration over phi) nothing else, times
``exp(-p xi - q eta)`` with ``p = (a+b) R/2``, ``q = (a-b) R/2``. So

- xi from 1 to infinity: Gauss-Laguerre, exact for the polynomial;
- phi: equidistant points, exact for trigonometric polynomials;
- eta from -1 to 1: Gauss-Legendre, with as many points as the Chebyshev series of ``exp(-q eta)`` calls for. Its
  coefficients are modified Bessel functions ``I_k(q)``, which fall fast beyond ``k = sqrt(q)``.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
from numpy.typing import NDArray

from qwfx.reference.functions import Shell
from qwfx.reference.harmonics import monomial_values, shell_polynomials

__all__ = ["two_center_slater"]


def two_center_slater(one: Shell, other: Shell, separation: NDArray[np.float64]) -> NDArray[np.float64]:
    """(functions of one, functions of the other): Slater shells whose centres differ by `separation` (3), bohr.

    `separation` is the centre of the other less the centre of the one, not zero; powers are not negative.
    """
    distance = float(np.linalg.norm(separation))
    half = distance / 2
    frame = _frame(separation / distance)
    left, right = shell_polynomials(one.l, one.monomial), shell_polynomials(other.l, other.monomial)
    block = np.zeros((len(left), len(right)))
    for a, c, n in zip(one.exponents.tolist(), one.coefficients.tolist(), one.powers.tolist(), strict=True):
        for b, d, m in zip(other.exponents.tolist(), other.coefficients.tolist(), other.powers.tolist(), strict=True):
            degree = one.l + n + other.l + m + 2
            beyond, above, below, phi, weights = _rule(distance, a, b, degree, one.l + other.l)
            r_one, r_other = half * (beyond + above), half * (beyond + below)
            from_axis = half * np.sqrt(beyond * (beyond + 2.0) * above * below)
            across = [from_axis * np.cos(phi), from_axis * np.sin(phi)]
            rest = beyond * (above - below) / 2
            from_one = np.stack([*across, half * (rest + above)], axis=1) @ frame
            from_other = np.stack([*across, half * (rest - below)], axis=1) @ frame
            p_one = monomial_values(one.l, from_one) @ left.T
            p_other = monomial_values(other.l, from_other) @ right.T
            radial = c * d * weights * half * r_one ** (n + 1) * r_other ** (m + 1)
            block += p_one.T @ (radial[:, None] * p_other)
    return block


def _rule(distance: float, a: float, b: float, degree: int, angular: int) -> tuple[NDArray[np.float64], ...]:
    """Nodes xi - 1, 1 + eta, 1 - eta, phi, and weights that hold ``exp(-p xi - q eta)``.

    They are exact for polynomials of a degree in xi and eta. Functions of short range live where xi - 1 and one of
    1 + eta, 1 - eta are small; these differences are kept from the start, so that no digits are lost there.
    """
    p, q = (a + b) * distance / 2, (a - b) * distance / 2
    t, t_weights = _laguerre(degree // 2 + 1)
    above, below, eta_weights = _legendre(_legendre_points(degree, abs(q)))
    phi = np.arange(angular + 1) * (2.0 * math.pi / (angular + 1))
    # exp(-p - q eta), written so that nothing cancels where it is largest, and nothing overflows.
    decay = np.exp(-b * distance - q * above if q > 0 else -a * distance + q * below)
    plane = t_weights[:, None] / p * (eta_weights * decay)
    shape = (len(t), len(above), len(phi))
    nodes = [(t / p)[:, None, None], above[None, :, None], below[None, :, None], phi[None, None, :]]
    weights = np.broadcast_to(plane[:, :, None] * (2.0 * math.pi / len(phi)), shape)
    return tuple(np.broadcast_to(array, shape).reshape(-1) for array in (*nodes, weights))


@cache
def _laguerre(n: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    return np.polynomial.laguerre.laggauss(n)


@cache
def _legendre(n: int) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Gauss-Legendre nodes as 1 + eta and 1 - eta, and weights, each right to some roundings of itself.

    General routines give eta to 1e-16, so that 1 - eta and the weight of the outermost of 130 nodes are wrong by 1e-12
    of themselves. With d = 1 - eta the recurrence of the polynomials reads
    ``P_(k+1) - P_k = (k (P_k - P_(k-1)) - (2k+1) d P_k) / (k+1)``; two steps of Newton's method do the rest.
    """
    d = 1.0 - np.polynomial.legendre.leggauss(n)[0][n // 2 :]
    for _ in range(3):
        value, step = np.ones_like(d), np.zeros_like(d)
        for k in range(n):
            step = (k * step - (2 * k + 1) * d * value) / (k + 1)
            value = value + step
        scaled_slope = n * (d * value - step)  # (1 - eta^2) P_n'
        weights = 2.0 * d * (2.0 - d) / scaled_slope**2
        d = d + value * d * (2.0 - d) / scaled_slope
    mirrored = d[::-1][: n // 2]  # the node in the middle, if any, is there once
    return (
        np.concatenate([mirrored, 2.0 - d]),
        np.concatenate([2.0 - mirrored, d]),
        np.concatenate([weights[::-1][: n // 2], weights]),
    )


def _legendre_points(degree: int, q: float) -> int:
    """Points for a polynomial of a degree times ``exp(-q eta)``, so that the integral is right to 1e-17 of itself.

    n points are exact up to degree 2n - 1, so the series of the exponential may go on to ``k = 2n - 1 - degree``.
    Where q is large the integral is smaller than the largest value of the polynomial by up to ``q^degree``; the first
    term left out, by the uniform expansion of I_k (NIST DLMF 10.41.3), must be smaller still.
    """
    q = max(q, 1e-3)
    wanted = math.log(1e17) + degree * math.log1p(q)
    k = 1
    while k * math.asinh(k / q) - math.hypot(k, q) + q < wanted:
        k += 1
    return (degree + k) // 2 + 1


def _frame(axis: NDArray[np.float64]) -> NDArray[np.float64]:
    """(3, 3) right-handed orthonormal rows, the last one along the axis."""
    helper = np.zeros(3)
    helper[int(np.argmin(np.abs(axis)))] = 1.0
    first = np.cross(helper, axis)
    first /= np.linalg.norm(first)
    return np.array([first, np.cross(axis, first), axis])
