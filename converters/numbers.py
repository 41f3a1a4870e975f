"""Decimal numbers from bytes, fast and correctly rounded, in the spellings that programs print.

``1.5``, ``-.5E-3``, ``1.5D+00``, ``+2``, and ``1.234-105``, where a three-digit exponent has pushed out its letter.
The method is that of D. Lemire, Number parsing at a gigabyte per second, Softw. Pract. Exp. 51, 1700 (2021): the
decimal significand is multiplied by a 128-bit approximation of the power of ten; in the rare cases where that does not
decide the rounding, the caller is told to parse the token with Python's own ``float``.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

__all__ = [
    "JIT", "NOT_A_NUMBER", "OK", "UNDECIDED", "number_and_unit", "number_at", "power_table", "text_to_float",
]  # fmt: skip

JIT: dict[str, Any] = {"cache": True, "nogil": True, "boundscheck": False}
OK, NOT_A_NUMBER, UNDECIDED = 0, 1, 2
LOWEST, HIGHEST = -342, 308
U = np.uint64
MOST_DIGITS = 19
"""Decimal digits that always fit 64 bits."""


@lru_cache(maxsize=1)
def power_table() -> NDArray[np.uint64]:
    """(651, 2) high and low halves of the leading 128 bits of 5^q, q = -342..308 (Lemire's construction)."""
    rows = []
    for q in range(LOWEST, HIGHEST + 1):
        power = 5 ** abs(q)
        if q < 0:
            z = power.bit_length() if power & (power - 1) else power.bit_length() - 1
            c = 2 ** (z + 127 if q >= -27 else 2 * z + 128) // power + 1
        else:
            c = power << max(128 - power.bit_length(), 0)
        c >>= max(c.bit_length() - 128, 0)
        rows.append((c >> 64, c & (2**64 - 1)))
    return np.array(rows, dtype=np.uint64)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _product(a: Any, b: Any) -> tuple[Any, Any]:
    """High and low halves of the 128-bit product of two 64-bit numbers."""
    mask, shift = U(0xFFFFFFFF), U(32)
    a0, a1, b0, b1 = a & mask, a >> shift, b & mask, b >> shift
    low, middle, other, high = a0 * b0, a1 * b0, a0 * b1, a1 * b1
    carry = (low >> shift) + (middle & mask) + (other & mask)
    return high + (middle >> shift) + (other >> shift) + (carry >> shift), (carry << shift) | (low & mask)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _bits(w: Any, q: int, table: Any) -> tuple[bool, Any]:
    """Bits of the double nearest to ``w 10^q`` (w not 0), and whether that was decided."""
    if q < LOWEST or q > HIGHEST:
        return False, U(0)
    lead = 0
    for step in (32, 16, 8, 4, 2, 1):
        if not (w >> U(64 - step)):
            w = w << U(step)
            lead += step
    high, low = _product(w, table[q - LOWEST, 0])
    if (high & U(0x1FF)) == U(0x1FF):
        more, _ = _product(w, table[q - LOWEST, 1])
        low = low + more
        if low < more:
            high = high + U(1)
    if low == U(0xFFFFFFFFFFFFFFFF) and (q < -27 or q > 55):
        return False, U(0)
    upper = high >> U(63)
    mantissa = high >> (upper + U(9))
    power = ((217706 * q) >> 16) + 63 + np.int64(upper) - lead + 1023
    if power <= 0 or power >= 2046:  # subnormal or nearly infinite: left to the slow way
        return False, U(0)
    if low <= U(1) and -4 <= q <= 23 and (mantissa & U(3)) == U(1) and (mantissa << (upper + U(9))) == high:
        mantissa = mantissa & ~U(1)
    mantissa = (mantissa + (mantissa & U(1))) >> U(1)
    if mantissa >= U(1 << 53):
        mantissa = U(1 << 52)
        power += 1
    return True, (mantissa & ~U(1 << 52)) | (U(power) << U(52))


@njit(**JIT)  # type: ignore[untyped-decorator]
def number_and_unit(text: Any, start: int, end: int, table: Any, bits: Any) -> tuple[int, int, int]:
    """Parse the number that begins at `start`; its bits go to ``bits[0]``.

    Returns the position behind it; OK, NOT_A_NUMBER or UNDECIDED; and the power of ten of its last printed digit.
    """
    i = start
    negative = False
    if i < end and (text[i] == 45 or text[i] == 43):
        negative = text[i] == 45
        i += 1
    w = U(0)
    kept = exponent = unit = 0
    digit = point = tail = False
    while i < end:
        c = text[i]
        if 48 <= c <= 57:
            digit = True
            unit -= 1 if point else 0
            if kept < MOST_DIGITS:
                w = w * U(10) + U(c - 48)
                kept += 1 if w else 0
                exponent -= 1 if point else 0
            else:
                tail = tail or c != 48
                exponent += 0 if point else 1
        elif c == 46 and not point:
            point = True
        else:
            break
        i += 1
    if not digit:
        return i, NOT_A_NUMBER, 0
    lettered = i < end and (text[i] == 69 or text[i] == 101 or text[i] == 68 or text[i] == 100)
    if lettered or (i < end and (text[i] == 43 or text[i] == 45)):
        if lettered:
            i += 1
        sign = 1
        if i < end and (text[i] == 43 or text[i] == 45):
            sign = -1 if text[i] == 45 else 1
            i += 1
        written, any_digit = 0, False
        while i < end and 48 <= text[i] <= 57:
            written = min(written * 10 + (text[i] - 48), 100000)
            any_digit = True
            i += 1
        if not any_digit:
            return i, NOT_A_NUMBER, 0
        exponent += sign * written
        unit += sign * written
    if i < end and not (text[i] <= 32 or text[i] == 44 or text[i] == 41):  # blank, comma, closing bracket
        return i, NOT_A_NUMBER, 0
    top = U(1 << 63) if negative else U(0)
    if w == U(0):
        bits[0] = top
        return i, OK, unit
    decided, found = _bits(w, exponent, table)
    if tail:  # more digits than fit: decided if the next greater significand rounds to the same double
        also, other = _bits(w + U(1), exponent, table)
        decided = decided and also and found == other
    bits[0] = found | top
    return i, OK if decided else UNDECIDED, unit


@njit(**JIT)  # type: ignore[untyped-decorator]
def number_at(text: Any, start: int, end: int, table: Any, bits: Any) -> tuple[int, int]:
    """`number_and_unit` without the unit."""
    i, status, _ = number_and_unit(text, start, end, table, bits)
    return i, status


def text_to_float(token: bytes) -> float:
    """The slow way, by Python: for tokens that `number_at` does not decide. Raises ValueError for what is no number."""
    text = token.decode("ascii").strip().upper().replace("D", "E")
    for i in range(len(text) - 1, 0, -1):
        if text[i] in "+-":
            if text[i - 1] != "E":
                text = text[:i] + "E" + text[i:]
            break
    return float(text)
