"""Functions and orbitals at many points, fast: the same results as `qwfx.reference`, block by block in threads."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx import reference
from qwfx.errors import EvaluationError
from qwfx.kernels.numeric import fill_block
from qwfx.kernels.plan import BLOCK, Plan, Workspace, make_plan
from qwfx.model import Array, Basis

__all__ = ["evaluate_functions", "evaluate_orbitals"]

ROWS = {0: 1, 1: 4, 2: 5}


def evaluate_functions(
    basis: Basis,
    positions: NDArray[np.float64],
    points: NDArray[np.float64],
    *,
    derivatives: int = 2,
    threshold: float = 0.0,
    threads: int | None = None,
) -> NDArray[np.float64]:
    """All functions of a basis at the given points (FORMAT.md, Functions).

    Parameters
    ----------
    basis : shells with l up to 6.
    positions : (A, 3) centres, bohr.
    points : (n, 3) bohr.
    derivatives : 0 values; 1 and gradients; 2 and Laplacians.
    threshold : shells whose values, gradients and Laplacians are all below this at every point of a block of
        points are left at zero there. 0.0 leaves nothing out. The bound is rigorous, see `Plan.cutoffs`.
    threads : number of threads; None takes all processors. The result does not depend on it.

    Returns
    -------
    (k, n, F), k = 1, 4 or 5: value, d/dx, d/dy, d/dz, Laplacian. The points are the fastest axis in memory.

    Raises
    ------
    EvaluationError
        Arguments of another shape, or a shell on an atom that does not exist.
    UnsupportedError
        l above 6: use `qwfx.reference.evaluate_functions`.
    """
    plan, columns = _checked(basis, positions, points, derivatives)
    k, n = ROWS[derivatives], columns.shape[1]
    result = np.empty((k, plan.n_functions, n))
    flat = result.reshape(k * plan.n_functions, n)
    cutoffs = plan.cutoffs(threshold)

    def work(space: Workspace, first: int, size: int) -> None:
        skip = _skipped(plan, cutoffs, columns[:, first : first + size])
        for s in np.flatnonzero(skip):
            function = slice(int(plan.shell_function[s]), int(plan.shell_function[s] + plan.shell_size[s]))
            result[:, function, first : first + size] = 0.0
        _fill(plan, columns, first, size, derivatives, space, skip, plan.shell_function, 1, plan.n_functions, flat, first)

    _over_blocks(plan, n, threads, work)
    values: NDArray[np.float64] = result.transpose(0, 2, 1)
    for i in _points_at(plan.singular_centers, columns):
        values[:, i] = reference.evaluate_functions(basis, positions, columns[:, i][None], derivatives=derivatives)[:, 0]
    return values


def evaluate_orbitals(
    basis: Basis,
    positions: NDArray[np.float64],
    coefficients: Array,
    points: NDArray[np.float64],
    *,
    derivatives: int = 2,
    threshold: float = 0.0,
    threads: int | None = None,
) -> NDArray[Any]:
    """Orbitals ``phi_p = sum_mu C[p, mu] chi_mu`` at the given points (FORMAT.md, Orbitals).

    The functions of a block of points go straight into the matrix product, while they are in the cache; of shells
    that are left out (see `threshold`) the columns of the coefficients are left out too.

    Parameters
    ----------
    coefficients : (M, F), real or complex.
    threshold : as for `evaluate_functions`; the error of an orbital is at most the threshold times the sum of the
        magnitudes of its coefficients.
    basis, positions, points, derivatives, threads : as for `evaluate_functions`.

    Returns
    -------
    (k, n, M), real or complex as `coefficients`. The points are the fastest axis in memory.

    Raises
    ------
    EvaluationError, UnsupportedError
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
    plan, columns = _checked(basis, positions, points, derivatives)
    k, n = ROWS[derivatives], columns.shape[1]
    is_complex = np.iscomplexobj(matrix)
    stacked = np.concatenate([matrix.real, matrix.imag]) if is_complex else matrix
    stacked = np.ascontiguousarray(stacked, dtype=np.float64)
    result = np.empty((k, len(stacked), n))
    cutoffs = plan.cutoffs(threshold)
    scratch: dict[int, tuple[NDArray[np.float64], NDArray[np.float64]]] = {}

    def work(space: Workspace, first: int, size: int) -> None:
        if id(space) not in scratch:
            scratch[id(space)] = np.empty(plan.n_functions * k * BLOCK), np.empty(len(stacked) * k * BLOCK)
        functions, orbitals = scratch[id(space)]
        skip = _skipped(plan, cutoffs, columns[:, first : first + size])
        rows, used = _compact(plan, skip)
        x = functions[: used * k * size].reshape(used * k, size)
        _fill(plan, columns, first, size, derivatives, space, skip, rows * k, k, 1, x, 0)
        y = orbitals[: len(stacked) * k * size].reshape(len(stacked), k * size)
        taken = stacked if used == plan.n_functions else stacked[:, _used_functions(plan, skip)]
        np.matmul(taken, x.reshape(used, k * size), out=y)
        result[:, :, first : first + size] = y.reshape(len(stacked), k, size).transpose(1, 0, 2)

    _over_blocks(plan, n, threads, work)
    if is_complex:
        half = len(matrix)
        values = (result[:, :half] + 1j * result[:, half:]).transpose(0, 2, 1)
    else:
        values = result.transpose(0, 2, 1)
    for i in _points_at(plan.singular_centers, columns):
        at = columns[:, i][None]
        values[:, i] = reference.evaluate_orbitals(basis, positions, matrix, at, derivatives=derivatives)[:, 0]
    return values


