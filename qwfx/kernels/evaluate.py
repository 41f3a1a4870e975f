"""Functions and orbitals at many points, fast: the same results as `qwfx.reference`, block by block in threads."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx import reference
from qwfx.errors import EvaluationError
from qwfx.kernels.numeric import fill_blocks
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
    out: NDArray[np.float64] | None = None,
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
    out : (k, F, n) doubles in C order to write to and return a view of; saves fresh memory, which for big results
        takes as long as the evaluation.

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
    shape = (k, plan.n_functions, n)
    result = np.empty(shape) if out is None else out
    if result.shape != shape or result.dtype != np.float64 or not result.flags.c_contiguous:
        raise EvaluationError(
            f"an array of {result.dtype} and shape {result.shape}",
            where="out",
            expected=f"float64 {shape} in C order",
            remedy="pass such an array, or none",
        )
    flat = result.reshape(k * plan.n_functions, n)
    skip = _skipped(plan, plan.cutoffs(threshold), columns)

    def work(space: Workspace, first: int, last: int) -> None:
        for block, s in np.argwhere(skip[first:last]):
            function = slice(int(plan.shell_function[s]), int(plan.shell_function[s] + plan.shell_size[s]))
            start = (first + int(block)) * BLOCK
            result[:, function, start : start + BLOCK] = 0.0
        _fill(plan, columns, first, last, derivatives, space, skip, plan.shell_function, 1, plan.n_functions, flat, 0)

    _over_blocks(plan, n, threads, work)
    values: NDArray[np.float64] = result.transpose(0, 2, 1)
    for i in _points_at(plan.singular_centers, columns):
        at = columns[:, i][None]
        values[:, i] = reference.evaluate_functions(basis, positions, at, derivatives=derivatives)[:, 0]
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
    plan: Plan | None = None,
) -> NDArray[Any]:
    """Orbitals ``phi_p = sum_mu C[p, mu] chi_mu`` at the given points (FORMAT.md, Orbitals).

    The functions of a block of points go straight into the matrix product, while they are in the cache; of shells
    that are left out (see `threshold`) the columns of the coefficients are left out too.

    Parameters
    ----------
    coefficients : (M, F), real or complex.
    threshold : as for `evaluate_functions`; the error of an orbital is at most the threshold times the sum of the
        magnitudes of its coefficients.
    plan : what `make_plan` made of this basis and these positions; saves doing so for a few points.
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
    plan, columns = _checked(basis, positions, points, derivatives, plan)
    k, n = ROWS[derivatives], columns.shape[1]
    is_complex = np.iscomplexobj(matrix)
    stacked = np.concatenate([matrix.real, matrix.imag]) if is_complex else matrix
    stacked = np.ascontiguousarray(stacked, dtype=np.float64)
    result = np.empty((k, len(stacked), n))
    skip = _skipped(plan, plan.cutoffs(threshold), columns)

    def work(space: Workspace, first: int, last: int) -> None:
        functions, orbitals = np.empty(plan.n_functions * k * BLOCK), np.empty(len(stacked) * k * BLOCK)
        for block in range(first, last):
            start, size = block * BLOCK, min(BLOCK, n - block * BLOCK)
            rows, used = _compact(plan, skip[block])
            x = functions[: used * k * size].reshape(used * k, size)
            _fill(plan, columns, block, block + 1, derivatives, space, skip, rows * k, k, 1, x, start)
            y = orbitals[: len(stacked) * k * size].reshape(len(stacked), k * size)
            taken = stacked if used == plan.n_functions else stacked[:, _used_functions(plan, skip[block])]
            np.matmul(taken, x.reshape(used, k * size), out=y)
            result[:, :, start : start + size] = y.reshape(len(stacked), k, size).transpose(1, 0, 2)

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
    basis: Basis, positions: NDArray[np.float64], points: NDArray[np.float64], derivatives: int,
    plan: Plan | None = None,
) -> tuple[Plan, NDArray[np.float64]]:  # fmt: skip
    """The plan, and the points as three rows."""
    if derivatives not in ROWS:
        raise EvaluationError(f"derivatives = {derivatives!r}", where="derivatives", expected="0, 1 or 2")
    arrays = []
    for name, values in (("positions", positions), ("points", points)):
        array = np.asarray(values, dtype=np.float64)
        if array.ndim != 2 or array.shape[1] != 3:
            raise EvaluationError(f"an array of shape {array.shape}", where=name, expected="(number, 3), in bohr")
        arrays.append(array)
    return plan or make_plan(basis, arrays[0]), np.ascontiguousarray(arrays[1].T)


def _over_blocks(plan: Plan, n: int, threads: int | None, work: Callable[[Workspace, int, int], None]) -> None:
    """Call `work` for ranges of blocks of points, each thread with a workspace of its own."""
    blocks = -(-n // BLOCK)
    n_threads = max(min(threads or os.cpu_count() or 1, blocks), 1)
    bounds = [blocks * t // n_threads for t in range(n_threads + 1)]
    if n_threads == 1:
        work(Workspace(plan, BLOCK), 0, blocks)
        return
    with ThreadPoolExecutor(n_threads) as pool:
        jobs = [pool.submit(work, Workspace(plan, BLOCK), first, last) for first, last in pairwise(bounds)]
        for job in jobs:
            job.result()


def _skipped(plan: Plan, cutoffs: NDArray[np.float64], columns: NDArray[np.float64]) -> NDArray[np.bool_]:
    """(blocks, S): which sorted shells are negligible at all points of a block, by the box around its points."""
    starts = np.arange(0, columns.shape[1], BLOCK)
    if np.isinf(cutoffs).all() or not len(starts):
        return np.zeros((len(starts), len(cutoffs)), dtype=bool)
    low = np.minimum.reduceat(columns, starts, axis=1).T[:, None, :]
    high = np.maximum.reduceat(columns, starts, axis=1).T[:, None, :]
    outside = np.maximum(low - plan.centers, plan.centers - high).clip(min=0.0)
    nearest = np.repeat(np.linalg.norm(outside, axis=2), np.diff(plan.atom_shells), axis=1)
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
    plan: Plan, columns: NDArray[np.float64], first: int, last: int, derivatives: int, space: Workspace,
    skip: NDArray[np.bool_], row_of: NDArray[np.int64], function_stride: int, stride: int,
    out: NDArray[np.float64], shift: int,
) -> None:  # fmt: skip
    fill_blocks(
        columns, first, last, BLOCK, plan.centers, plan.atom_shells, plan.atom_exponents, plan.unique_exponents,
        plan.shell_l, plan.shell_monomial, plan.shell_first, plan.shell_simple, plan.scale, plan.decay, plan.power,
        plan.exponent_of, plan.q, plan.norms, derivatives, space.xyz, space.e, space.w,
        space.polar, space.plane, space.solid, space.cartesian, space.monomial, skip, row_of, function_stride, stride,
        out, shift,
    )  # fmt: skip
