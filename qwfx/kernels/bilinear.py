"""The sum over pairs of strings, for a block of walkers in one pass over the stored entries."""

from __future__ import annotations

from typing import Any

from numba import njit

from qwfx.kernels.minors import LANES
from qwfx.kernels.numeric import JIT

__all__ = ["bilinear"]


@njit(**JIT)  # type: ignore[untyped-decorator]
def bilinear(
    row_start: Any, columns: Any, coefficients: Any, up: Any, down: Any, total: Any, for_up: Any, for_down: Any
) -> None:
    """total[b] = sum_IJ C_IJ up[I, b] down[J, b], and its derivatives with respect to up and down.

    coefficients: (E) of one state. up, for_up: (U, LANES). down, for_down: (D, LANES). An entry is read once for the
    whole block, so that the memory of a big expansion passes by once for every `LANES` walkers.
    """
    for j in range(len(for_down)):
        for b in range(LANES):
            for_down[j, b] = 0.0
    for b in range(LANES):
        total[b] = 0.0
    for i in range(len(row_start) - 1):
        for b in range(LANES):
            for_up[i, b] = 0.0
        for e in range(row_start[i], row_start[i + 1]):
            c, j = coefficients[e], columns[e]
            for b in range(LANES):
                for_up[i, b] += c * down[j, b]
                for_down[j, b] += c * up[i, b]
        for b in range(LANES):
            total[b] += for_up[i, b] * up[i, b]
