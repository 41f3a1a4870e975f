"""Probe points lie where they should, are reproducible, and avoid symmetry planes."""

from __future__ import annotations

import numpy as np
import pytest

from qwfx.points import REGIONS, probe_points

WATER = np.array([[0.0, 0.0, 0.2217], [0.0, 1.4309, -0.8867], [0.0, -1.4309, -0.8867]])


def nearest(points: np.ndarray, centers: np.ndarray) -> np.ndarray:
    return np.linalg.norm(points[:, None] - centers, axis=-1).min(axis=1)


def test_regions_lie_where_they_say() -> None:
    rng = np.random.default_rng(0)
    near = probe_points(WATER, 200, rng, ("nuclei",))
    assert nearest(near, WATER).max() <= 1.2
    # Every nucleus has its share.
    assert len(set(np.linalg.norm(near[:, None] - WATER, axis=-1).argmin(axis=1))) == 3
    tail = probe_points(WATER, 200, rng, ("tail",))
    assert np.linalg.norm(tail - WATER[0], axis=1).max() > 5
    alone = np.linalg.norm(probe_points(WATER[:1], 200, rng, ("tail",)) - WATER[0], axis=1)
    assert alone.min() >= 2.0
    assert alone.max() <= 8.0
    assert np.median(alone) == pytest.approx(5.0, abs=0.6)
    bonds = probe_points(WATER, 200, rng, ("bonds",))
    assert np.median(nearest(bonds, WATER)) > 0.4
    assert nearest(bonds, WATER).max() < 3
    pair = np.array([[0.0, 0.0, 0.0], [0.0, 0.0, 2.0], [0.0, 0.0, 30.0]])  # one bond, and an atom far away
    along = probe_points(pair, 300, rng, ("bonds",))
    bonded = along[along[:, 2] < 15]
    assert len(bonded) == 200
    assert np.abs(bonded[:, :2]).max() < 1.5
    assert ((bonded[:, 2] > -0.7) & (bonded[:, 2] < 2.7)).all()
    assert np.mean((bonded[:, 2] > 0.4) & (bonded[:, 2] < 1.6)) > 0.75


def test_same_seed_same_points_and_no_symmetry_plane() -> None:
    one, two = (probe_points(WATER, 99, np.random.default_rng(7)) for _ in range(2))
    assert one.shape == (99, 3)
    assert np.array_equal(one, two)
    assert np.abs(one).min() > 1e-6
    assert not np.array_equal(one, probe_points(WATER, 99, np.random.default_rng(8)))


@pytest.mark.parametrize("positions", [np.zeros((0, 3)), np.zeros((1, 3)), np.array([[0, 0, 0], [0, 0, 50.0]])])
@pytest.mark.parametrize("n", [0, 1, 2, 10])
def test_atoms_without_neighbours(positions: np.ndarray, n: int) -> None:
    points = probe_points(positions, n, np.random.default_rng(1))
    assert points.shape == (n, 3)
    assert np.isfinite(points).all()


@pytest.mark.parametrize("regions", [(), ("nuclei", "core")])
def test_unknown_regions_are_refused(regions: tuple[str, ...]) -> None:
    with pytest.raises(ValueError, match="regions are"):
        probe_points(WATER, 5, np.random.default_rng(1), regions)


def test_all_regions_are_named() -> None:
    assert REGIONS == ("nuclei", "bonds", "tail")
