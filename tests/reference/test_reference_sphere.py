"""Rules on the sphere on every harmonic up to their degree and beyond, and rotations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import sph_harm_y

from qwfx.reference.sphere import RULES, random_rotations, sphere_rule


def largest(rule_points: np.ndarray, weights: np.ndarray, l: int) -> float:
    """Largest |sum of weights times Y_lm| over m, SciPy's harmonics: the integral is 0 for l > 0."""
    theta = np.arccos(np.clip(rule_points[:, 2], -1, 1))
    phi = np.arctan2(rule_points[:, 1], rule_points[:, 0])
    return max(abs(weights @ sph_harm_y(l, m, theta, phi)) for m in range(l + 1))


@pytest.mark.parametrize(("n", "degree"), [(6, 3), (12, 5), (18, 5), (26, 7), (50, 11)])
def test_exactness(n: int, degree: int) -> None:
    """Degrees as in A. H. Stroud (1971); turned as well, where no symmetry hides anything."""
    rule = sphere_rule(n)
    assert len(rule.points) == len(rule.weights) == n
    assert rule.degree == degree
    assert rule.weights.sum() == pytest.approx(1, abs=1e-14)
    assert np.allclose(np.linalg.norm(rule.points, axis=1), 1, atol=1e-15)
    for turn in (np.eye(3), *random_rotations(np.random.default_rng(n), 3)):
        points = rule.points @ turn.T
        for l in range(1, degree + 1):
            assert largest(points, rule.weights, l) < 1e-13
        assert largest(points, rule.weights, degree + 1) > 1e-3


def test_there_are_no_others() -> None:
    assert sorted(RULES) == [6, 12, 18, 26, 50]
    with pytest.raises(ValueError, match="6, 12, 18, 26, 50"):
        sphere_rule(14)


def test_rotations_are_rotations_and_uniform() -> None:
    turns = random_rotations(np.random.default_rng(3), 40_000)
    assert np.allclose(turns @ turns.swapaxes(1, 2), np.eye(3), atol=1e-14)
    assert np.allclose(np.linalg.det(turns), 1)
    # Every matrix element has mean 0 and variance 1/3, and products of two elements mean 0 but with themselves.
    flat = turns.reshape(-1, 9)
    assert np.abs(flat.mean(axis=0)).max() < 4 / np.sqrt(3 * len(flat))
    assert np.abs(flat.T @ flat / len(flat) - np.eye(9) / 3).max() < 0.02
    # The angle of a uniform rotation has the density (1 - cos) / pi, so that its cosine has the mean -1/2.
    assert ((np.trace(turns, axis1=1, axis2=2) - 1) / 2).mean() == pytest.approx(-0.5, abs=0.015)
