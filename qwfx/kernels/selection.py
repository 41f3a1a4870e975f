"""Points near a place, out of many: eight squared distances at a time, and a list of those that are near."""

from __future__ import annotations

from typing import Any

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

from qwfx.kernels.radial import LEAN

__all__ = ["select"]

WIDTH = 8
emitted: Any = intrinsic
"""The same, for the type checker: what it makes has one argument less than what it is given."""


@emitted  # type: ignore[untyped-decorator]
def near_eight(_context: Any, x: Any, y: Any, z: Any, first: Any, at: Any, square: Any) -> Any:
    """Bit k tells whether the square of the distance of `at` to point first + k, k < 8, is below `square` or NaN."""
    if any(array.layout != "C" for array in (x, y, z)):
        raise TypeError("coordinates must be in one piece")

    def build(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        vector = ir.VectorType(ir.DoubleType(), WIDTH)
        lanes = ir.Constant(ir.VectorType(ir.IntType(32), WIDTH), [0] * WIDTH)
        undefined = ir.Constant(vector, ir.Undefined)

        def spread(number: Any) -> Any:
            one = builder.insert_element(undefined, number, ir.IntType(32)(0))
            return builder.shuffle_vector(one, undefined, lanes)

        start = context.cast(builder, args[3], signature.args[3], types.intp)
        total = None
        for k in range(3):
            data = context.make_array(signature.args[k])(context, builder, args[k]).data
            points = builder.load(builder.bitcast(builder.gep(data, [start]), vector.as_pointer()), align=8)
            d = builder.fsub(points, spread(builder.extract_value(args[4], k)))
            product = builder.fmul(d, d, flags=("contract",))
            total = product if total is None else builder.fadd(total, product, flags=("contract",))
        near = builder.fcmp_unordered("<", total, spread(args[5]))
        return builder.zext(builder.bitcast(near, ir.IntType(WIDTH)), ir.IntType(64))

    return types.uint64(x, y, z, first, at, square), build


@emitted  # type: ignore[untyped-decorator]
def lowest_bit(_context: Any, _bits: Any) -> Any:
    """Number of the lowest bit that is set, of at least one."""
    return types.int64(types.uint64), lambda c, builder, s, args: builder.cttz(args[0], ir.Constant(ir.IntType(1), 1))


@njit(**LEAN)  # type: ignore[untyped-decorator]
def select(x: Any, y: Any, z: Any, at: Any, square: float, but: int, out: Any, start: int) -> int:
    """Put the points (x, y, z)[k] whose squared distance to `at` (x, y, z) is below `square`, or is no number, into
    out[:, start:], without number `but`; where they end. The arrays are in one piece."""
    n, end, one = len(x), start, np.uint64(1)
    ox, oy, oz = out[0], out[1], out[2]
    for first in range(0, n, 64):
        bits = np.uint64(0)
        if n - first >= 64:
            for k in range(0, 64, WIDTH):
                bits |= near_eight(x, y, z, first + k, at, square) << np.uint64(k)
        else:
            for k in range(0, n - first - WIDTH + 1, WIDTH):
                bits |= near_eight(x, y, z, first + k, at, square) << np.uint64(k)
            for k in range(n - n % WIDTH, n):
                dx, dy, dz = x[k] - at[0], y[k] - at[1], z[k] - at[2]
                if not dx * dx + dy * dy + dz * dz >= square:
                    bits |= one << np.uint64(k - first)
        if first <= but < first + 64:
            bits &= ~(one << np.uint64(but - first))
        while bits:
            k = first + lowest_bit(bits)
            bits &= bits - one
            ox[end], oy[end], oz[end] = x[k], y[k], z[k]
            end += 1
    return end
