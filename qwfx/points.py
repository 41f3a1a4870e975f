"""Where to look: points at which mistakes in orbitals show, for witnesses and for round trips.

No symmetry element of the molecule passes through a point except by accident: directions are random, so a swapped
axis, a wrong sign of a component or another order of functions changes every value.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["REGIONS", "WITNESS_SEED", "probe_points"]

REGIONS = ("nuclei", "bonds", "tail")
WITNESS_SEED = 20261201
BONDED_WITHIN = 4.5  # bohr; longer than any single bond of two second-row atoms (common practice)


def _directions(rng: np.random.Generator, n: int) -> NDArray[np.float64]:
    vectors = rng.normal(size=(n, 3))
    return np.asarray(vectors / np.linalg.norm(vectors, axis=1, keepdims=True))


def probe_points(
    positions: NDArray[np.float64],
    n_points: int,
    rng: np.random.Generator,
    regions: tuple[str, ...] = REGIONS,
) -> NDArray[np.float64]:
    """Points near nuclei (0.05 to 1.2 bohr), in bond regions and in the tail (2 to 8 bohr off the nearest nucleus).

    Parameters
    ----------
    positions : (A, 3) bohr. With A = 0 the points lie around the origin.
    n_points : how many points in all; shared out evenly over the regions.
    rng : source of the random directions and distances.
    regions : any of `REGIONS`.

    Returns
    -------
    (n_points, 3) bohr.
    """
    centers = np.asarray(positions, dtype=np.float64).reshape(-1, 3)
    if not len(centers):
        centers = np.zeros((1, 3))
    unknown = set(regions) - set(REGIONS)
    if unknown or not regions:
        raise ValueError(f"regions are {', '.join(REGIONS)}; got {regions!r}")
    counts = [len(part) for part in np.array_split(np.arange(n_points), len(regions))]
    parts = []
    for region, n in zip(regions, counts, strict=True):
        host = centers[(np.arange(n) + int(rng.integers(len(centers)))) % len(centers)]
        if region == "nuclei":
            parts.append(host + _directions(rng, n) * np.exp(rng.uniform(np.log(0.05), np.log(1.2), n))[:, None])
        elif region == "bonds":
            parts.append(_bond_points(centers, host, rng, n))
        else:
            parts.append(host + _directions(rng, n) * rng.uniform(2.0, 8.0, n)[:, None])
    return np.concatenate(parts)


def _bond_points(
    centers: NDArray[np.float64], host: NDArray[np.float64], rng: np.random.Generator, n: int
) -> NDArray[np.float64]:
    """Points scattered about the line from each host to one of its neighbours; about the host if it has none."""
    points = np.empty((n, 3))
    for i in range(n):
        distance = np.linalg.norm(centers - host[i], axis=1)
        near = np.flatnonzero((distance > 1e-8) & (distance < BONDED_WITHIN))
        partner = centers[rng.choice(near)] if len(near) else host[i] + _directions(rng, 1)[0]
        points[i] = host[i] + (partner - host[i]) * rng.uniform(0.25, 0.75) + rng.normal(scale=0.25, size=3)
    return points
