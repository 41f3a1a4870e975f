"""Alignment undoes the freedoms of orbitals and nothing else."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx.compare.alignment import align, degenerate_groups

TOLERANCE = 1e-9


def fields(rng: np.random.Generator, n_orbitals: int, *, complex_values: bool = False) -> np.ndarray:
    real = rng.normal(size=(5, 60, n_orbitals))
    return real + 1j * rng.normal(size=real.shape) if complex_values else real


def agree(a: np.ndarray, b: np.ndarray) -> bool:
    return bool(np.abs(a - b).max() < 1e-8)


@settings(deadline=None, max_examples=30)
@given(st.integers(0, 2**32 - 1), st.integers(1, 9))
def test_signs_are_undone_and_said(seed: int, n: int) -> None:
    rng = np.random.default_rng(seed)
    first = fields(rng, n)
    signs = rng.choice([-1.0, 1.0], n)
    result = align(first, first * signs, None, TOLERANCE)
    assert agree(result.fields, first)
    assert result.freedom == tuple("sign" if s < 0 else "none" for s in signs)


def test_phases_of_complex_orbitals() -> None:
    rng = np.random.default_rng(1)
    first = fields(rng, 4, complex_values=True)
    result = align(first, first * np.exp(1j * np.array([0.0, 0.3, np.pi, 2.0])), None, TOLERANCE)
    assert agree(result.fields, first)
    assert result.freedom == ("none", "phase", "sign", "phase")


@settings(deadline=None, max_examples=30)
@given(st.integers(0, 2**32 - 1), st.integers(2, 8))
def test_order_is_undone_and_said(seed: int, n: int) -> None:
    rng = np.random.default_rng(seed)
    first = fields(rng, n)
    order = rng.permutation(n)
    result = align(first, first[:, :, order] * -1.0, None, TOLERANCE)
    assert agree(result.fields, first)
    for p, word in enumerate(result.freedom):
        q = int(np.flatnonzero(order == p)[0])
        assert word == ("sign" if q == p else f"order (was {q}) and sign")


@pytest.mark.parametrize("complex_values", [False, True])
def test_rotation_within_a_degenerate_group(complex_values: bool) -> None:
    rng = np.random.default_rng(2)
    first = fields(rng, 5, complex_values=complex_values)
    matrix = rng.normal(size=(3, 3)) + (1j * rng.normal(size=(3, 3)) if complex_values else 0)
    rotation, _ = np.linalg.qr(matrix)
    second = first.copy()
    second[:, :, 1:4] = first[:, :, 1:4] @ rotation
    energies = np.array([-1.0, -0.5, -0.5, -0.5 + 1e-9, 0.2])
    result = align(first, second, energies, TOLERANCE)
    assert agree(result.fields, first)
    assert result.freedom[1:4] == ("rotation within {1, 2, 3}",) * 3
    # Without equal energies the same mixing is a real difference.
    assert not agree(align(first, second, np.arange(5.0), TOLERANCE).fields, first)


def test_a_scaling_within_a_degenerate_group_is_not_a_freedom() -> None:
    first = fields(np.random.default_rng(3), 2)
    second = first @ np.array([[1.1, 0.2], [0.0, 1.0]])
    assert not agree(align(first, second, np.zeros(2), TOLERANCE).fields, first)


def test_different_orbitals_stay_different() -> None:
    rng = np.random.default_rng(4)
    first = fields(rng, 3)
    second = first + 1e-4 * fields(rng, 3)
    result = align(first, second, None, TOLERANCE)
    assert 1e-5 < np.abs(result.fields - first).max() < 1e-2


def test_groups_are_chained_and_found_in_any_order() -> None:
    energies = np.array([0.5, -1.0, 0.5 + 9e-7, 0.5 + 1.8e-6, -1.0, 3.0])
    assert [g.tolist() for g in degenerate_groups(energies, 6)] == [[1, 4], [0, 2, 3]]
    assert degenerate_groups(None, 6) == []
