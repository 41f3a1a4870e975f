"""Three-body Jastrow terms: ``f = sum_lmn gamma_lmn a_l(r_i) a_m(r_j) z_n(r_ij)`` for both forms (F22, F24).

``a_l(r) = (r - L)^C r^l`` and ``z_n(r) = r^n`` for polynomials with a cutoff, ``a_l = s(r)^l`` and ``z_n = s(r)^n`` for
scaled distances. Sums over l are done once for an electron and a nucleus, so that a pair costs a product of the two
other lengths.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels.radial import SUM

__all__ = ["NO_CUTOFF", "add_three_body", "outer_values", "pack_three_body"]

NO_CUTOFF = 1e300


def pack_three_body(
    form: str, attributes: Any, members: Any, row: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Parameters (L, C, b, d), of which L = `NO_CUTOFF` for scaled distances, and gamma (l, m, n)."""
    if form == "cutoff-polynomial":
        head = np.array([members["cutoff"][row], float(attributes["smoothness"]), 0.0, 0.0])
        return head, np.ascontiguousarray(members["coefficients"][row], dtype=np.float64)
    powers = np.asarray(members["powers"]).reshape(-1, 3)
    size = int(powers[:, :2].max(initial=0)) + 1
    gamma = np.zeros((size, size, int(powers[:, 2].max(initial=0)) + 1))
    for (m, n, o), c in zip(powers.tolist(), members["coefficients"][row], strict=True):
        half = 0.5 if m == n else 1.0  # Delta of F24
        gamma[m, n, o] += half * c
        gamma[n, m, o] += half * c
    return np.array([NO_CUTOFF, 0.0, members["scale"][row], members["scale_electron"][row]]), gamma


@njit(inline="always", **SUM)  # type: ignore[untyped-decorator]
def _outer(p: Any, r: float, a: Any) -> None:
    """a[l, 0..2] = a_l(r) and its derivatives."""
    w0, w1, w2 = 1.0, 0.0, 0.0
    if p[0] < NO_CUTOFF:
        x = r - p[0]
        for _ in range(int(p[1])):
            w2 = w2 * x + 2.0 * w1
            w1 = w1 * x + w0
            w0 = w0 * x
        y0, y1, y2 = r, 1.0, 0.0
    else:
        d = 1.0 / (1.0 + p[2] * r)
        y0, y1, y2 = p[2] * r * d, p[2] * d * d, -2.0 * p[2] * p[2] * d * d * d
    for l in range(len(a)):
        a[l, 0], a[l, 1], a[l, 2] = w0, w1, w2
        w2 = w2 * y0 + 2.0 * w1 * y1 + w0 * y2
        w1 = w1 * y0 + w0 * y1
        w0 = w0 * y0


@njit(inline="always", **SUM)  # type: ignore[untyped-decorator]
def outer_values(p: Any, r: float, a: Any) -> None:
    """a[l] = a_l(r)."""
    y, power = r, 1.0
    if p[0] < NO_CUTOFF:
        for _ in range(int(p[1])):
            power *= r - p[0]
    else:
        y = p[2] * r / (1.0 + p[2] * r)
    for l in range(len(a)):
        a[l] = power
        power *= y


@njit(inline="always", **SUM)  # type: ignore[untyped-decorator]
def _pair(p: Any, r: float, z: Any) -> None:
    """z[n, 0..2] = z_n(r) and its derivatives."""
    y0, y1, y2 = r, 1.0, 0.0
    if p[0] >= NO_CUTOFF:
        d = 1.0 / (1.0 + p[3] * r)
        y0, y1, y2 = p[3] * r * d, p[3] * d * d, -2.0 * p[3] * p[3] * d * d * d
    w0, w1, w2 = 1.0, 0.0, 0.0
    for n in range(len(z)):
        z[n, 0], z[n, 1], z[n, 2] = w0, w1, w2
        w2 = w2 * y0 + 2.0 * w1 * y1 + w0 * y2
        w1 = w1 * y0 + w0 * y1
        w0 = w0 * y0


