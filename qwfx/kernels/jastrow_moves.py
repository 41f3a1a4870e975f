"""What J changes by when one electron moves: only what is within reach of where it was is looked at closely.

With every function cut off, electrons further from the old place than the longest cutoff and the step together are in
no term, before or after. The others are listed first, in one pass over all distances; everything else is done with
that list. Without a cutoff the list is that of all electrons.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit

from qwfx.kernels.radial import CUTOFF, LEAN, SUM, add_up, add_up_usual
from qwfx.kernels.selection import select
from qwfx.kernels.three_body import NO_CUTOFF, outer_values

__all__ = ["change"]

BLOCK = 512
"""Distances at a time: they and what is made of them stay in the fastest cache."""
FAR = 1e100
"""A longer cutoff is none; its square is a number."""
GROUP = 16
"""Lists are filled up to multiples of this with points out of reach, so that loops over them have no remainder."""


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _sum_over(functions: Any, own: Any, x: Any, y: Any, z: Any, at: Any, scratch: Any) -> float:
    """Sum of the functions `own` over the distances of `at` to (x, y, z), in blocks that stay in the cache."""
    kinds, starts, parameters = functions
    total: float = 0.0
    n = len(x)
    if len(own) == 1 and kinds[own[0]] == CUTOFF:
        p = parameters[starts[own[0]] : starts[own[0] + 1]]
        if len(p) == 10 and p[1] == 3.0:
            total += add_up_usual(p, x, y, z, at)
            return total
    r = scratch[0]
    for start in range(0, n, BLOCK):
        m = min(BLOCK, n - start)
        bx, by, bz = x[start : start + m], y[start : start + m], z[start : start + m]
        for k in range(m):
            dx, dy, dz = at[0] - bx[k], at[1] - by[k], at[2] - bz[k]
            r[k] = np.sqrt(dx * dx + dy * dy + dz * dz)
        for f in own:
            total += add_up(kinds[f], parameters[starts[f] : starts[f + 1]], r, m, scratch[1], scratch[2])
    return total


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _within(x: Any, y: Any, z: Any, here: Any, radius: float, but: int, away: float, out: Any, start: int) -> Any:
    """Points within a radius, or all if it is large, in out[:, start:]; where they end, and where the filling does.

    There is no filling in a list of all, else it is at a distance `away` from `here`.
    """
    n = len(x)
    if radius < FAR:
        end = select(x, y, z, here, radius * radius * (1.0 + 1e-12), but, out, start)
        filled = start + -(-(end - start) // GROUP) * GROUP
        for k in range(end, filled):
            out[0, k], out[1, k], out[2, k] = here[0] + away, here[1], here[2]
        return end, filled
    end = start
    for k in range(n):
        out[0, end], out[1, end], out[2, end] = x[k], y[k], z[k]
        end += 0 if k == but else 1
    return end, end


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _triples(
    p: Any,
    gamma: Any,
    n_n: int,
    nucleus: Any,
    partners: Any,
    n: int,
    at: Any,
    inside: Any,
    c: Any,
    other: Any,
    sums: Any,
) -> None:
    """Add f to sums[q] for electrons at at[q] where inside[q], a nucleus, and partners[:, :n] within its cutoff."""
    n_l, n_mn = gamma.shape
    n_m = n_mn // n_n
    for q in range(len(at)):
        if inside[q]:
            dx, dy, dz = at[q, 0] - nucleus[0], at[q, 1] - nucleus[1], at[q, 2] - nucleus[2]
            outer_values(p, np.sqrt(dx * dx + dy * dy + dz * dz), other)
            sum_l = c[q]
            for mn in range(n_mn):
                sum_l[mn] = gamma[0, mn] * other[0]
            for l in range(1, n_l):
                for mn in range(n_mn):
                    sum_l[mn] += gamma[l, mn] * other[l]
    for j in range(n):
        x, y, z = partners[0, j], partners[1, j], partners[2, j]
        dx, dy, dz = x - nucleus[0], y - nucleus[1], z - nucleus[2]
        outer_values(p, np.sqrt(dx * dx + dy * dy + dz * dz), other)
        for q in range(len(at)):
            if inside[q]:
                dx, dy, dz = at[q, 0] - x, at[q, 1] - y, at[q, 2] - z
                d = np.sqrt(dx * dx + dy * dy + dz * dz)
                if p[0] >= NO_CUTOFF:
                    d = p[3] * d / (1.0 + p[3] * d)
                f = 0.0
                for m in range(n_m):
                    s = 0.0
                    for k in range(n_n - 1, -1, -1):
                        s = s * d + c[q, m * n_n + k]
                    f += s * other[m]
                sums[q] += f


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _change(
    functions: Any, partners: Any, nuclear: Any, three: Any, reach: float, n_up: int, rows: Any, which: int,
    places: Any, out: Any, near: Any, close: Any, some: Any, scratch: Any, at: Any, sums: Any, inside: Any, c: Any,
    other: Any, bounds: Any,
) -> None:  # fmt: skip
    n_places, n = places.shape[1], rows.shape[2]
    ids, lengths, firsts, nuclei = nuclear
    heads, shapes, gamma_starts, gammas, sides, centre_starts, centres = three
    begin, end, filled = bounds[0], bounds[1], bounds[2]
    for w in range(len(rows)):
        x = rows[w]
        here = (x[0, which], x[1, which], x[2, which])
        at[0, 0], at[0, 1], at[0, 2] = here
        step, total = 0.0, 0.0
        for q in range(n_places):
            for k in range(3):
                at[q + 1, k] = places[w, q, k]
            d = np.sqrt((at[q + 1, 0] - here[0]) ** 2 + (at[q + 1, 1] - here[1]) ** 2 + (at[q + 1, 2] - here[2]) ** 2)
            step = max(step, d)
            total += d
        step = step if total < np.inf else np.inf  # NaN included: then nothing is left out
        for q in range(n_places + 1):
            sums[q] = 0.0
        for side in range(2 if reach > 0.0 else 0):
            first, last = (0, n_up) if side == 0 else (n_up, n)
            begin[side] = 0 if side == 0 else filled[0]
            end[side], filled[side] = _within(
                x[0, first:last], x[1, first:last], x[2, first:last], here, reach + step, which - first,
                reach + 2.0 * step + 1.0, near, begin[side],
            )  # fmt: skip
            a, b, own = begin[side], filled[side], partners[side]
            if len(own):
                for q in range(n_places + 1):
                    sums[q] += _sum_over(functions, own, near[0, a:b], near[1, a:b], near[2, a:b], at[q], scratch)
        for t in range(len(ids)):
            a, b, L = firsts[t], firsts[t + 1], lengths[t]
            _, m = _within(
                nuclei[0, a:b], nuclei[1, a:b], nuclei[2, a:b], here, L + step, -1, L + 2.0 * step + 1.0, some, 0
            )
            for q in range(n_places + 1):
                sums[q] += _sum_over(functions, ids[t : t + 1], some[0, :m], some[1, :m], some[2, :m], at[q], scratch)
        for t in range(len(heads)):
            p, side = heads[t], sides[t]
            gamma = gammas[gamma_starts[t] : gamma_starts[t + 1]].reshape((shapes[t, 0], shapes[t, 1] * shapes[t, 2]))
            a, b, square = centre_starts[t], centre_starts[t + 1], p[0] * p[0]
            x0, x1 = begin[side], end[side]
            m, _ = _within(centres[0, a:b], centres[1, a:b], centres[2, a:b], here, p[0] + step, -1, 0.0, some, 0)
            for k in range(m):
                nucleus = (some[0, k], some[1, k], some[2, k])
                anywhere = False
                for q in range(n_places + 1):
                    d = (at[q, 0] - nucleus[0]) ** 2 + (at[q, 1] - nucleus[1]) ** 2 + (at[q, 2] - nucleus[2]) ** 2
                    inside[q] = not d >= square
                    anywhere = anywhere or inside[q]
                if anywhere:
                    found = select(near[0, x0:x1], near[1, x0:x1], near[2, x0:x1], nucleus, square, -1, close, 0)
                    _triples(p, gamma, shapes[t, 2], nucleus, close, found, at, inside, c, other, sums)
        for q in range(n_places):
            out[w, q] += sums[q + 1] - sums[0]


@njit(**SUM)  # type: ignore[untyped-decorator]
def change(
    functions: Any, partners: Any, nuclear: Any, three: Any, reach: float, n_up: int, rows: Any, which: int,
    places: Any, out: Any,
) -> None:  # fmt: skip
    """Add to out[w, q] what J of walkers (W, 3, N) changes by if electron `which` goes to places[w, q].

    functions : kinds, starts and parameters of the radial functions.
    partners : numbers of the functions for pairs with an up and with a down electron.
    nuclear : numbers of the functions for nuclei, where they end, where their nuclei start, and the nuclei (3, .).
    three : of three-body terms the parameters (T, 4), shapes of gamma (T, 3), where gamma starts, gamma with the
        powers of the moved electron first, the spin of the other electron, where the nuclei start, and the nuclei.
    reach : longest distance of another electron that a term can see; infinite without a cutoff, 0 without such terms.
    """
    n_places, n = places.shape[1], rows.shape[2]
    most = max(nuclear[3].shape[1], three[6].shape[1])
    shapes = three[1]
    longest = shapes.max() if len(shapes) else 0
    _change(
        functions, partners, nuclear, three, reach, n_up, rows, which, places, out,
        np.empty((3, n + 2 * GROUP)), np.empty((3, n + GROUP)), np.empty((3, most + GROUP)), np.empty((3, BLOCK)),
        np.empty((n_places + 1, 3)), np.empty(n_places + 1), np.empty(n_places + 1, np.bool_),
        np.empty((n_places + 1, longest * longest)), np.empty(longest), np.zeros((3, 2), np.int64),
    )  # fmt: skip
