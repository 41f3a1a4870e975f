"""Basis functions and orbitals at any points: values, gradients, Laplacians, straight from FORMAT.md.

``R(r) = sum_k c_k r^{n_k} exp(-a_k r^q)`` and ``chi = R(r) p(x, y, z)`` with a homogeneous polynomial p of degree l (a
solid harmonic or a monomial), all relative to the centre of the shell. Then, with ``r . grad p = l p`` (Euler):

``grad chi = (R'/r) p r + R grad p``, ``lap chi = (R'' + 2 (l+1) R'/r) p + R lap p``.

At the centre itself a function with a cusp has no derivative, and its Laplacian diverges. There each quantity is
*the limit of its mean over a small sphere around the centre* as the sphere shrinks. Where the quantity is continuous
that is its value. For a 1s Slater function it gives gradient 0 and Laplacian minus infinity; for ``x exp(-a r)``
gradient (1, 0, 0) and Laplacian 0. For an orbital the functions are added up first and the limit is taken then.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import EvaluationError
from qwfx.model import Array, Basis
from qwfx.reference.harmonics import evaluate_monomials, mean_over_sphere, monomial_powers, shell_polynomials

__all__ = ["ROWS", "Shell", "evaluate_functions", "evaluate_orbitals", "shells"]

ROWS = {0: 1, 1: 4, 2: 5}
"""Number of rows of the result for each order of derivatives: value; + d/dx, d/dy, d/dz; + Laplacian."""


@dataclass(frozen=True)
class Shell:
    """One shell of a basis with its numbers at hand."""

    center: int
    l: int
    monomial: bool
    q: int
    """2 gaussian, 1 slater."""
    exponents: NDArray[np.float64]
    coefficients: NDArray[np.float64]
    powers: NDArray[np.int64]
    functions: slice
    """Where its functions stand in the list of all functions."""


def shells(basis: Basis) -> Iterator[Shell]:
    """The shells of a basis, one by one."""
    function = basis.function_start
    powers = np.zeros(len(basis.exponents), dtype=np.int64) if basis.powers is None else basis.powers
    for s in range(basis.n_shells):
        own = slice(int(basis.primitive_start[s]), int(basis.primitive_start[s + 1]))
        yield Shell(
            center=int(basis.shell_center[s]),
            l=int(basis.shell_l[s]),
            monomial=bool(basis.shell_monomial[s]),
            q=2 if basis.radial == "gaussian" else 1,
            exponents=np.asarray(basis.exponents[own], dtype=np.float64),
            coefficients=np.asarray(basis.coefficients[own], dtype=np.float64),
            powers=np.asarray(powers[own], dtype=np.int64),
            functions=slice(int(function[s]), int(function[s + 1])),
        )


def evaluate_functions(
    basis: Basis,
    positions: NDArray[np.float64],
    points: NDArray[np.float64],
    *,
    derivatives: int = 2,
) -> NDArray[np.float64]:
    """All functions of a basis at the given points (FORMAT.md, Functions).

    Parameters
    ----------
    basis : the shells.
    positions : (A, 3) centres, bohr.
    points : (n, 3) bohr.
    derivatives : 0 values; 1 and gradients; 2 and Laplacians.

    Returns
    -------
    (k, n, F), k = 1, 4 or 5: value, d/dx, d/dy, d/dz, Laplacian; bohr^-3/2, -5/2, -7/2. At a centre see the module.

    Raises
    ------
    EvaluationError
        Arguments of another shape, or another order of derivatives.
    """
    positions, points = _checked(positions, points, derivatives)
    result = np.empty((ROWS[derivatives], len(points), basis.n_functions))
    for shell in shells(basis):
        if not 0 <= shell.center < len(positions):
            raise EvaluationError(
                f"a shell sits on atom {shell.center}, but there are {len(positions)} positions",
                where="basis.shell_center",
                expected="indices of atoms from 0",
                remedy="validate the file; `qwfx validate` names the shell",
            )
        result[:, :, shell.functions] = _evaluate_shell(shell, points - positions[shell.center])[: ROWS[derivatives]]
    return result


def evaluate_orbitals(
    basis: Basis,
    positions: NDArray[np.float64],
    coefficients: Array,
    points: NDArray[np.float64],
    *,
    derivatives: int = 2,
) -> NDArray[np.float64] | NDArray[np.complex128]:
    """Orbitals ``phi_p = sum_mu C[p, mu] chi_mu`` at the given points (FORMAT.md, Orbitals).

    Parameters
    ----------
    coefficients : (M, F), real or complex.
    basis, positions, points, derivatives : as for `evaluate_functions`.

    Returns
    -------
    (k, n, M), real or complex as `coefficients`; rows as for `evaluate_functions`.

    Raises
    ------
    EvaluationError
        As `evaluate_functions`, and if the number of columns is not the number of functions.
    """
    matrix = np.asarray(coefficients)
    if matrix.ndim != 2 or matrix.shape[1] != basis.n_functions:
        raise EvaluationError(
            f"coefficients of shape {matrix.shape}",
            where="coefficients",
            expected=f"(number of orbitals, {basis.n_functions}), one column per function of the basis",
            remedy="pass orbitals that belong to this basis",
        )
    functions = evaluate_functions(basis, positions, points, derivatives=derivatives)
    diverging = np.flatnonzero(~np.isfinite(functions).all(axis=(0, 2)))
    functions[:, diverging] = 0.0
    result = np.asarray(functions @ matrix.T)
    for i in diverging:
        result[:, i] = _orbitals_at_center(basis, positions, matrix, points[i])[: ROWS[derivatives]]
    return result


def _checked(
    positions: NDArray[np.float64], points: NDArray[np.float64], derivatives: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    if derivatives not in ROWS:
        raise EvaluationError(f"derivatives = {derivatives!r}", where="derivatives", expected="0, 1 or 2")
    arrays = []
    for name, values in (("positions", positions), ("points", points)):
        array = np.asarray(values, dtype=np.float64)
        if array.ndim != 2 or array.shape[1] != 3:
            raise EvaluationError(f"an array of shape {array.shape}", where=name, expected="(number, 3), in bohr")
        arrays.append(array)
    return arrays[0], arrays[1]


def _evaluate_shell(shell: Shell, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """(5, n, functions of the shell) at points relative to its centre."""
    distance = np.linalg.norm(points, axis=1)
    center = distance == 0.0
    r = np.where(center, 1.0, distance)  # any number does: these points are overwritten below
    radial, slope, bend = (part[:, None] for part in _radial(shell, r))
    polynomials = shell_polynomials(shell.l, shell.monomial)
    p, px, py, pz, p_laplacian = evaluate_monomials(shell.l, points) @ polynomials.T
    result = np.array([
        radial * p,
        slope * points[:, 0, None] * p + radial * px,
        slope * points[:, 1, None] * p + radial * py,
        slope * points[:, 2, None] * p + radial * pz,
        bend * p + radial * p_laplacian,
    ])  # fmt: skip
    if center.any():
        result[:, center] = _limit(_series_at_center(shell), result[:, 0])[:, None]
    return result


def _radial(shell: Shell, r: NDArray[np.float64]) -> tuple[NDArray[np.float64], ...]:
    """``R``, ``R'/r`` and ``R'' + 2 (l+1) R'/r`` at distances r > 0.

    With t = q a r^q: ``R'/r = sum c r^(n-2) (n - t) exp``, and
    ``R'' + 2 (l+1) R'/r = sum c r^(n-2) (n (n+2l+1) - (2n+2l+1+q) t + t^2) exp``.
    """
    radial, slope, bend = np.zeros_like(r), np.zeros_like(r), np.zeros_like(r)
    q, l = shell.q, shell.l
    for a, c, n in zip(shell.exponents, shell.coefficients, shell.powers.tolist(), strict=True):
        decay = c * np.exp(-a * r**q)
        t_over_r2 = q * a * r ** (q - 2.0)  # 2a for a Gaussian: no digits lost to r^2 / r^2 close to the centre
        t = q * a * r**q
        rising = n * r ** (n - 2.0) if n else np.zeros_like(r)
        radial += decay * r**n
        slope += decay * (rising - t_over_r2 * r**n)
        bend += decay * ((n + 2 * l + 1) * rising + t_over_r2 * r**n * (t - (2 * n + 2 * l + 1 + q)))
    return radial, slope, bend


def _series_at_center(shell: Shell) -> dict[int, NDArray[np.float64]]:
    """Power of r -> (5, functions of the shell): means over a small sphere around the centre, up to r^0.

    With ``R = sum_j s_j r^j`` and M the mean over the unit sphere, the means over the sphere of radius r are
    ``sum_j s_j r^(l+j) M(p)``, ``sum_j s_j r^(l+j-1) (j M(x p) + M(dp/dx))`` and
    ``sum_j s_j r^(l+j-2) (j (j+2l+1) M(p) + M(lap p))``. Powers above j = 2 - l vanish with r.
    """
    l = shell.l
    radial: dict[int, float] = {}
    for a, c, n in zip(shell.exponents.tolist(), shell.coefficients.tolist(), shell.powers.tolist(), strict=True):
        for order in range(max(0, (2 - l - n) // shell.q + 1)):
            j = n + shell.q * order
            radial[j] = radial.get(j, 0.0) + c * (-a) ** order / math.factorial(order)
    polynomials = shell_polynomials(l, shell.monomial)
    mean_p, mean_r_p, mean_gradient, mean_laplacian = (_snapped(polynomials @ part) for part in _means(l))
    series: dict[int, NDArray[np.float64]] = {}
    for j, s in radial.items():
        gradient = s * (j * mean_r_p + mean_gradient)
        rows = [s * mean_p, *gradient.T, s * (j * (j + 2 * l + 1) * mean_p + mean_laplacian)]
        for row, (mean, power) in enumerate(zip(rows, (l + j, *[l + j - 1] * 3, l + j - 2), strict=True)):
            series.setdefault(power, np.zeros((5, len(polynomials))))[row] += mean
    return {power: means for power, means in series.items() if power <= 0}


def _means(l: int) -> tuple[NDArray[np.float64], ...]:
    """Means over the unit sphere of the monomials, of (x, y, z) times them, of their gradients and Laplacians."""
    powers = monomial_powers(l)
    raised, gradient, laplacian = np.zeros((len(powers), 3)), np.zeros((len(powers), 3)), np.zeros(len(powers))
    for row, own in enumerate(powers):
        for x in range(3):
            n = own[x]
            raised[row, x] = mean_over_sphere(*_shifted(own, x, 1))
            gradient[row, x] = n * mean_over_sphere(*_shifted(own, x, -1)) if n else 0.0
            laplacian[row] += n * (n - 1) * mean_over_sphere(*_shifted(own, x, -2)) if n > 1 else 0.0
    return np.array([mean_over_sphere(*own) for own in powers]), raised, gradient, laplacian


def _snapped(means: NDArray[np.float64]) -> NDArray[np.float64]:
    """Zero in place of what rounding left, which a diverging factor would blow up; exact means are 0 or >> 1e-12."""
    return np.where(np.abs(means) < 1e-12, 0.0, means)


def _shifted(powers: tuple[int, int, int], axis: int, by: int) -> tuple[int, int, int]:
    changed = list(powers)
    changed[axis] += by
    return changed[0], changed[1], changed[2]


def _limit(series: dict[int, NDArray[np.float64]], like: NDArray[np.float64]) -> NDArray[np.float64]:
    """Limit of ``sum_j series[j] r^j`` (no j above 0) as r falls to 0, an array like the given one."""
    result = series.get(0, np.zeros_like(like)) + 0.0  # no minus zero
    for power in sorted((j for j in series if j < 0), reverse=True):  # the most negative power has the last word
        result = np.where(series[power] != 0.0, np.copysign(math.inf, series[power]), result)
    return result


def _orbitals_at_center(
    basis: Basis, positions: NDArray[np.float64], matrix: NDArray[Any], point: NDArray[np.float64]
) -> NDArray[Any]:
    """(5, M) at one point that is a centre: divergences are added up before the limit is taken."""
    series: dict[int, NDArray[Any]] = {0: np.zeros((5, basis.n_functions))}
    for shell in shells(basis):
        x = point - positions[shell.center]
        if np.linalg.norm(x) > 0.0:
            series[0][:, shell.functions] = _evaluate_shell(shell, x[None])[:, 0]
            continue
        for power, means in _series_at_center(shell).items():
            series.setdefault(power, np.zeros((5, basis.n_functions)))[:, shell.functions] = means
    combined = {power: means @ matrix.T for power, means in series.items()}
    if not np.iscomplexobj(matrix):
        return _limit(combined, combined[0])
    # Part by part: infinity times a complex number is not a number.
    result: NDArray[np.complex128] = np.empty_like(combined[0])
    result.real = _limit({power: c.real for power, c in combined.items()}, combined[0].real)
    result.imag = _limit({power: c.imag for power, c in combined.items()}, combined[0].imag)
    return result
