"""Quadrature on the unit sphere for the projectors of core potentials.

Nodes are orbits of the octahedral and icosahedral groups, weights sum to 1. Sources: A. D. McLaren, Math. Comp. 17, 361
(1963); A. H. Stroud, Approximate Calculation of Multiple Integrals (1971); for core potentials L. Mitas, E. L. Shirley,
D. M. Ceperley, J. Chem. Phys. 95, 3467 (1991). Tested on every spherical harmonic up to the degree and beyond.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations, product

import numpy as np
from numpy.typing import NDArray

__all__ = ["RULES", "SphereRule", "random_rotations", "sphere_rule"]


@dataclass(frozen=True, eq=False)
class SphereRule:
    """Points and weights; exact for every spherical harmonic of an angular momentum up to `degree`."""

    points: NDArray[np.float64]
    """(n, 3) unit vectors."""
    weights: NDArray[np.float64]
    """(n), of sum 1."""
    degree: int


def _orbit(*numbers: float) -> NDArray[np.float64]:
    """All permutations and signs of three numbers, as unit vectors."""
    every = {
        tuple(s * x for s, x in zip(signs, order, strict=True))
        for order in permutations(numbers)
        for signs in product((1.0, -1.0), repeat=3)
    }
    points = np.array(sorted((x + 0.0, y + 0.0, z + 0.0) for x, y, z in every))
    points = np.unique(points, axis=0)
    return np.asarray(points / np.linalg.norm(points, axis=1, keepdims=True))


def _icosahedron() -> NDArray[np.float64]:
    golden = (1.0 + np.sqrt(5.0)) / 2.0
    corners = [np.roll([0.0, a, b * golden], turn) for turn in range(3) for a in (1, -1) for b in (1, -1)]
    return np.asarray(np.array(corners) / np.sqrt(1.0 + golden**2))


def _rule(degree: int, *parts: tuple[NDArray[np.float64], float]) -> SphereRule:
    points = np.concatenate([orbit for orbit, _ in parts])
    weights = np.concatenate([np.full(len(orbit), weight) for orbit, weight in parts])
    return SphereRule(points, weights, degree)


_FACES, _EDGES, _CORNERS, _SKEW = _orbit(1, 0, 0), _orbit(1, 1, 0), _orbit(1, 1, 1), _orbit(1, 1, 3)

RULES: dict[int, SphereRule] = {
    6: _rule(3, (_FACES, 1 / 6)),
    12: _rule(5, (_icosahedron(), 1 / 12)),
    18: _rule(5, (_FACES, 1 / 30), (_EDGES, 1 / 15)),
    26: _rule(7, (_FACES, 1 / 21), (_EDGES, 4 / 105), (_CORNERS, 27 / 840)),
    50: _rule(11, (_FACES, 4 / 315), (_EDGES, 64 / 2835), (_CORNERS, 27 / 1280), (_SKEW, 14641 / 725760)),
}
"""By number of points. 12 points reach the degree of 18."""


def sphere_rule(n_points: int) -> SphereRule:
    """The rule of that many points. Raises ValueError if there is none."""
    if n_points not in RULES:
        raise ValueError(f"there are rules of {', '.join(map(str, RULES))} points, none of {n_points}")
    return RULES[n_points]


def random_rotations(generator: np.random.Generator, n: int) -> NDArray[np.float64]:
    """(n, 3, 3) rotations, uniform on SO(3): from uniform unit quaternions (common practice; K. Shoemake, 1992)."""
    q = generator.normal(size=(n, 4))
    w, x, y, z = (q / np.linalg.norm(q, axis=1, keepdims=True)).T
    return np.stack([
        np.stack([1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)], axis=-1),
        np.stack([2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)], axis=-1),
        np.stack([2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)], axis=-1),
    ], axis=-2)  # fmt: skip