@njit(**SUM)  # type: ignore[untyped-decorator]
def add_three_body(
    p: Any, gamma: Any, like: bool, i0: int, i1: int, j0: int, j1: int, nuclei: Any, electrons: Any, value: Any,
    gradient: Any, laplacian: Any,
) -> None:  # fmt: skip
    """Add one row of a term, at nuclei (A, 3), of walkers (W, N, 3) to J, its gradients and its Laplacians.

    Electrons i0 to i1 - 1 with j0 to j1 - 1; for `like` spins, which are then the same electrons, each pair once.
    """
    for w in range(len(electrons)):
        for nucleus in nuclei:
            value[w] += _add(p, gamma, like, i0, i1, j0, j1, nucleus, electrons[w], gradient[w], laplacian[w])


@njit(**SUM)  # type: ignore[untyped-decorator]
def _add(
    p: Any, gamma: Any, like: bool, i0: int, i1: int, j0: int, j1: int, nucleus: Any, x: Any, gradient: Any,
    laplacian: Any,
) -> float:  # fmt: skip
    """One nucleus, one walker: adds to gradient (N, 3) and laplacian (N), returns the value."""
    n_l, n_m, n_n = gamma.shape
    total = 0.0
    n_electrons = len(x)
    inside = np.zeros(n_electrons, np.bool_)
    distance = np.zeros(n_electrons)
    outer = np.zeros((n_electrons, max(n_l, n_m), 3))
    for k in range(min(i0, j0), max(i1, j1)):
        r = np.sqrt((x[k, 0] - nucleus[0]) ** 2 + (x[k, 1] - nucleus[1]) ** 2 + (x[k, 2] - nucleus[2]) ** 2)
        distance[k], inside[k] = r, not r >= p[0]
        if inside[k]:
            _outer(p, r, outer[k])
    c, z = np.empty((3, n_m, n_n)), np.empty((n_n, 3))
    for i in range(i0, i1):
        if not inside[i]:
            continue
        for d in range(3):
            for m in range(n_m):
                for n in range(n_n):
                    s = 0.0
                    for l in range(n_l):
                        s += gamma[l, m, n] * outer[i, l, d]
                    c[d, m, n] = s
        for j in range(j0, min(j1, i) if like else j1):
            if not inside[j]:
                continue
            dx, dy, dz = x[i, 0] - x[j, 0], x[i, 1] - x[j, 1], x[i, 2] - x[j, 2]
            rij = np.sqrt(dx * dx + dy * dy + dz * dz)
            _pair(p, rij, z)
            f = f1 = f2 = f3 = f11 = f22 = f33 = f13 = f23 = 0.0
            for m in range(n_m):
                s0 = s0z = s0zz = s1 = s1z = s2 = 0.0
                for n in range(n_n):
                    s0 += c[0, m, n] * z[n, 0]
                    s0z += c[0, m, n] * z[n, 1]
                    s0zz += c[0, m, n] * z[n, 2]
                    s1 += c[1, m, n] * z[n, 0]
                    s1z += c[1, m, n] * z[n, 1]
                    s2 += c[2, m, n] * z[n, 0]
                a0, a1, a2 = outer[j, m, 0], outer[j, m, 1], outer[j, m, 2]
                f += s0 * a0
                f1 += s1 * a0
                f11 += s2 * a0
                f2 += s0 * a1
                f22 += s0 * a2
                f3 += s0z * a0
                f33 += s0zz * a0
                f13 += s1z * a0
                f23 += s0z * a1
            total += f
            ri, rj = distance[i], distance[j]
            along_i = along_j = 0.0
            for k in range(3):
                ei, ej = (x[i, k] - nucleus[k]) / ri, (x[j, k] - nucleus[k]) / rj
                eij = (x[i, k] - x[j, k]) / rij
                gradient[i, k] += f1 * ei + f3 * eij
                gradient[j, k] += f2 * ej - f3 * eij
                along_i += ei * eij
                along_j += ej * eij
            pair = f33 + 2.0 * f3 / rij
            laplacian[i] += f11 + 2.0 * f1 / ri + pair + 2.0 * f13 * along_i
            laplacian[j] += f22 + 2.0 * f2 / rj + pair - 2.0 * f23 * along_j
    return total
