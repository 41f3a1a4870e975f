"""The sum over pairs of strings, for a block of walkers in one pass over the stored entries."""

from __future__ import annotations

from typing import Any

from numba import njit

from qwfx.kernels.lanes import load, plus_product, same, store
from qwfx.kernels.numeric import JIT

__all__ = ["bilinear", "largest_entries"]


@njit(**JIT)  # type: ignore[untyped-decorator]
def bilinear(
    row_start: Any, columns: Any, coefficients: Any, up: Any, down: Any, total: Any, for_up: Any, for_down: Any,
    width: Any,
) -> None:  # fmt: skip
    """Row 0 of `total` = sum_IJ C_IJ up[I] down[J], and its derivatives with respect to up and down.

    coefficients: (E) of one state. up, for_up: (U, walkers). down, for_down: (D, walkers). An entry is read once for
    the whole block. `width` is a tuple as long as the block, see `qwfx.kernels.minors`.
    """
    zero = same(down, 0.0, width)
    for j in range(len(for_down)):
        store(for_down, j, zero)
    everything = zero
    for i in range(len(row_start) - 1):
        own, row = load(up, i, width), zero
        for e in range(row_start[i], row_start[i + 1]):
            c, j = coefficients[e], columns[e]
            row = plus_product(row, c, load(down, j, width))
            store(for_down, j, plus_product(load(for_down, j, width), c, own))
        store(for_up, i, row)
        everything = plus_product(everything, row, own)
    store(total, 0, everything)


@njit(**JIT)  # type: ignore[untyped-decorator]
def largest_entries(row_start: Any, columns: Any, coefficients: Any, for_up: Any, for_down: Any) -> None:
    """The largest |C| of any state in each row and column, into (U) and (D) that hold zeros."""
    for state in range(len(coefficients)):
        for i in range(len(row_start) - 1):
            for e in range(row_start[i], row_start[i + 1]):
                size = abs(coefficients[state, e])
                for_up[i] = max(for_up[i], size)
                for_down[columns[e]] = max(for_down[columns[e]], size)
