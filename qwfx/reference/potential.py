"""Potential energies as FORMAT.md has them (F28, F29), without regard for speed."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
from numpy.polynomial import legendre
from numpy.typing import NDArray

from qwfx.model import Potentials
from qwfx.reference.sphere import SphereRule

__all__ = ["coulomb", "local_part", "projected", "radial_potential"]


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


def radial_potential(
    potentials: Potentials, center: int, channel: int, r: NDArray[np.float64]
) -> NDArray[np.float64]:
    """V_loc (channel -1) or V_l of one centre at distances r, hartree."""
    own = np.flatnonzero((potentials.center == center) & (potentials.channel == channel))
    terms = (potentials.coefficient[t] * r ** float(potentials.power[t]) * np.exp(-potentials.exponent[t] * r**2)
             for t in own)  # fmt: skip
    return np.asarray(sum(terms, np.zeros_like(r)))


def channels(potentials: Potentials, center: int) -> Iterator[int]:
    """Angular momenta of the projectors of one centre."""
    own = np.unique(potentials.channel[potentials.center == center])
    return (int(l) for l in own if l >= 0)


def local_part(
    potentials: Potentials, nuclei: NDArray[np.float64], places: NDArray[np.float64]
) -> NDArray[np.float64]:
    """(m) sum of V_loc over the electrons at (m, N, 3) and all centres."""
    total = np.zeros(len(places))
    for center in np.unique(potentials.center).tolist():
        r = np.linalg.norm(places - nuclei[center], axis=-1)
        total += radial_potential(potentials, center, -1, r).sum(axis=1)
    return total


def projected(
    potentials: Potentials, nuclei: NDArray[np.float64], place: NDArray[np.float64], rule: SphereRule,
    function: Callable[[NDArray[np.float64]], NDArray[np.float64]], rotation: NDArray[np.float64] | None = None,
) -> float:  # fmt: skip
    """``(sum_A sum_l V_l sum_m |lm><lm| f)(r)`` for one electron at `place` (3), by quadrature.

    By the addition theorem, sum_m Y_lm(u) Y_lm(w) = (2l+1)/(4 pi) P_l(u.w), so that with weights of sum 1 the factor of
    point w is (2l+1) P_l. `function` takes points (n, 3).
    """
    total = 0.0
    for center in np.unique(potentials.center).tolist():
        d = place - nuclei[center]
        r = np.array([np.linalg.norm(d)])
        directions = rule.points if rotation is None else rule.points @ rotation.T
        values = function(nuclei[center] + r * directions)
        cosine = directions @ (d / r)
        for l in channels(potentials, center):
            kernel = (2 * l + 1) * legendre.legval(cosine, [0.0] * l + [1.0])
            strength = float(radial_potential(potentials, center, l, r)[0])
            total += strength * float((rule.weights * kernel * values).sum())
    return total
