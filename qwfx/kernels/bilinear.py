"""The sum over pairs of strings, for a block of walkers in one pass over the stored entries."""

from __future__ import annotations

from typing import Any

from numba import njit

from qwfx.kernels.numeric import JIT

__all__ = ["bilinear", "largest_entries"]


@njit(**JIT)  # type: ignore[untyped-decorator]
def bilinear(
    row_start: Any, columns: Any, coefficients: Any, up: Any, down: Any, total: Any, for_up: Any, for_down: Any,
    width: Any,
) -> None:  # fmt: skip
    """total[b] = sum_IJ C_IJ up[I, b] down[J, b], and its derivatives with respect to up and down.

    coefficients: (E) of one state. up, for_up: (U, walkers). down, for_down: (D, walkers). An entry is read once for
    the whole block. `width` is a tuple as long as the block, see `qwfx.kernels.minors`.
    """
    lanes = len(width)
    for j in range(len(for_down)):
        for b in range(lanes):
            for_down[j, b] = 0.0
    for b in range(lanes):
        total[b] = 0.0
    for i in range(len(row_start) - 1):
        for b in range(lanes):
            for_up[i, b] = 0.0
        for e in range(row_start[i], row_start[i + 1]):
            c, j = coefficients[e], columns[e]
            for b in range(lanes):
                for_up[i, b] += c * down[j, b]
                for_down[j, b] += c * up[i, b]
        for b in range(lanes):
            total[b] += for_up[i, b] * up[i, b]


@njit(**JIT)  # type: ignore[untyped-decorator]
def largest_entries(row_start: Any, columns: Any, coefficients: Any, for_up: Any, for_down: Any) -> None:
    """The largest |C| of any state in each row and column, into (U) and (D) that hold zeros."""
    for state in range(len(coefficients)):
        for i in range(len(row_start) - 1):
            for e in range(row_start[i], row_start[i + 1]):
                size = abs(coefficients[state, e])
                for_up[i] = max(for_up[i], size)
                for_down[columns[e]] = max(for_down[columns[e]], size)
