"""Printed records against Python: 17 digits that read back to the very same double."""

from __future__ import annotations

import struct

import numpy as np
from hypothesis import example, given, settings
from hypothesis import strategies as st

from qwfx.converters.fcidump.lines import format_records

FINITE = st.floats(allow_nan=False, allow_infinity=False)


@given(st.lists(FINITE, min_size=1, max_size=20), st.integers(0, 5000))
@example([0.0, -0.0, 5e-324, 2.2250738585072014e-308, 1.7976931348623157e308, 1e-292, 1e-293, 0.1, 1.0, -9.5], 1)
@example([9.9999999999999995e22, 9.999999999999999e-5, 9007199254740993.0, 1e15, 1e16, 1e17, 123456789012345678.0], 1)
@settings(max_examples=300, deadline=None)
def test_real(values: list[float], index: int) -> None:
    rows = np.arange(index, index + 4 * len(values)).reshape(-1, 4)
    lines = format_records(rows, np.array(values)).decode("ascii").splitlines()
    assert len(lines) == len(values)
    for line, value, row in zip(lines, values, rows, strict=True):
        number, *indices = line.split()
        assert struct.pack("<d", float(number)) == struct.pack("<d", value)
        assert [int(i) for i in indices] == row.tolist()
        ours, _, exponent = number.partition("E")
        pythons = f"{value:.16E}"
        # Python rounds an exact half to even, the kernel away from zero: at most one unit of the last digit.
        assert exponent == pythons.partition("E")[2] or ours.strip("-") == "1.0000000000000000"
        assert abs(int(ours.replace(".", "")) - int(pythons.partition("E")[0].replace(".", ""))) <= 1


@given(st.lists(st.tuples(FINITE, FINITE), min_size=1, max_size=20))
@settings(max_examples=50, deadline=None)
def test_complex(values: list[tuple[float, float]]) -> None:
    numbers = np.array(values).view(np.complex128).ravel()
    lines = format_records(np.ones((len(values), 4), dtype=int), numbers).decode("ascii").splitlines()
    for line, (real, imaginary) in zip(lines, values, strict=True):
        inside, _, indices = line.lstrip("(").partition(")")
        assert [float(x) for x in inside.split(",")] == [real, imaginary]
        assert indices.split() == ["1"] * 4
