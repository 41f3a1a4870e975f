"""Packed two-electron integrals: the formulas, the fast functions and PySCF's own packing."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from pyscf import ao2mo

from qwfx.kernels import packing as fast
from qwfx.reference import packing as plain

KINDS = [("eightfold", True), ("fourfold", False), ("pairs", True), ("pairs", False)]


def symmetric(kind: str, like: bool, n: int, seed: int) -> NDArray[np.float64]:
    """Random integrals with the symmetry that the packing uses, and no more."""
    full = np.random.default_rng(seed).normal(size=(n, n, n, n))
    if kind != "pairs":
        full = full + full.transpose(1, 0, 2, 3)
        full = full + full.transpose(0, 1, 3, 2)
    return full + full.transpose(2, 3, 0, 1) if like else full


@pytest.mark.parametrize(("kind", "like"), KINDS)
@given(n=st.integers(1, 5), seed=st.integers(0, 1000))
@settings(max_examples=15, deadline=None)
def test_fast_and_plain_agree(kind: str, like: bool, n: int, seed: int) -> None:
    full = symmetric(kind, like, n, seed)
    values = plain.pack(full, kind, like)
    np.testing.assert_array_equal(fast.pack(full, kind, like), values)
    np.testing.assert_array_equal(plain.unpack(values, kind, n, like), full)
    np.testing.assert_array_equal(fast.unpack(values, kind, n, like), full)
    index = np.indices((n, n, n, n)).reshape(4, -1).T
    places = fast.positions(kind, n, index, like)
    assert places.tolist() == [plain.position(kind, n, *(int(i) for i in row), like_spins=like) for row in index]
    assert sorted(set(places.tolist())) == list(range(plain.packed_length(kind, n, like)))
    back = fast.indices(kind, n, np.arange(len(values)), like)
    np.testing.assert_array_equal(full[tuple(back.T)], values)


@pytest.mark.parametrize("n", [1, 2, 5, 7])
def test_pyscf_packs_the_same(n: int) -> None:
    full = symmetric("eightfold", True, n, 3)
    np.testing.assert_array_equal(fast.pack(full, "eightfold"), ao2mo.restore(8, full, n))
    np.testing.assert_array_equal(fast.unpack(fast.pack(full, "eightfold"), "eightfold", n), full)
    half = symmetric("fourfold", False, n, 4)
    expected = ao2mo.restore(4, full, n)
    np.testing.assert_array_equal(fast.pack(full, "fourfold", False).reshape(expected.shape), expected)
    np.testing.assert_array_equal(fast.unpack(fast.pack(half, "fourfold", False), "fourfold", n, False), half)


@given(place=st.integers(0, 2**62), n=st.integers(60_000, 70_000))
@settings(max_examples=200, deadline=None)
def test_places_of_huge_vectors(place: int, n: int) -> None:
    """Square roots of numbers beyond 2^53 are rounded; the indices must not be."""
    for kind, like in KINDS[:2]:
        at = place % plain.packed_length(kind, n, like)
        p, q, r, s = (int(i) for i in fast.indices(kind, n, np.array([at]), like)[0])
        assert p >= q
        assert r >= s
        assert plain.position(kind, n, p, q, r, s, like) == at


def test_sparse_vectors() -> None:
    values, index = np.array([1.5, -2.0]), np.array([1, 4], dtype=np.uint64)
    np.testing.assert_array_equal(fast.dense(values, index, "eightfold", 2), [0, 1.5, 0, 0, -2.0, 0])
    assert fast.dense(values, None, "eightfold", 2) is values
