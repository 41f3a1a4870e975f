"""Operations on rows in vector registers against the same operations of NumPy."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels import lanes
from qwfx.kernels.minors import NARROW, WIDE

divide, equal, larger, load, minus_product, plus_product, same, size, store, times = (
    getattr(lanes, name) for name in lanes.__all__
)


@njit
def _products(a: Any, x: Any, number: Any, out: Any, width: Any) -> None:
    y, z = load(a, 1, width), load(x, 2, width)
    store(out, 0, plus_product(y, number, z))
    store(out, 1, minus_product(y, load(a, 0, width), z))
    store(out, 2, times(number, z))
    store(out, 3, times(2, z))
    store(out, 4, divide(y, z))
    store(out, 5, plus_product(same(x, -1.5, width), y, number))


@njit
def _choices(a: Any, x: Any, out: Any, width: Any) -> None:
    store(out, 0, larger(load(a, 0, width), load(a, 1, width), load(x, 0, width), load(x, 1, width)))
    store(out, 1, equal(load(a, 0, width), load(a, 2, width), load(x, 0, width), load(x, 1, width)))


@njit
def _sizes(x: Any, out: Any, width: Any) -> None:
    store(out, 0, size(load(x, 0, width)))


def rows(rng: np.random.Generator, count: int, is_complex: bool) -> NDArray[Any]:
    x = rng.normal(size=(3, count))
    return x + 1j * rng.normal(size=x.shape) if is_complex else x


@pytest.fixture(params=[WIDE, NARROW])
def width(request: pytest.FixtureRequest) -> tuple[int, ...]:
    found: tuple[int, ...] = request.param
    return found


@pytest.mark.parametrize("number", [0.7, 0.3 - 0.9j])
def test_products(width: tuple[int, ...], number: complex) -> None:
    rng = np.random.default_rng(0)
    a, x = (rows(rng, len(width), isinstance(number, complex)) for _ in range(2))
    out = np.full((7, len(width)), np.nan, type(number))
    _products(a, x, number, out, width)
    wanted = [a[1] + number * x[2], a[1] - a[0] * x[2], number * x[2], 2 * x[2], a[1] / x[2], a[1] * number - 1.5]
    assert np.allclose(out[:6], wanted, rtol=1e-14, atol=1e-15)
    assert np.isnan(out[6]).all(), "no more is written than a row"


@pytest.mark.parametrize("is_complex", [False, True])
def test_division_by_zero_and_by_far_numbers(width: tuple[int, ...], is_complex: bool) -> None:
    a = np.ones((3, len(width)), complex if is_complex else float)
    out = np.empty((6, len(width)), a.dtype)
    for number in (0.0, 1e-280, 1e280) + ((1e-200j, 3e200 - 1e200j) if is_complex else ()):
        x = np.full_like(a, number)
        _products(a, x, 1.0 + 0j if is_complex else 1.0, out, width)
        assert np.allclose(out[4] * number, 0 if number == 0 else 1, rtol=1e-14, atol=0)


@pytest.mark.parametrize("is_complex", [False, True])
def test_choices_and_sizes(width: tuple[int, ...], is_complex: bool) -> None:
    rng = np.random.default_rng(1)
    a, x = rng.normal(size=(3, len(width))), rows(rng, len(width), is_complex)
    a[2, ::2] = a[0, ::2]
    a[1, 0] = np.nan
    out, sizes = np.empty((2, len(width)), x.dtype), np.empty((1, len(width)))
    _choices(a, x, out, width)
    assert np.array_equal(out, np.where([a[0] > a[1], a[0] == a[2]], x[0], x[1]))
    _sizes(x, sizes, width)
    assert np.allclose(sizes, np.abs(x[0].real) + np.abs(x[0].imag), rtol=1e-15)


def test_mixed_numbers(width: tuple[int, ...]) -> None:
    """Real coefficients times complex rows."""

    @njit
    def run(x: Any, number: float, out: Any, width: Any) -> None:
        store(out, 0, plus_product(load(x, 0, width), number, load(x, 1, width)))
        store(out, 1, plus_product(same(x, 0.0, width), number, load(x, 2, width)))

    x = rows(np.random.default_rng(2), len(width), True)
    out = np.empty((2, len(width)), complex)
    run(x, 0.4, out, width)
    assert np.allclose(out, [x[0] + 0.4 * x[1], 0.4 * x[2]], rtol=1e-14)
