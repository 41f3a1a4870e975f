"""Overlap integrals of Gaussian shells, fast; everything else through `qwfx.reference.overlap`."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx import reference
from qwfx.errors import EvaluationError
from qwfx.kernels.numeric import JIT, LARGEST_L
from qwfx.kernels.plan import Plan, make_plan
from qwfx.model import Basis
from qwfx.reference.harmonics import monomial_powers, shell_polynomials

__all__ = ["overlap"]

NEGLIGIBLE = 500.0
"""Pairs of primitives with a factor below exp(-500) = 1e-217 are left out: no digit of a sum of doubles changes."""


def overlap(basis: Basis, positions: NDArray[np.float64]) -> NDArray[np.float64]:
    """Overlap matrix of the functions of a basis, ``S_mn = int chi_m chi_n``.

    The matrix is bilinear in the coefficients of the shells: another factor per shell or per function scales rows and
    columns of it, and needs no new integrals.

    Parameters
    ----------
    basis : the shells.
    positions : (A, 3) centres, bohr.

    Returns
    -------
    (F, F), symmetric.

    Raises
    ------
    EvaluationError
        Positions of another shape, or a shell on an atom that does not exist.
    UnsupportedError
        See `qwfx.reference.overlap`.
    """
    centers = np.asarray(positions, dtype=np.float64)
    if centers.ndim != 2 or centers.shape[1] != 3:
        raise EvaluationError(
            f"an array of shape {centers.shape}",
            where="positions",
            expected="(number, 3), in bohr",
            remedy="pass the positions of all atoms",
        )
    if basis.radial != "gaussian" or (basis.powers is not None and np.any(basis.powers)):
        return reference.overlap(basis, centers)
    if basis.n_shells and int(np.max(basis.shell_l)) > LARGEST_L:
        return reference.overlap(basis, centers)
    plan = make_plan(basis, centers)
    polynomials = [shell_polynomials(int(l), bool(m)) for l, m in zip(plan.shell_l, plan.shell_monomial, strict=True)]
    offsets = np.concatenate([[0], np.cumsum([p.size for p in polynomials])]).astype(np.int64)
    flat = np.concatenate([p.reshape(-1) for p in polynomials]) if polynomials else np.zeros(0)
    result = np.zeros((plan.n_functions, plan.n_functions))
    atom_of = np.repeat(np.arange(len(centers)), np.diff(plan.atom_shells))
    _overlap(
        centers, atom_of, plan.shell_l, plan.shell_monomial, plan.shell_first, plan.scale, plan.decay,
        plan.shell_function, plan.shell_size, flat, offsets, *_powers(plan), result,
    )  # fmt: skip
    return result


def _powers(plan: Plan) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Powers of the monomials of every degree one after another, and the offset of each degree."""
    top = int(np.max(plan.shell_l, initial=0))
    lists = [np.array(monomial_powers(l), dtype=np.int64) for l in range(top + 1)]
    return np.concatenate(lists), np.concatenate([[0], np.cumsum([len(p) for p in lists])]).astype(np.int64)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _line(top_a: int, top_b: int, pa: float, pb: float, half: float, first: float, table: Any) -> None:
    """One-dimensional overlaps ``table[i, j]`` by upward recursion (Obara and Saika, J. Chem. Phys. 84, 3963 (1986)).

    ``S_(i+1)j = PA S_ij + (i S_(i-1)j + j S_i(j-1)) / 2p`` and the same for j with PB; `half` is 1/2p.
    """
    table[0, 0] = first
    for i in range(1, top_a + 1):
        table[i, 0] = pa * table[i - 1, 0] + (half * (i - 1) * table[i - 2, 0] if i > 1 else 0.0)
    for j in range(1, top_b + 1):
        for i in range(top_a + 1):
            value = pb * table[i, j - 1]
            if j > 1:
                value += half * (j - 1) * table[i, j - 2]
            if i > 0:
                value += half * i * table[i - 1, j - 1]
            table[i, j] = value


@njit(**JIT)  # type: ignore[untyped-decorator]
def _overlap(
    centers: Any, atom_of: Any, shell_l: Any, shell_monomial: Any, shell_first: Any, scale: Any, decay: Any,
    function: Any, size: Any, polynomials: Any, offsets: Any, powers: Any, power_start: Any, result: Any,
) -> None:  # fmt: skip
    """The whole matrix, pair of shells by pair of shells."""
    x, y, z = np.empty((8, 8)), np.empty((8, 8)), np.empty((8, 8))
    cartesian, half_done = np.empty((28, 28)), np.empty((28, 28))
    for s in range(len(shell_l)):
        for t in range(s + 1):
            la, lb = shell_l[s], shell_l[t]
            na, nb = (la + 1) * (la + 2) // 2, (lb + 1) * (lb + 2) // 2
            a0, b0 = power_start[la], power_start[lb]
            ax, ay, az = centers[atom_of[s], 0], centers[atom_of[s], 1], centers[atom_of[s], 2]
            dx, dy, dz = centers[atom_of[t], 0] - ax, centers[atom_of[t], 1] - ay, centers[atom_of[t], 2] - az
            square = dx * dx + dy * dy + dz * dz
            cartesian[:na, :nb] = 0.0
            any_left = False
            for p in range(shell_first[s], shell_first[s + 1]):
                for q in range(shell_first[t], shell_first[t + 1]):
                    a, b = decay[p], decay[q]
                    total = a + b
                    exponent = a * b / total * square
                    if exponent > NEGLIGIBLE:
                        continue
                    any_left = True
                    half = 0.5 / total
                    to_b = b / total  # P - A = (b / p) (B - A), P - B = -(a / p) (B - A)
                    to_a = -a / total
                    root = np.sqrt(np.pi / total)
                    front = scale[p] * scale[q] * np.exp(-exponent) * root
                    _line(la, lb, to_b * dx, to_a * dx, half, front, x)
                    _line(la, lb, to_b * dy, to_a * dy, half, root, y)
                    _line(la, lb, to_b * dz, to_a * dz, half, root, z)
                    for i in range(na):
                        i0, i1, i2 = powers[a0 + i, 0], powers[a0 + i, 1], powers[a0 + i, 2]
                        for j in range(nb):
                            j0, j1, j2 = powers[b0 + j, 0], powers[b0 + j, 1], powers[b0 + j, 2]
                            cartesian[i, j] += x[i0, j0] * y[i1, j1] * z[i2, j2]
            if not any_left:
                continue
            for f in range(size[s]):
                for j in range(nb):
                    total = 0.0
                    for i in range(na):
                        total += polynomials[offsets[s] + f * na + i] * cartesian[i, j]
                    half_done[f, j] = total
            for f in range(size[s]):
                for g in range(size[t]):
                    total = 0.0
                    for j in range(nb):
                        total += half_done[f, j] * polynomials[offsets[t] + g * nb + j]
                    row, column = function[s] + f, function[t] + g
                    if s == t and g > f:
                        continue
                    result[row, column] = total
                    result[column, row] = total
