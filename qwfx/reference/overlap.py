"""Overlap integrals of basis functions, ``S_mn = int chi_m chi_n``, shell by shell, exact to rounding.

- On one centre: closed form, for Gaussian and Slater functions with any powers.
- Gaussian functions on two centres: the product of two Gaussians is a Gaussian about a point on the line between
  them (S. F. Boys, Proc. R. Soc. A 200, 542 (1950)), the integral a product over x, y and z, and each of the three is
  done by Gauss-Hermite quadrature, which is exact for a polynomial times a Gaussian.
- Slater functions on two centres: `qwfx.reference.slater_overlap`.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.model import Basis
from qwfx.reference.functions import Shell, shells
from qwfx.reference.harmonics import monomial_powers, shell_polynomials
from qwfx.reference.norms import one_center_overlap
from qwfx.reference.slater_overlap import two_center_slater

__all__ = ["overlap"]

COINCIDENT = 1e-100
"""bohr; centres nearer than this are one centre: no digit of any integral changes, and no square underflows."""


def overlap(
    basis: Basis,
    positions: NDArray[np.float64],
    *,
    progress: Callable[[str, float], None] | None = None,
) -> NDArray[np.float64]:
    """Overlap matrix of the functions of a basis.

    Parameters
    ----------
    basis : the shells.
    positions : (A, 3) centres, bohr.
    progress : called with a message and the fraction done.

    Returns
    -------
    (F, F), symmetric.

    Raises
    ------
    EvaluationError
        A shell on a centre that does not exist, or positions of another shape.
    UnsupportedError
        Powers for which this version has no two-centre formula: odd or negative ones with Gaussian functions,
        negative ones with Slater functions. On one centre all powers are fine.
    """
    centers = np.asarray(positions, dtype=np.float64)
    if centers.ndim != 2 or centers.shape[1] != 3:
        raise EvaluationError(f"an array of shape {centers.shape}", where="positions", expected="(number, 3), in bohr")
    atoms = np.asarray(basis.shell_center, dtype=np.int64)
    outside = atoms[(atoms < 0) | (atoms >= len(centers))]
    if len(outside):
        raise EvaluationError(
            f"a shell sits on atom {int(outside[0])}, but there are {len(centers)} positions",
            where="basis.shell_center",
            expected="indices of atoms from 0",
            remedy="validate the file; `qwfx validate` names the shell",
        )
    matrix = np.empty((basis.n_functions, basis.n_functions))
    listed = list(shells(basis))
    two_center = two_center_gaussian if basis.radial == "gaussian" else two_center_slater
    for s, one in enumerate(listed):
        for other in listed[: s + 1]:
            separation = centers[other.center] - centers[one.center]
            if np.abs(separation).max() > COINCIDENT:
                _check_powers(one, other)
                block = two_center(one, other, separation)
            else:
                block = one_center_overlap(one, other)
            if one is other:
                block = (block + block.T) / 2  # symmetric to the last bit, like the rest
            matrix[one.functions, other.functions] = block
            matrix[other.functions, one.functions] = block.T
        if progress is not None:
            progress("overlap integrals", (s + 1) ** 2 / len(listed) ** 2)
    return matrix


def two_center_gaussian(one: Shell, other: Shell, separation: NDArray[np.float64]) -> NDArray[np.float64]:
    """(functions of one, functions of the other): Gaussian shells whose centres differ by `separation` (3), bohr.

    With ``p = a + b``, ``P = b B / p`` (A in the origin) and ``x = P + t / sqrt(p)``, each direction gives
    ``exp(-a b B^2 / p) / sqrt(p) int (x)^i (x - B)^j exp(-t^2) dt``.
    """
    # r^(2m) is a polynomial: its factor moves into the angular part, whose degree grows by 2m.
    block = np.zeros((one.functions.stop - one.functions.start, other.functions.stop - other.functions.start))
    for n in np.unique(one.powers):
        for m in np.unique(other.powers):
            left, right = one.powers == n, other.powers == m
            rows = _times_r_squared(shell_polynomials(one.l, one.monomial), one.l, int(n) // 2)
            columns = _times_r_squared(shell_polynomials(other.l, other.monomial), other.l, int(m) // 2)
            a, b = one.exponents[left][:, None], other.exponents[right][None, :]
            weight = one.coefficients[left][:, None] * other.coefficients[right][None, :]
            x, y, z = (_line_integrals(one.l + int(n), other.l + int(m), a, b, float(d)) for d in separation)
            monomials = np.array([
                [np.sum(weight * x[i, p] * y[j, q] * z[k, r]) for p, q, r in monomial_powers(other.l + int(m))]
                for i, j, k in monomial_powers(one.l + int(n))
            ])  # fmt: skip
            block += rows @ monomials @ columns.T
    return block


def _line_integrals(
    top: int, other_top: int, a: NDArray[np.float64], b: NDArray[np.float64], distance: float
) -> NDArray[np.float64]:
    """(top+1, other_top+1, primitives of one, of the other): integrals along one direction."""
    nodes, weights = np.polynomial.hermite.hermgauss((top + other_top) // 2 + 1)
    p = (a + b)[..., None]
    x = b[..., None] * distance / p + nodes / np.sqrt(p)
    from_other = x - distance
    front = np.exp(-a * b / (a + b) * distance**2) / np.sqrt(a + b)
    return np.array([
        [front * np.sum(weights * x**i * from_other**j, axis=-1) for j in range(other_top + 1)] for i in range(top + 1)
    ])  # fmt: skip


def _times_r_squared(polynomials: NDArray[np.float64], l: int, times: int) -> NDArray[np.float64]:
    """Coefficients of ``(x^2 + y^2 + z^2)^times p`` over the monomials of degree l + 2 times."""
    column = {powers: c for c, powers in enumerate(monomial_powers(l + 2 * times))}
    result = np.zeros((len(polynomials), len(column)))
    for c, (i, j, k) in enumerate(monomial_powers(l)):
        for u in range(times + 1):
            for v in range(times - u + 1):
                number = math.comb(times, u) * math.comb(times - u, v)
                target = column[i + 2 * u, j + 2 * v, k + 2 * (times - u - v)]
                result[:, target] += number * polynomials[:, c]
    return result


def _check_powers(one: Shell, other: Shell) -> None:
    powers = np.concatenate([one.powers, other.powers])
    bad = powers[(powers < 0) | ((powers % 2 != 0) if one.q == 2 else False)]
    if len(bad):
        raise UnsupportedError(
            f"a primitive with the power {int(bad[0])}",
            where="basis.powers",
            expected="even powers from 0 for Gaussian functions, any from 0 for Slater functions",
            remedy="overlap integrals over two centres are limited to these; the functions themselves can be evaluated",
        )
