"""Minors of a table and their cofactors, for a block of walkers at a time.

Every array has a row for each number of the formula, and in it the numbers of the walkers of a block: `WIDE` or
`NARROW` of them. Element (h, p) of a table with M columns is row h M + p.

Elimination with pivots chosen for each walker: cofactor expansions would lose most digits where the reference
determinant is small and the table large.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from qwfx.kernels.lanes import (
    divide,
    equal,
    larger,
    load,
    minus_product,
    plus_product,
    same,
    size,
    store,
    times,
)
from qwfx.kernels.numeric import JIT

__all__ = ["NARROW", "WIDE", "add_cofactors", "careful_cofactors", "fill_minors"]

WIDE = (0,) * 8
"""A block of walkers: one cache line, and one, two or four vector registers."""
NARROW = (0,)
"""One walker, where there are too few for a block."""

TINY = 1e-290
"""Pivots below, but for the last, have no inverse that could be used."""


@njit(**JIT)  # type: ignore[untyped-decorator]
def _eliminate(a: Any, k: int, det: Any, order: Any, width: Any) -> None:
    """LU factors of a (k k, walkers) in place, rows exchanged; row c of `order` is the row that c was exchanged with.

    Row 0 of `det` is the product of all pivots, with its sign, row 1 the same without the last pivot. The exchanges
    are selections by walker, without branches, so that they are done for the whole block at once. Row k of `order` is
    1 where a pivot before the last vanishes, else 0.
    """
    product = same(a, 1.0, width)
    broken = same(order, 0.0, width)
    for c in range(k):
        best = size(load(a, c * k + c, width))
        chosen = same(order, c, width)
        for r in range(c + 1, k):
            found = size(load(a, r * k + c, width))
            chosen = larger(found, best, same(order, r, width), chosen)
            best = larger(found, best, found, best)
        store(order, c, chosen)
        for r in range(c + 1, k):
            row = same(order, r, width)
            for j in range(k):
                x, y = load(a, c * k + j, width), load(a, r * k + j, width)
                store(a, c * k + j, equal(chosen, row, y, x))
                store(a, r * k + j, equal(chosen, row, x, y))
        product = equal(chosen, same(order, c, width), product, times(-1.0, product))
        store(det, 1, product)
        if c < k - 1:
            broken = larger(best, same(order, TINY, width), broken, same(order, 1.0, width))
        pivot = load(a, c * k + c, width)
        product = times(product, pivot)
        for r in range(c + 1, k):
            factor = divide(load(a, r * k + c, width), pivot)
            store(a, r * k + c, factor)
            for j in range(c + 1, k):
                store(a, r * k + j, minus_product(load(a, r * k + j, width), factor, load(a, c * k + j, width)))
    store(det, 0, product)
    store(order, k, broken)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _gather(table: Any, n_columns: int, holes: Any, particles: Any, a: Any, width: Any) -> None:
    k = len(holes)
    for i in range(k):
        for j in range(k):
            store(a, i * k + j, load(table, holes[i] * n_columns + particles[j], width))


@njit(**JIT)  # type: ignore[untyped-decorator]
def fill_minors(
    table: Any, n_columns: int, string: Any, holes: Any, particles: Any, sign: Any, out: Any, width: Any
) -> None:
    """Row string[m] of `out` = sign[m] det table[holes[m], particles[m]]."""
    k, lanes = holes.shape[1], len(width)
    a = np.empty((k * k, lanes), table.dtype)
    det = np.empty((2, lanes), table.dtype)
    order = np.empty((k + 1, lanes))
    for m in range(len(string)):
        if k == 0:
            store(out, string[m], same(out, sign[m], width))
        elif k == 1:
            store(out, string[m], times(sign[m], load(table, holes[m, 0] * n_columns + particles[m, 0], width)))
        elif k == 2:
            upper, lower, p0, p1 = holes[m, 0] * n_columns, holes[m, 1] * n_columns, particles[m, 0], particles[m, 1]
            minor = times(load(table, upper + p0, width), load(table, lower + p1, width))
            minor = minus_product(minor, load(table, upper + p1, width), load(table, lower + p0, width))
            store(out, string[m], times(sign[m], minor))
        else:
            _gather(table, n_columns, holes[m], particles[m], a, width)
            _eliminate(a, k, det, order, width)
            store(out, string[m], times(sign[m], load(det, 0, width)))


@njit(**JIT)  # type: ignore[untyped-decorator]
def _adjugate(a: Any, k: int, det: Any, order: Any, inverse: Any, x: Any, adjugate: Any, width: Any) -> None:
    """The adjugate from the factors: the inverse times the determinant, without a division by the last pivot.

    Column c of it solves A y = det e_c; the factor det is put in as (product of the other pivots) times the last one,
    which cancels, so that a minor that vanishes still has the right cofactors. A small pivot before the last costs no
    digits either: all that is divided by it is proportional to it. Only pivots of zero do not cancel.
    """
    one = same(a, 1.0, width)
    for r in range(k - 1):
        store(inverse, r, divide(one, load(a, r * k + r, width)))
    for c in range(k):
        for r in range(k):
            store(x, r, same(a, 1.0 if r == c else 0.0, width))
        for s in range(k):  # the exchanges of rows, in their order
            chosen = load(order, s, width)
            for r in range(s + 1, k):
                row = same(order, r, width)
                y, z = load(x, s, width), load(x, r, width)
                store(x, s, equal(chosen, row, z, y))
                store(x, r, equal(chosen, row, y, z))
        for r in range(1, k):
            y = load(x, r, width)
            for j in range(r):
                y = minus_product(y, load(a, r * k + j, width), load(x, j, width))
            store(x, r, y)
        store(adjugate, (k - 1) * k + c, times(load(det, 1, width), load(x, k - 1, width)))
        for r in range(k - 2, -1, -1):
            y = times(load(det, 0, width), load(x, r, width))
            for j in range(r + 1, k):
                y = minus_product(y, load(a, r * k + j, width), load(adjugate, j * k + c, width))
            store(adjugate, r * k + c, times(y, load(inverse, r, width)))


@njit(**JIT)  # type: ignore[untyped-decorator]
def _add(out: Any, row: int, weight: Any, x: Any, width: Any) -> None:
    store(out, row, plus_product(load(out, row, width), weight, x))


@njit(**JIT)  # type: ignore[untyped-decorator]
def careful_cofactors(a: Any, cofactors: Any) -> None:
    """Cofactors of one matrix (k, k), which is overwritten, by elimination with rows and columns exchanged.

    As `_adjugate`, with the largest element that is left as the pivot: where that is zero before the last, nothing but
    zeros is left.
    """
    k = len(a)
    row, column, y = np.arange(k), np.arange(k), np.empty(k, a.dtype)
    last = det = a[0, 0] * 0 + 1
    for c in range(k):
        r0, j0 = c, c
        for r in range(c, k):
            for j in range(c, k):
                if abs(a[r, j]) > abs(a[r0, j0]):
                    r0, j0 = r, j
        if r0 != c:
            row[c], row[r0] = row[r0], row[c]
            det = -det
            for j in range(k):
                a[c, j], a[r0, j] = a[r0, j], a[c, j]
        if j0 != c:
            column[c], column[j0] = column[j0], column[c]
            det = -det
            for r in range(k):
                a[r, c], a[r, j0] = a[r, j0], a[r, c]
        last = det
        det = det * a[c, c]
        if a[c, c] != 0:
            for r in range(c + 1, k):
                a[r, c] = a[r, c] / a[c, c]
                for j in range(c + 1, k):
                    a[r, j] -= a[r, c] * a[c, j]
    for unit in range(k):
        for r in range(k):
            y[r] = 1.0 if row[r] == unit else 0.0
            for j in range(r):
                y[r] -= a[r, j] * y[j]
        y[k - 1] *= last
        for r in range(k - 2, -1, -1):
            y[r] *= det
            for j in range(r + 1, k):
                y[r] -= a[r, j] * y[j]
            # With a pivot of zero before the last, there is no cofactor but zero.
            y[r] = y[r] / a[r, r] if a[r, r] != 0 else 0 * y[r]
        for r in range(k):
            cofactors[unit, column[r]] = y[r]


@njit(**JIT)  # type: ignore[untyped-decorator]
def add_cofactors(
    table: Any, n_columns: int, string: Any, holes: Any, particles: Any, sign: Any, weight: Any, out: Any, width: Any
) -> None:
    """Row h M + p of out[s] += weight[s, string] d(sign det table[holes, particles]) / d table[h, p].

    weight: (S, K, walkers). out: (S, n M, walkers).
    """
    k, lanes = holes.shape[1], len(width)
    a, adjugate = np.empty((k * k, lanes), table.dtype), np.empty((k * k, lanes), table.dtype)
    x, inverse = np.empty((k, lanes), table.dtype), np.empty((k, lanes), table.dtype)
    one, cofactors = np.empty((k, k), table.dtype), np.empty((k, k), table.dtype)
    det = np.empty((2, lanes), table.dtype)
    order = np.empty((k + 1, lanes))
    for m in range(len(string)):
        if k > 2:
            _gather(table, n_columns, holes[m], particles[m], a, width)
            _eliminate(a, k, det, order, width)
            _adjugate(a, k, det, order, inverse, x, adjugate, width)
            for b in range(lanes):
                if order[k, b] != 0.0:
                    for i in range(k):
                        for j in range(k):
                            one[i, j] = table[holes[m, i] * n_columns + particles[m, j], b]
                    careful_cofactors(one, cofactors)
                    for i in range(k):
                        for j in range(k):
                            adjugate[j * k + i, b] = cofactors[i, j]
        for s in range(len(weight)):
            w = times(sign[m], load(weight[s], string[m], width))
            if k == 1:
                _add(out[s], holes[m, 0] * n_columns + particles[m, 0], 1.0, w, width)
            elif k == 2:
                upper, lower = holes[m, 0] * n_columns, holes[m, 1] * n_columns
                p0, p1 = particles[m, 0], particles[m, 1]
                minus = times(-1.0, w)
                _add(out[s], upper + p0, w, load(table, lower + p1, width), width)
                _add(out[s], lower + p1, w, load(table, upper + p0, width), width)
                _add(out[s], upper + p1, minus, load(table, lower + p0, width), width)
                _add(out[s], lower + p0, minus, load(table, upper + p1, width), width)
            else:
                for i in range(k):
                    for j in range(k):
                        # The cofactor of element (i, j) is the adjugate's element (j, i).
                        where = holes[m, i] * n_columns + particles[m, j]
                        _add(out[s], where, w, load(adjugate, j * k + i, width), width)
