"""The compiled number parser against Python's own."""

from __future__ import annotations

import math
import struct

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from qwfx.converters.numbers import NOT_A_NUMBER, OK, UNDECIDED, number_and_unit, number_at, power_table, text_to_float


def parse(text: str) -> tuple[int, int, float, int]:
    """Position, status, value, unit."""
    data, bits = np.frombuffer(text.encode() + b"\n", dtype=np.uint8), np.zeros(1, dtype=np.uint64)
    position, status, unit = number_and_unit(data, 0, len(data), power_table(), bits)
    assert number_at(data, 0, len(data), power_table(), bits) == (position, status)
    return position, status, float(bits.view(np.float64)[0]), unit


@given(st.floats(allow_nan=False, allow_infinity=False), st.sampled_from(["r", ".16E", ".17E", ".25E", ".20f", ".7g"]))
@example(2.2250738585072014e-308, "r")
@example(1.7976931348623157e308, "r")
@example(-0.0, "r")
@example(9007199254740993.0, ".20f")
@settings(max_examples=500, deadline=None)
def test_nearest_double(value: float, form: str) -> None:
    text = repr(value) if form == "r" else format(value, form)
    position, status, found, _ = parse(text)
    if status == UNDECIDED:  # left to Python: rare
        assert abs(float(text)) < 2.3e-308 or abs(float(text)) > 8e307 or len(text) > 20
        return
    assert status == OK
    assert position == len(text)
    assert struct.pack("<d", found) == struct.pack("<d", float(text))


@given(st.integers(2**53, 2**54), st.integers(0, 9), st.integers(-1, 1))
@settings(max_examples=300, deadline=None)
def test_half_way_between_two_doubles(odd: int, shift: int, aside: int) -> None:
    number = ((odd | 1) << shift) + aside
    position, status, found, _ = parse(str(number))
    assert (position, status, found) == (len(str(number)), OK, float(number))


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("1.5D-03", 1.5e-3, -4), ("-.25d+2", -25.0, 0), ("+7", 7.0, 0), ("1.25-105", 1.25e-105, -107),
        ("5.e1", 50.0, 1), ("1.0+002", 100.0, 1), ("0.000", 0.0, -3),
        ("3.50160672098974190547E+00", 3.501606720989742, -20),
    ],
)  # fmt: skip
def test_spellings(text: str, value: float, unit: int) -> None:
    assert parse(text) == (len(text), OK, value, unit)
    assert text_to_float(text.encode()) == value


@pytest.mark.parametrize("text", ["", ".", "-", "e5", "1e", "1.2.3", "nan", "inf", "1x", "1e5x", "--1", "1.DD3", "**"])
def test_no_numbers(text: str) -> None:
    assert parse(text)[1] == NOT_A_NUMBER


@given(st.text("0123456789.+-eEdD", max_size=12))
@settings(max_examples=300, deadline=None)
def test_any_text(text: str) -> None:
    """What the fast parser takes, Python takes too, for the same number."""
    _, status, found, _ = parse(text)
    if status == OK:
        slow = text_to_float(text.encode())
        assert found == slow or (math.isinf(slow) and math.isinf(found))