def _checked(
    basis: Basis, positions: NDArray[np.float64], points: NDArray[np.float64], derivatives: int
) -> tuple[Plan, NDArray[np.float64]]:
    """The plan, and the points as three rows."""
    if derivatives not in ROWS:
        raise EvaluationError(f"derivatives = {derivatives!r}", where="derivatives", expected="0, 1 or 2")
    arrays = []
    for name, values in (("positions", positions), ("points", points)):
        array = np.asarray(values, dtype=np.float64)
        if array.ndim != 2 or array.shape[1] != 3:
            raise EvaluationError(f"an array of shape {array.shape}", where=name, expected="(number, 3), in bohr")
        arrays.append(array)
    return make_plan(basis, arrays[0]), np.ascontiguousarray(arrays[1].T)


def _over_blocks(plan: Plan, n: int, threads: int | None, work: Callable[[Workspace, int, int], None]) -> None:
    """Call `work` for every block of points, each thread with a workspace of its own."""
    starts = list(range(0, n, BLOCK))
    n_threads = min(threads or os.cpu_count() or 1, len(starts)) or 1

    def share(own: Iterator[int]) -> None:
        space = Workspace(plan, BLOCK)
        for first in own:
            work(space, first, min(BLOCK, n - first))

    if n_threads == 1:
        share(iter(starts))
        return
    with ThreadPoolExecutor(n_threads) as pool:
        for done in [pool.submit(share, iter(starts[t::n_threads])) for t in range(n_threads)]:
            done.result()


def _skipped(plan: Plan, cutoffs: NDArray[np.float64], columns: NDArray[np.float64]) -> NDArray[np.bool_]:
    """Which sorted shells are negligible at all points of a block, by the distance of its nearest point."""
    if np.isinf(cutoffs).all():
        return np.zeros(len(cutoffs), dtype=bool)
    # The nearest point is at least as far as the box around the block.
    outside = np.maximum(columns.min(axis=1) - plan.centers, plan.centers - columns.max(axis=1)).clip(min=0.0)
    nearest = np.repeat(np.linalg.norm(outside, axis=1), np.diff(plan.atom_shells))
    return np.asarray(nearest > cutoffs)


def _compact(plan: Plan, skip: NDArray[np.bool_]) -> tuple[NDArray[np.int64], int]:
    """First row of each sorted shell among the functions that are not skipped, in the order of the basis."""
    if not skip.any():
        return plan.shell_function, plan.n_functions
    order = np.argsort(plan.shell_function, kind="stable")
    sizes = np.where(skip, 0, plan.shell_size)[order]
    rows = np.empty_like(plan.shell_function)
    rows[order] = np.cumsum(sizes) - sizes
    return rows, int(sizes.sum())


def _used_functions(plan: Plan, skip: NDArray[np.bool_]) -> NDArray[np.bool_]:
    used = np.zeros(plan.n_functions, dtype=bool)
    for s in np.flatnonzero(~skip):
        used[plan.shell_function[s] : plan.shell_function[s] + plan.shell_size[s]] = True
    return used


def _points_at(centers: NDArray[np.float64], columns: NDArray[np.float64]) -> NDArray[np.int64]:
    """Indices of the points that coincide with one of the centres."""
    if not len(centers) or not columns.shape[1]:
        return np.zeros(0, dtype=np.int64)
    hit = np.zeros(columns.shape[1], dtype=bool)
    for c in centers:
        # As the reference does: the norm of the difference is zero, which underflow of the squares makes wider.
        hit |= np.linalg.norm(columns - c[:, None], axis=0) == 0.0
    return np.flatnonzero(hit)


def _fill(
    plan: Plan, columns: NDArray[np.float64], first: int, size: int, derivatives: int, space: Workspace,
    skip: NDArray[np.bool_], row_of: NDArray[np.int64], function_stride: int, stride: int,
    out: NDArray[np.float64], start: int,
) -> None:  # fmt: skip
    fill_block(
        columns, first, size, plan.centers, plan.atom_shells, plan.atom_exponents, plan.unique_exponents,
        plan.shell_l, plan.shell_monomial, plan.shell_first, plan.shell_simple, plan.scale, plan.decay, plan.power,
        plan.exponent_of, plan.q, plan.norms, derivatives, space.xyz, space.e, space.w, space.bits, space.bits_as_int,
        space.polar, space.plane, space.solid, space.cartesian, space.monomial, skip, row_of, function_stride, stride,
        out, start,
    )  # fmt: skip
