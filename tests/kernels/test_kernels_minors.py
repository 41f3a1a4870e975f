"""Minors and their cofactors against mpmath, most of all where a minor or a part of it vanishes."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from mpmath import mp
from numpy.typing import NDArray

from qwfx.kernels.minors import NARROW, WIDE, add_cofactors, careful_cofactors, fill_minors


def random(rng: np.random.Generator, shape: tuple[int, ...], is_complex: bool) -> NDArray[Any]:
    x = rng.normal(size=shape)
    return x + 1j * rng.normal(size=shape) if is_complex else x


def exactly(a: NDArray[Any]) -> tuple[Any, NDArray[Any]]:
    """Determinant and cofactors, in 40 digits, rounded at the end."""
    k = len(a)
    with mp.workdps(40):

        def det(rows: list[int], columns: list[int]) -> Any:
            return mp.det(mp.matrix(a[np.ix_(rows, columns)].tolist())) if rows else mp.mpf(1)

        every = list(range(k))
        found = [
            [(-1) ** (i + j) * det(every[:i] + every[i + 1 :], every[:j] + every[j + 1 :]) for j in every]
            for i in every
        ]  # fmt: skip
        return complex(det(every, every)), np.array([[complex(c) for c in row] for row in found])


def awkward(rng: np.random.Generator, k: int, is_complex: bool, case: str) -> NDArray[Any]:
    """A matrix whose elimination with rows exchanged meets small pivots before the last."""
    a = random(rng, (k, k), is_complex)
    if case == "dependent":  # the first columns, so that the pivots after them are rounding errors
        a[:, 1] = 0.3 * a[:, 0]
    elif case == "nearly":
        a[:, 1] = 0.3 * a[:, 0] + 1e-9 * a[:, 1]
    elif case == "zeros":
        a[:, 0] = 0
    elif case == "late zeros":
        a[:, k - 2] = 0
    elif case == "small":
        a[:, 0] *= 1e-9
    elif case == "two zeros":
        a[:, 0] = a[:, k - 1] = 0
    elif case == "two dependent":
        a[:, 1], a[:, 2] = 0.3 * a[:, 0], 0.7 * a[:, 0]
    elif case == "large":  # what a table looks like beside a node of the reference
        a += 1e4 * np.outer(random(rng, (k,), is_complex), random(rng, (k,), is_complex))
    return a


def sensitivity(a: NDArray[Any], order: int) -> float:
    """How much the determinant (order 1) or a cofactor (2) changes if the elements do, relative to the largest.

    The derivative of a minor is a minor of one row less, at most the product of as many singular values.
    """
    values = np.linalg.svd(a, compute_uv=False)
    return float(values[0] * np.prod(values[: len(a) - order])) if len(a) >= order else 1.0


CASES = ["any", "dependent", "nearly", "zeros", "late zeros", "small", "two zeros", "two dependent", "large"]


@pytest.mark.parametrize(("case", "k"), [("any", 1), ("any", 2), *((case, k) for case in CASES for k in (3, 5))])
@pytest.mark.parametrize("is_complex", [False, True])
def test_minors_and_cofactors(case: str, is_complex: bool, k: int) -> None:
    """One table of k by k: a block of eight walkers of which each has the matrix that it asks for."""
    rng = np.random.default_rng(k)
    for width in (WIDE, NARROW):
        matrices = [awkward(rng, k, is_complex, case if b in (0, 5) else "any") for b in range(len(width))]
        table = np.ascontiguousarray(np.array(matrices).reshape(len(width), k * k).T)
        every = np.arange(k, dtype=np.int16)[None]
        string, sign = np.array([1], dtype=np.int32), np.array([-1], dtype=np.int8)
        minors = np.full((2, len(width)), 7.0, table.dtype)
        fill_minors(table, k, string, every, every, sign, minors, width)
        weight = random(rng, (2, 2, len(width)), is_complex)
        found = np.zeros((2, k * k, len(width)), table.dtype)
        add_cofactors(table, k, string, every, every, sign, weight, found, width)
        assert (minors[0] == 7).all()
        for b, a in enumerate(matrices):
            det, cofactors = exactly(a)
            assert abs(minors[1, b] + det) <= 1e-14 * sensitivity(a, 1)
            for s in range(2):
                wanted = -weight[s, 1, b] * cofactors
                assert np.abs(found[s, :, b].reshape(k, k) - wanted).max() <= 1e-12 * sensitivity(a, 2) * abs(
                    weight[s, 1, b]
                )


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("is_complex", [False, True])
def test_both_rows_and_columns_exchanged(case: str, is_complex: bool) -> None:
    a = awkward(np.random.default_rng(9), 5, is_complex, case)
    _, cofactors = exactly(a)
    found = np.empty_like(a)
    careful_cofactors(a.copy(), found)
    assert np.abs(found - cofactors).max() <= 1e-14 * sensitivity(a, 2)
