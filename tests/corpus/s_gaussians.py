"""Integrals over contracted s Gaussians in closed form, for the corpus: independent of the package that is tested.

Formulas: Szabo and Ostlund, Modern Quantum Chemistry, appendix A.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

EXPONENTS = np.array([3.42525091, 0.62391373, 0.16885540])
CONTRACTION = np.array([0.15432897, 0.53532814, 0.44463454])
"""STO-3G of hydrogen, zeta = 1.24 (Szabo and Ostlund, table 3.8 and section 3.5)."""
NORMALISED = CONTRACTION * (2 * EXPONENTS / np.pi) ** 0.75
"""Coefficients of exp(-a r^2), factor of normalisation included."""
ANGULAR = 2 * math.sqrt(math.pi)
"""1 / S_00: what turns a coefficient of exp(-a r^2) into one of R in R(r) S_00."""


def _boys(t: NDArray[np.float64]) -> NDArray[np.float64]:
    """F0(t) = 1/2 sqrt(pi/t) erf(sqrt(t))."""
    safe = np.maximum(t, 1e-12)
    erf = np.vectorize(math.erf)(np.sqrt(safe))
    return np.where(t < 1e-8, 1.0 - t / 3.0, 0.5 * np.sqrt(np.pi / safe) * erf)


def integrals(
    positions: NDArray[np.float64], charges: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Overlap, one-electron integrals and (pq|rs) of one STO-3G function on each centre."""
    n = len(positions)
    a, b = EXPONENTS[:, None], EXPONENTS[None, :]
    weight = NORMALISED[:, None] * NORMALISED[None, :]
    p, reduced = a + b, a * b / (a + b)
    S, h = np.zeros((n, n)), np.zeros((n, n))
    centers, factors = {}, {}
    for i in range(n):
        for j in range(n):
            r2 = float(((positions[i] - positions[j]) ** 2).sum())
            overlap = weight * (np.pi / p) ** 1.5 * np.exp(-reduced * r2)
            S[i, j] = overlap.sum()
            h[i, j] = (overlap * reduced * (3 - 2 * reduced * r2)).sum()
            P = (a[..., None] * positions[i] + b[..., None] * positions[j]) / p[..., None]
            for Z, C in zip(charges, positions, strict=True):
                t = p * ((P - C) ** 2).sum(axis=-1)
                h[i, j] -= (Z * 2 * np.sqrt(p / np.pi) * overlap * _boys(t)).sum()
            centers[i, j], factors[i, j] = P.reshape(-1, 3), (overlap / (np.pi / p) ** 1.5).ravel()
    flat = p.ravel()
    prefactor = 2 * np.pi**2.5 / (np.outer(flat, flat) * np.sqrt(np.add.outer(flat, flat)))
    rho = np.outer(flat, flat) / np.add.outer(flat, flat)
    eri = np.zeros((n, n, n, n))
    for ij, left in centers.items():
        for kl, right in centers.items():
            t = rho * ((left[:, None, :] - right[None, :, :]) ** 2).sum(axis=-1)
            eri[ij + kl] = factors[ij] @ (prefactor * _boys(t)) @ factors[kl]
    return S, h, eri


def values(
    positions: NDArray[np.float64], C: NDArray[np.generic], points: NDArray[np.float64]
) -> tuple[NDArray[np.generic], NDArray[np.generic], NDArray[np.generic]]:
    """Values, gradients and Laplacians of orbitals C (M, A) at `points`: (N, M), (N, M, 3), (N, M)."""
    d = points[:, None, :] - positions[None, :, :]
    r2 = (d**2).sum(axis=-1)
    g = NORMALISED * np.exp(-EXPONENTS * r2[..., None])
    value = g.sum(axis=-1)
    slope = (-2 * EXPONENTS * g).sum(axis=-1)
    laplacian = ((4 * EXPONENTS**2 * r2[..., None] - 6 * EXPONENTS) * g).sum(axis=-1)
    gradient = slope[..., None] * d
    return value @ C.T, np.einsum("nad,pa->npd", gradient, C), laplacian @ C.T
