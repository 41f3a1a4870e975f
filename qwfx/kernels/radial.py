"""Radial functions of Jastrow terms at many distances: which one is decided outside of the loops over distances."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels.numeric import JIT

__all__ = ["SUM", "derivatives", "pack_radial", "values"]

SUM: dict[str, Any] = JIT | {"fastmath": {"contract", "nsz", "reassoc"}}
"""Sums may be taken in any order, so that they are done in vectors; NaN stays NaN."""
PADE, CUTOFF, SCALED, SPLINE = range(4)


def pack_radial(form: str, attributes: Any, members: Any, row: int) -> tuple[int, NDArray[np.float64]]:
    """Kind and parameters of a row of a term of two bodies, as the kernels take them."""
    if form == "pade":
        return PADE, np.array([members["a"][row], members["b"][row]])
    if form == "cutoff-polynomial":
        head = [members["cutoff"][row], float(attributes["smoothness"])]
        return CUTOFF, np.concatenate([head, np.asarray(members["coefficients"][row], dtype=float)])
    if form == "scaled-polynomial":
        powers = np.asarray(members["powers"])
        dense = np.zeros(int(powers.max(initial=0)) + 1)
        dense[powers] = members["coefficients"][row]
        return SCALED, np.concatenate([[members["scale"][row]], dense])
    c = np.concatenate([members["coefficients"][row], np.zeros(3)])
    # F25 and F26 on interval k, by powers of t = r/h - k: the splines with coefficients k, k+1, k+2 and k+3.
    weights = np.array([[1, 4, 1, 0], [-3, 0, 3, 0], [3, -6, 3, 0], [-1, 3, -3, 1]]) / 6.0
    pieces = np.array([weights @ c[k : k + 4] for k in range(len(c) - 3)])
    return SPLINE, np.concatenate([[members["cutoff"][row], float(len(pieces))], pieces.ravel()])


@njit(**JIT)  # type: ignore[untyped-decorator]
def values(kind: int, p: Any, r: Any, n: int, out: Any) -> None:
    """Add u(r[k]) to out[k], k < n."""
    if kind == PADE:
        for k in range(n):
            out[k] += p[0] * r[k] / (1.0 + p[1] * r[k])
    elif kind == CUTOFF:
        smooth = int(p[1])
        for k in range(n):
            f = 0.0
            for c in range(len(p) - 1, 1, -1):
                f = f * r[k] + p[c]
            x = min(r[k] - p[0], 0.0)
            for _ in range(smooth):
                f *= x
            out[k] += f
    elif kind == SCALED:
        for k in range(n):
            s, f = p[0] * r[k] / (1.0 + p[0] * r[k]), 0.0
            for c in range(len(p) - 1, 0, -1):
                f = f * s + p[c]
            out[k] += f
    else:
        pieces, inverse = int(p[1]), p[1] / p[0]
        for k in range(n):
            if r[k] < p[0]:
                x = r[k] * inverse
                piece = min(int(x), pieces - 1)
                t, q = x - piece, 2 + 4 * piece
                out[k] += ((p[q + 3] * t + p[q + 2]) * t + p[q + 1]) * t + p[q]


@njit(**JIT)  # type: ignore[untyped-decorator]
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
            if r[k] < p[0]:
                x = r[k] * inverse
                piece = min(int(x), pieces - 1)
                t, q = x - piece, 2 + 4 * piece
                u[k] += ((p[q + 3] * t + p[q + 2]) * t + p[q + 1]) * t + p[q]
                du[k] += ((3.0 * p[q + 3] * t + 2.0 * p[q + 2]) * t + p[q + 1]) * inverse
                d2u[k] += (6.0 * p[q + 3] * t + 2.0 * p[q + 2]) * inverse * inverse
