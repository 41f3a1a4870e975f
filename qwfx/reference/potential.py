"""Potential energies as FORMAT.md has them (F28, F29), without regard for speed."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["coulomb"]


def coulomb(
    places: NDArray[np.float64], nuclei: NDArray[np.float64], charges: NDArray[np.float64]
) -> NDArray[np.float64]:
    """(m) potential energy in hartree of electrons at (m, N, 3) and nuclei at (A, 3), repulsion of nuclei included."""

    def inverse(a: NDArray[np.float64]) -> NDArray[np.float64]:
        with np.errstate(divide="ignore"):
            return np.asarray(1.0 / np.linalg.norm(a, axis=-1))

    i, j = np.triu_indices(places.shape[1], 1)
    a, b = np.triu_indices(len(nuclei), 1)
    a, b = a[charges[a] * charges[b] > 0], b[charges[a] * charges[b] > 0]
    real = charges > 0
    attraction = inverse(places[:, :, None] - nuclei[real]) @ charges[real]
    repulsion = float((charges[a] * charges[b] * inverse(nuclei[a] - nuclei[b])).sum())
    return np.asarray(inverse(places[:, i] - places[:, j]).sum(axis=1) - attraction.sum(axis=1) + repulsion)
