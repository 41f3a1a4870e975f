"""Records to bytes: 17 significant digits, which read back give the very same double.

The digits are those of ``v 10^q`` rounded to a whole number, with the 128-bit powers of `qwfx.converters.numbers`. The
error of a power is below 2^-127, so the whole number is off by one at most where the remainder is within 1e-18 of
a half; then both neighbours are half a unit of the 17th digit away, and that is less than half of the distance of two
doubles (10^16 > 2^53). A property test reads every kind of number back.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.numbers import HIGHEST, JIT, LOWEST, _product, power_table
from qwfx.kernels.stale import forget_stale

__all__ = ["format_records"]

ROOM = 128
"""Bytes that a record takes at most."""
U = np.uint64
LEAST, MOST = U(10**16), U(10**17)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _scaled(w: Any, exponent: int, q: int, table: Any) -> Any:
    """``w 2^exponent 10^q`` rounded to a whole number of 54 to 58 bits; the highest bit of w is set."""
    high, low = _product(w, table[q - LOWEST, 0])
    more, _ = _product(w, table[q - LOWEST, 1])
    if low + more < low:
        high = high + U(1)
    shift = U(-1 - exponent - ((217706 * q) >> 16))
    return (high >> shift) + ((high >> (shift - U(1))) & U(1))


@njit(**JIT)  # type: ignore[untyped-decorator]
def _number(bits: Any, table: Any, out: Any, at: int) -> int:
    """Print a double as ``% .16E``; the position behind it, or -1 for numbers too small or not finite."""
    out[at] = 45 if bits >> U(63) else 32
    mantissa, biased = bits & U((1 << 52) - 1), np.int64((bits >> U(52)) & U(0x7FF))
    power: Any = 0
    digits = U(0)
    if biased == 0 and mantissa != U(0):
        return -1
    if biased == 0x7FF:
        return -1
    if biased:
        w = (mantissa | U(1 << 52)) << U(11)
        exponent = biased - 1075 - 11
        power = ((exponent + 63) * 315653) >> 20  # floor(log10(2^x)) by integers, exact in this range
        if 16 - power > HIGHEST:
            return -1
        digits = _scaled(w, exponent, 16 - power, table)
        if digits >= MOST:
            power += 1
            digits = _scaled(w, exponent, 16 - power, table)
            if digits >= MOST:
                power += 1
                digits = LEAST
    for k in range(18, 2, -1):
        following = digits // U(10)
        out[at + k] = np.uint8(U(48) + digits - following * U(10))
        digits = following
    out[at + 1] = np.uint8(U(48) + digits)
    out[at + 2] = 46
    out[at + 19] = 69
    out[at + 20] = 45 if power < 0 else 43
    power = abs(power)
    at += 21
    if power >= 100:
        out[at] = 48 + power // 100
        at += 1
    out[at] = 48 + power // 10 % 10
    out[at + 1] = 48 + power % 10
    return at + 2


@njit(**JIT)  # type: ignore[untyped-decorator]
def _lines(start: int, real: Any, imaginary: Any, index: Any, table: Any, out: Any, at: int) -> tuple[int, int]:
    """Print records from `start` on; the record and the position at which this stopped."""
    for m in range(start, len(index)):
        begin = at
        if len(imaginary):
            out[at] = 40
            at = _number(real[m], table, out, at + 1)
            if at >= 0:
                out[at] = 44
                at = _number(imaginary[m], table, out, at + 1)
            if at >= 0:
                out[at] = 41
                at += 1
        else:
            at = _number(real[m], table, out, at)
        if at < 0:
            return m, begin
        for column in range(4):
            value = index[m, column]
            width = 4
            while width < 10 and value >= 10**width:
                width += 1
            out[at] = 32
            for k in range(width, 0, -1):
                out[at + k] = 48 + value % 10 if value or k == width else 32
                value //= 10
            at += width + 1
        out[at] = 10
        at += 1
    return len(index), at


def format_records(index: NDArray[np.int64], value: NDArray[Any]) -> bytes:
    """The lines of records with these indices (m, 4) and finite values (m), real or complex."""
    real = np.ascontiguousarray(value.real, dtype=np.float64).view(np.uint64)
    imaginary = np.zeros(0, dtype=np.uint64)
    if np.iscomplexobj(value):
        imaginary = np.ascontiguousarray(value.imag, dtype=np.float64).view(np.uint64)
    index = np.ascontiguousarray(index, dtype=np.int64)
    out = np.empty(ROOM * len(index), dtype=np.uint8)
    row = at = 0
    while True:
        row, at = _lines(row, real, imaginary, index, power_table(), out, at)
        if row == len(index):
            return out[:at].tobytes()
        line = _slowly(index[row], value[row])  # nearly the smallest numbers there are
        out[at : at + len(line)] = np.frombuffer(line, dtype=np.uint8)
        row, at = row + 1, at + len(line)


def _slowly(index: NDArray[np.int64], value: Any) -> bytes:
    numbers = " ".join(f"{i:4d}" for i in index.tolist())
    text = f"({value.real: .16E},{value.imag: .16E})" if np.iscomplexobj(value) else f"{value: .16E}"
    return f"{text} {numbers}\n".encode()


forget_stale(_scaled, Path(__file__).parent, Path(__file__).parents[1])
