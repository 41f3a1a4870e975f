"""Radial functions of Jastrow terms at many distances: which one is decided outside of the loops over distances."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels.numeric import JIT

__all__ = ["CUTOFF", "LEAN", "SUM", "add_up", "add_up_usual", "derivatives", "length_of", "pack_radial"]

SUM: dict[str, Any] = JIT | {"fastmath": {"contract", "nsz", "reassoc"}}
"""Sums may be taken in any order, so that they are done in vectors; NaN stays NaN."""
LEAN: dict[str, Any] = SUM | {"_nrt": False}
"""Of functions that make no array: without counting references to the arrays that they pass on, which takes longer
than the work itself where a walker has few electrons."""
PADE, CUTOFF, SCALED, SPLINE = range(4)


def pack_radial(form: str, attributes: Any, members: Any, row: int) -> tuple[int, NDArray[np.float64]]:
    """Kind and parameters of a row of a term of two bodies, as the kernels take them."""
    if form == "pade":
        return PADE, np.array([members["a"][row], members["b"][row]])
    if form == "cutoff-polynomial":
        head = [members["cutoff"][row], float(attributes["smoothness"])]
        return CUTOFF, np.concatenate([head, _in_fours(np.asarray(members["coefficients"][row], dtype=float))])
    if form == "scaled-polynomial":
        powers = np.asarray(members["powers"])
        dense = np.zeros(int(powers.max(initial=0)) + 1)
        dense[powers] = members["coefficients"][row]
        return SCALED, np.concatenate([[members["scale"][row]], _in_fours(dense)])
    c = np.concatenate([members["coefficients"][row], np.zeros(3)])
    # F25 and F26 on interval k, by powers of t = r/h - k: the splines with coefficients k, k+1, k+2 and k+3.
    weights = np.array([[1, 4, 1, 0], [-3, 0, 3, 0], [3, -6, 3, 0], [-1, 3, -3, 1]]) / 6.0
    pieces = np.array([weights @ c[k : k + 4] for k in range(len(c) - 3)])
    return SPLINE, np.concatenate([[members["cutoff"][row], float(len(pieces))], pieces.ravel()])


def length_of(kind: int, p: NDArray[np.float64]) -> float:
    """Where a function ends, from what `pack_radial` makes of it; infinite for one that does not."""
    return float(p[0]) if kind in (CUTOFF, SPLINE) else np.inf


def _in_fours(coefficients: NDArray[np.float64]) -> NDArray[np.float64]:
    """With zeros up to a multiple of four."""
    return np.concatenate([coefficients, np.zeros(-len(coefficients) % 4)])


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _horner(p: Any, first: int, x: Any, n: int, f: Any) -> None:
    """f[k] = sum_c p[first + c] x[k]^c, four coefficients at a time: a loop over all of them is not done in vectors."""
    for k in range(n):
        f[k] = 0.0
    for c in range(len(p) - 4, first - 1, -4):
        q0, q1, q2, q3 = p[c], p[c + 1], p[c + 2], p[c + 3]
        for k in range(n):
            f[k] = (((f[k] * x[k] + q3) * x[k] + q2) * x[k] + q1) * x[k] + q0


@njit(**LEAN)  # type: ignore[untyped-decorator]
def add_up_usual(p: Any, x: Any, y: Any, z: Any, at: Any) -> float:
    """Sum of a polynomial with a cutoff of the usual length, C = 3 and up to 8 coefficients, over distances to `at`.

    The same as `add_up`, but each distance is used while it is there: square roots overlap with the polynomials.
    """
    L, q0, q1, q2, q3, q4, q5, q6, q7 = p[0], p[2], p[3], p[4], p[5], p[6], p[7], p[8], p[9]
    ax, ay, az = at[0], at[1], at[2]
    total = 0.0
    for k in range(len(x)):
        dx, dy, dz = ax - x[k], ay - y[k], az - z[k]
        r = np.sqrt(dx * dx + dy * dy + dz * dz)
        f = ((((((q7 * r + q6) * r + q5) * r + q4) * r + q3) * r + q2) * r + q1) * r + q0
        edge = min(r - L, 0.0)
        total += f * edge * edge * edge
    return total


@njit(**LEAN)  # type: ignore[untyped-decorator]
def add_up(kind: int, p: Any, r: Any, n: int, f: Any, s: Any) -> float:
    """Sum of u(r[k]), k < n; `f` and `s` are scratch."""
    total = 0.0
    if kind == PADE:
        a, b = p[0], p[1]
        for k in range(n):
            total += a * r[k] / (1.0 + b * r[k])
    elif kind == CUTOFF:
        L, smooth = p[0], int(p[1])
        _horner(p, 2, r, n, f)
        if smooth == 3:
            for k in range(n):
                x = min(r[k] - L, 0.0)
                total += f[k] * x * x * x
        elif smooth == 2:
            for k in range(n):
                x = min(r[k] - L, 0.0)
                total += f[k] * x * x
        else:
            for k in range(n):
                total += f[k] * min(r[k] - L, 0.0) ** smooth
    elif kind == SCALED:
        b = p[0]
        for k in range(n):
            s[k] = b * r[k] / (1.0 + b * r[k])
        _horner(p, 1, s, n, f)
        for k in range(n):
            total += f[k]
    else:
        L, last, inverse = p[0], int(p[1]) - 1, p[1] / p[0]
        for k in range(n):
            x = min(r[k] * inverse, last + 1.0)
            piece = int(x) if x < last else last  # NaN has no integer
            t, q = x - piece, 2 + 4 * piece
            y = ((p[q + 3] * t + p[q + 2]) * t + p[q + 1]) * t + p[q]
            total += 0.0 if r[k] >= L else y
    return total


@njit(**LEAN)  # type: ignore[untyped-decorator]
def derivatives(kind: int, p: Any, r: Any, n: int, u: Any, du: Any, d2u: Any) -> None:
    """Add u, u' and u'' at r[k] to u[k], du[k] and d2u[k], k < n."""
    if kind == PADE:
        for k in range(n):
            d = 1.0 / (1.0 + p[1] * r[k])
            u[k] += p[0] * r[k] * d
            du[k] += p[0] * d * d
            d2u[k] -= 2.0 * p[0] * p[1] * d * d * d
    elif kind == CUTOFF:
        smooth = int(p[1])
        for k in range(n):
            f, g, h = 0.0, 0.0, 0.0
            for c in range(len(p) - 1, 1, -1):
                h = h * r[k] + 2.0 * g
                g = g * r[k] + f
                f = f * r[k] + p[c]
            x = min(r[k] - p[0], 0.0)
            inside = 1.0 if x < 0.0 else 0.0
            w2, w1, w0 = 0.0, 0.0, inside  # (r - L)^C and its derivatives, built up from C = 0
            for _ in range(smooth):
                w2 = w2 * x + 2.0 * w1
                w1 = w1 * x + w0
                w0 = w0 * x
            u[k] += w0 * f
            du[k] += w1 * f + w0 * g
            d2u[k] += w2 * f + 2.0 * w1 * g + w0 * h
    elif kind == SCALED:
        for k in range(n):
            d = 1.0 / (1.0 + p[0] * r[k])
            s, f, g, h = p[0] * r[k] * d, 0.0, 0.0, 0.0
            for c in range(len(p) - 1, 0, -1):
                h = h * s + 2.0 * g
                g = g * s + f
                f = f * s + p[c]
            s1 = p[0] * d * d
            u[k] += f
            du[k] += g * s1
            d2u[k] += h * s1 * s1 - 2.0 * g * p[0] * s1 * d
    else:
        pieces, inverse = int(p[1]), p[1] / p[0]
        for k in range(n):
            if not r[k] >= p[0]:  # NaN goes on
                x = r[k] * inverse
                piece = int(x) if x < pieces - 1 else pieces - 1
                t, q = x - piece, 2 + 4 * piece
                u[k] += ((p[q + 3] * t + p[q + 2]) * t + p[q + 1]) * t + p[q]
                du[k] += ((3.0 * p[q + 3] * t + 2.0 * p[q + 2]) * t + p[q + 1]) * inverse
                d2u[k] += (6.0 * p[q + 3] * t + 2.0 * p[q + 2]) * inverse * inverse
