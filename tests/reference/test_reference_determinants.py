"""D and its derivatives against finite differences and the textbook's formula for a determinant."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx.reference.determinants import DeterminantSum, evaluate_determinants, occupied
from qwfx.reference.strings import popcount


def plane_waves(places: np.ndarray, k: np.ndarray) -> np.ndarray:
    """(5, n, M) values, gradients and Laplacians of exp(i k r): every derivative is known."""
    value = np.exp(1j * places @ k.T)
    gradient = np.moveaxis(1j * k[None] * value[..., None], -1, 0)
    return np.concatenate([value[None], gradient, (-(k**2).sum(axis=1) * value)[None]])


@pytest.fixture(scope="module")
def example() -> tuple[DeterminantSum, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(5)
    total = DeterminantSum(
        up=np.array([[0, 1, 2], [0, 2, 4], [1, 3, 4]]),
        down=np.array([[0, 1], [2, 4]]),
        rows=np.array([0, 0, 1, 2]),
        columns=np.array([0, 1, 0, 1]),
        coefficients=rng.normal(size=(2, 4)) + 1j * rng.normal(size=(2, 4)),
    )
    return total, rng.normal(size=(5, 3)), rng.normal(size=(5, 3))


def direct(total: DeterminantSum, k: np.ndarray, places: np.ndarray) -> np.ndarray:
    phi = np.exp(1j * places @ k.T)
    return np.array(
        [
            sum(
                c[e] * np.linalg.det(phi[:3][:, total.up[i]]) * np.linalg.det(phi[3:][:, total.down[j]])
                for e, (i, j) in enumerate(zip(total.rows, total.columns, strict=True))
            )
            for c in total.coefficients
        ]
    )


def test_value_gradient_and_laplacian(example: tuple[DeterminantSum, np.ndarray, np.ndarray]) -> None:
    total, k, places = example
    phi = plane_waves(places, k)
    got = evaluate_determinants(total, phi[:, :3], phi[:, 3:])
    D = direct(total, k, places)
    assert np.allclose(got.sign * np.exp(got.log_abs), D, rtol=1e-12)
    assert np.allclose(np.abs(got.sign), 1)
    step = 1e-4
    laplacian = np.zeros(2, dtype=complex)
    for i in range(5):
        for axis in range(3):
            shift = np.zeros_like(places)
            shift[i, axis] = step
            forward, back = direct(total, k, places + shift), direct(total, k, places - shift)
            # Central differences: error step^2 / 6 times the third derivative, about 1e-8.
            assert np.allclose(got.gradients[:, i, axis], (forward - back) / (2 * step) / D, atol=1e-6)
            laplacian += (forward - 2 * D + back) / step**2 / D
    assert np.allclose(got.laplacian, laplacian, atol=1e-5)


def test_no_electron_of_one_spin() -> None:
    total = DeterminantSum(
        np.array([[0]]), np.zeros((1, 0), dtype=np.int64), np.array([0]), np.array([0]), np.array([[2.0]])
    )
    phi = np.arange(1.0, 6).reshape(5, 1, 1)
    got = evaluate_determinants(total, phi, np.zeros((5, 0, 1)))
    assert np.isclose(got.log_abs[0], np.log(2.0))
    assert np.allclose(got.gradients[0], [[2, 3, 4]])
    assert np.isclose(got.laplacian[0], 5)


def test_a_node_gives_infinities_and_no_warning() -> None:
    total = DeterminantSum(
        np.array([[0, 1]]), np.zeros((1, 0), dtype=np.int64), np.array([0]), np.array([0]), np.ones((1, 1))
    )
    got = evaluate_determinants(total, np.ones((5, 2, 2)), np.zeros((5, 0, 2)))
    assert got.log_abs[0] == -np.inf


@settings(max_examples=40, deadline=None)
@given(st.lists(st.sets(st.integers(0, 150), min_size=4, max_size=4), min_size=1, max_size=6))
def test_occupied_and_popcount_over_several_words(sets: list[set[int]]) -> None:
    words = np.zeros((len(sets), 3), dtype=np.uint64)
    for row, chosen in enumerate(sets):
        for bit in chosen:
            words[row, bit // 64] |= np.uint64(1) << np.uint64(bit % 64)
    assert np.array_equal(occupied(words, 4), [sorted(chosen) for chosen in sets])
    assert popcount(words).tolist() == [4] * len(sets)
