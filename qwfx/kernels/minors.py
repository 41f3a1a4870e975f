"""Minors of a table and their cofactors, for a block of walkers at a time: the walkers are the last axis.

A block has `WIDE` or `NARROW` walkers. The kernels take that tuple for its length, which is part of its type: loops
over the walkers have a length that the compiler knows, and become vector instructions.

Elimination with pivots chosen for each walker: cofactor expansions would lose most digits where the reference
determinant is small and the table large.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from qwfx.kernels.numeric import JIT

__all__ = ["NARROW", "WIDE", "add_cofactors", "fill_minors"]

WIDE = (0,) * 8
"""A block of walkers: one cache line, and two or four vector registers."""
NARROW = (0,)
"""One walker, where there are too few for a block."""


@njit(**JIT)  # type: ignore[untyped-decorator]
def _eliminate(a: Any, k: int, det: Any, last: Any, order: Any, width: Any) -> None:
    """LU factors of (k, k, walkers) in place, rows exchanged; `det` is the product of all pivots, with its sign.

    `last` is that product without the last pivot, and order[c] the row that was exchanged with row c. The exchanges
    are selections by walker, without branches, so that they are done for the whole block at once.
    """
    lanes = len(width)
    best = np.empty(lanes)
    for b in range(lanes):
        det[b] = 1.0
    for c in range(k):
        for b in range(lanes):
            best[b] = abs(a[c, c, b])
            order[c, b] = c
        for r in range(c + 1, k):
            for b in range(lanes):
                size = abs(a[r, c, b])
                better = size > best[b]
                best[b] = size if better else best[b]
                order[c, b] = r if better else order[c, b]
        for r in range(c + 1, k):
            for j in range(k):
                for b in range(lanes):
                    swap = order[c, b] == r
                    x, y = a[c, j, b], a[r, j, b]
                    a[c, j, b] = y if swap else x
                    a[r, j, b] = x if swap else y
        for b in range(lanes):
            last[b] = det[b] if order[c, b] == c else -det[b]
            det[b] = last[b] * a[c, c, b]
        for r in range(c + 1, k):
            for b in range(lanes):
                pivot = a[c, c, b]
                a[r, c, b] = a[r, c, b] / pivot if pivot != 0.0 else 0.0 * pivot
            for j in range(c + 1, k):
                for b in range(lanes):
                    a[r, j, b] -= a[r, c, b] * a[c, j, b]


@njit(**JIT)  # type: ignore[untyped-decorator]
def _gather(table: Any, holes: Any, particles: Any, a: Any, width: Any) -> None:
    lanes = len(width)
    for i in range(len(holes)):
        for j in range(len(particles)):
            for b in range(lanes):
                a[i, j, b] = table[holes[i], particles[j], b]


@njit(**JIT)  # type: ignore[untyped-decorator]
def fill_minors(table: Any, string: Any, holes: Any, particles: Any, sign: Any, out: Any, width: Any) -> None:
    """out[string[m], b] = sign[m] det table[holes[m], particles[m], b], for a table (n, M, walkers)."""
    k, lanes = holes.shape[1], len(width)
    a = np.empty((k, k, lanes), table.dtype)
    det, last = np.empty(lanes, table.dtype), np.empty(lanes, table.dtype)
    order = np.empty((k, lanes), np.int64)
    for m in range(len(string)):
        if k == 0:
            for b in range(lanes):
                out[string[m], b] = sign[m]
        elif k == 1:
            for b in range(lanes):
                out[string[m], b] = sign[m] * table[holes[m, 0], particles[m, 0], b]
        elif k == 2:
            h0, h1, p0, p1 = holes[m, 0], holes[m, 1], particles[m, 0], particles[m, 1]
            for b in range(lanes):
                crossed = table[h0, p1, b] * table[h1, p0, b]
                out[string[m], b] = sign[m] * (table[h0, p0, b] * table[h1, p1, b] - crossed)
        else:
            _gather(table, holes[m], particles[m], a, width)
            _eliminate(a, k, det, last, order, width)
            for b in range(lanes):
                out[string[m], b] = sign[m] * det[b]


@njit(**JIT)  # type: ignore[untyped-decorator]
def _adjugate(a: Any, k: int, det: Any, last: Any, order: Any, x: Any, adjugate: Any, width: Any) -> None:
    """The adjugate from the factors: the inverse times the determinant, without a division by the last pivot.

    Column c of it solves A y = det e_c; the factor det is put in as (product of the other pivots) times the last one,
    which cancels, so that a minor that vanishes still has the right cofactors.
    """
    lanes = len(width)
    for c in range(k):
        for r in range(k):
            for b in range(lanes):
                x[r, b] = 1.0 if r == c else 0.0
        for s in range(k):  # the exchanges of rows, in their order
            for r in range(s + 1, k):
                for b in range(lanes):
                    swap = order[s, b] == r
                    y, z = x[s, b], x[r, b]
                    x[s, b] = z if swap else y
                    x[r, b] = y if swap else z
        for r in range(1, k):
            for j in range(r):
                for b in range(lanes):
                    x[r, b] -= a[r, j, b] * x[j, b]
        for b in range(lanes):
            adjugate[k - 1, c, b] = last[b] * x[k - 1, b]
        for r in range(k - 2, -1, -1):
            for b in range(lanes):
                x[r, b] = det[b] * x[r, b]
            for j in range(r + 1, k):
                for b in range(lanes):
                    x[r, b] -= a[r, j, b] * adjugate[j, c, b]
            for b in range(lanes):
                adjugate[r, c, b] = x[r, b] / a[r, r, b]


@njit(**JIT)  # type: ignore[untyped-decorator]
def add_cofactors(
    table: Any, string: Any, holes: Any, particles: Any, sign: Any, weight: Any, out: Any, odd: Any, width: Any
) -> int:
    """out[s, h, p, b] += weight[s, string, b] d(sign det table[holes, particles, b]) / d table[h, p, b].

    out: (S, n, M, walkers). Where the elimination meets a pivot of zero before the last, the minor is left out and
    noted in odd[:, 0] = m, odd[:, 1] = b; returns how many there are (more than fit are counted only).
    """
    k, n_states, n_odd, lanes = holes.shape[1], weight.shape[0], 0, len(width)
    a = np.empty((k, k, lanes), table.dtype)
    adjugate = np.empty((k, k, lanes), table.dtype)
    x = np.empty((k, lanes), table.dtype)
    det, last = np.empty(lanes, table.dtype), np.empty(lanes, table.dtype)
    order = np.empty((k, lanes), np.int64)
    keep = np.ones(lanes)
    for m in range(len(string)):
        if k == 1:
            for s in range(n_states):
                for b in range(lanes):
                    out[s, holes[m, 0], particles[m, 0], b] += sign[m] * weight[s, string[m], b]
            continue
        if k == 2:
            h0, h1, p0, p1 = holes[m, 0], holes[m, 1], particles[m, 0], particles[m, 1]
            for s in range(n_states):
                for b in range(lanes):
                    w = sign[m] * weight[s, string[m], b]
                    out[s, h0, p0, b] += w * table[h1, p1, b]
                    out[s, h1, p1, b] += w * table[h0, p0, b]
                    out[s, h0, p1, b] -= w * table[h1, p0, b]
                    out[s, h1, p0, b] -= w * table[h0, p1, b]
            continue
        _gather(table, holes[m], particles[m], a, width)
        _eliminate(a, k, det, last, order, width)
        for b in range(lanes):
            keep[b] = 1.0
            for c in range(k - 1):
                if a[c, c, b] == 0.0:
                    keep[b] = 0.0
            if keep[b] == 0.0:
                if n_odd < len(odd):
                    odd[n_odd, 0], odd[n_odd, 1] = m, b
                n_odd += 1
                for c in range(k - 1):
                    a[c, c, b] = 1.0
        _adjugate(a, k, det, last, order, x, adjugate, width)
        for s in range(n_states):
            for i in range(k):
                for j in range(k):
                    for b in range(lanes):
                        # The cofactor of element (i, j) is the adjugate's element (j, i).
                        out[s, holes[m, i], particles[m, j], b] += (
                            keep[b] * sign[m] * weight[s, string[m], b] * adjugate[j, i, b]
                        )
    return n_odd
