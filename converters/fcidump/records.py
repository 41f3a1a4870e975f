"""The records of an FCIDUMP file, ``value i j k l`` line by line, parsed from bytes."""

from __future__ import annotations

from collections.abc import Generator, Iterator
from dataclasses import dataclass
from typing import Any, NoReturn

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.numbers import JIT, NOT_A_NUMBER, UNDECIDED, number_at, power_table, text_to_float
from qwfx.errors import ConversionError

__all__ = ["Records", "Survey", "batches", "line_at", "survey"]

BATCH = 1 << 16
FINE, BAD_VALUE, FEW, BAD_INDEX, MORE, SLOW = range(6)
PROBLEMS = {
    BAD_VALUE: ("the value is not a number", "a number such as 1.5E-03, or (re,im)"),
    FEW: ("the line ends before four indices", "value i j k l"),
    BAD_INDEX: ("an index is not a whole number", "four whole numbers from 0"),
    MORE: ("there is more behind the four indices", "value i j k l"),
}
LARGEST_INDEX = 1_000_000


@dataclass(frozen=True)
class Survey:
    """What a first look at all records shows."""

    n_records: int
    largest_index: int
    is_complex: bool
    any_imaginary: bool
    n_zero: int
    """Records whose indices are all zero."""
    zero_last: bool
    """Whether the last record is one of them."""
    any_mixed: bool
    """Whether a pair (ij| or |kl) joins an odd and an even index with a value that is not zero."""
    n_two_body: int
    n_one_body: int
    digits: int
    """Most significant digits of the values looked at."""


@dataclass(frozen=True)
class Records:
    """A batch of records."""

    first: int
    """Number of the first one, from 0."""
    real: NDArray[np.float64]
    imaginary: NDArray[np.float64]
    index: NDArray[np.int32]
    """(n, 4), from 1 as written."""
    place: NDArray[np.int64]
    """(n) byte at which each record begins."""


def line_at(text: Any, position: int) -> int:
    """Number of the line, from 1, in which a byte lies."""
    return int(np.count_nonzero(np.asarray(text[:position]) == 10)) + 1


def batches(text: NDArray[np.uint8], start: int, name: str) -> Iterator[Records]:
    """All records in order, in batches. Raises ConversionError with the line of the first bad one."""
    table = power_table()
    real, imaginary = np.empty(BATCH), np.empty(BATCH)
    bits = np.zeros(1, dtype=np.uint64)
    index, place = np.empty((BATCH, 4), dtype=np.int32), np.empty(BATCH, dtype=np.int64)
    position, first = start, 0
    while position < len(text):
        position, n, status = _parse(
            text, position, len(text), table, bits, real.view(np.uint64), imaginary.view(np.uint64), index, place
        )
        if n:
            yield Records(first, real[:n], imaginary[:n], index[:n], place[:n])
            first += n
        if status == SLOW:
            position = yield from _slowly(text, position, name, first)
            first += 1
        elif status != FINE:
            _complain(text, position, status, name)


def _line(text: NDArray[np.uint8], position: int) -> tuple[int, int]:
    """First byte of and first byte behind the line in which a byte lies."""
    begin = position
    while begin > 0 and text[begin - 1] != 10:
        begin -= 1
    end = position
    while end < len(text) and text[end] != 10:
        end += 1
    return begin, end


def _slowly(text: NDArray[np.uint8], position: int, name: str, first: int) -> Generator[Records, None, int]:
    """One record whose value only Python's own parser can round; the position behind it is returned."""
    _, end = _line(text, position)
    line = bytes(text[position:end])
    value, _, rest = line.partition(b")") if line.lstrip().startswith(b"(") else (*line.split(None, 1), b"")[:3]
    try:
        if line.lstrip().startswith(b"("):
            parts = [text_to_float(part) for part in value.strip().lstrip(b"(").split(b",")]
        else:
            rest = line.split(None, 1)[1]
            parts = [text_to_float(value), 0.0]
        index = np.array([[int(word) for word in rest.split()]], dtype=np.int32)
        numbers = np.array(parts)
        if index.shape != (1, 4) or len(parts) != 2 or not np.isfinite(numbers).all():
            raise ValueError
    except (ValueError, IndexError, OverflowError):
        _complain(text, position, BAD_VALUE, name)
    yield Records(first, numbers[:1], numbers[1:], index, np.array([position]))
    return end


def _complain(text: NDArray[np.uint8], position: int, status: int, name: str) -> NoReturn:
    begin, end = _line(text, min(position, len(text) - 1))
    shown = bytes(text[begin:end]).decode("latin-1").strip()
    found, expected = PROBLEMS[status]
    last = not (np.asarray(text[end:]) > 32).any()
    raise ConversionError(
        f"{found}: {shown[:60]!r}",
        where=f"{name}:{line_at(text, begin)}",
        expected=expected,
        remedy="the file is cut off here: write it again" if last and status == FEW else "mend the line",
    )


@njit(**JIT)  # type: ignore[untyped-decorator]
def _parse(
    text: Any, start: int, end: int, table: Any, bits: Any, real: Any, imaginary: Any, index: Any, place: Any
) -> tuple[int, int, int]:
    """Fill the batch; the position reached, the number of records, and what stopped it."""
    n, i = 0, start
    while n < len(place):
        while i < end and text[i] <= 32:
            i += 1
        if i >= end:
            return end, n, FINE
        begin = i
        imaginary[n] = np.uint64(0)
        if text[i] == 40:  # (re,im)
            i += 1
            for part in range(2):
                while i < end and (text[i] == 32 or text[i] == 9):
                    i += 1
                i, status = number_at(text, i, end, table, bits)
                if status == UNDECIDED:
                    return begin, n, SLOW
                if status == NOT_A_NUMBER:
                    return begin, n, BAD_VALUE
                if part == 0:
                    real[n] = bits[0]
                else:
                    imaginary[n] = bits[0]
                while i < end and (text[i] == 32 or text[i] == 9):
                    i += 1
                if i >= end or text[i] != (44 if part == 0 else 41):
                    return begin, n, BAD_VALUE
                i += 1
        else:
            i, status = number_at(text, i, end, table, bits)
            if status == UNDECIDED:
                return begin, n, SLOW
            if status == NOT_A_NUMBER:
                return begin, n, BAD_VALUE
            real[n] = bits[0]
        for column in range(4):
            while i < end and (text[i] == 32 or text[i] == 9 or text[i] == 44):
                i += 1
            if i >= end or text[i] == 10 or text[i] == 13:
                return begin, n, FEW
            value, digits = 0, 0
            while i < end and 48 <= text[i] <= 57:
                value = min(value * 10 + (text[i] - 48), LARGEST_INDEX)
                digits += 1
                i += 1
            if digits == 0 or (i < end and not (text[i] <= 32 or text[i] == 44)):
                return begin, n, BAD_INDEX
            index[n, column] = value
        while i < end and (text[i] == 32 or text[i] == 9 or text[i] == 13):
            i += 1
        if i < end and text[i] != 10:
            return begin, n, MORE
        place[n] = begin
        n += 1
    return i, n, FINE


def survey(text: NDArray[np.uint8], start: int, name: str) -> Survey:
    """A first look at all records. Raises ConversionError with the line of the first bad one."""
    n = largest = n_zero = n_two = n_one = 0
    is_complex = any_imaginary = any_mixed = zero_last = False
    for batch in batches(text, start, name):
        index = batch.index
        n += len(index)
        largest = max(largest, int(index.max()))
        zero = ~index.any(axis=1)
        n_zero += int(zero.sum())
        zero_last = bool(zero[-1])
        two = index.all(axis=1)
        n_two += int(two.sum())
        n_one += int((index[:, :2].all(axis=1) & ~index[:, 2:].any(axis=1)).sum())
        any_imaginary = any_imaginary or bool(batch.imaginary.any())
        if not any_mixed:
            odd = (index % 2).astype(bool)
            mixed = np.asarray((two | index[:, :2].all(axis=1)) & (odd[:, 0] != odd[:, 1]))
            mixed |= two & (odd[:, 2] != odd[:, 3])
            any_mixed = bool((mixed & (batch.real != 0.0)).any())
        if batch.first == 0:
            is_complex = bytes(text[batch.place[0] : batch.place[0] + 1]) == b"("
    head = bytes(text[start : start + 20_000]).decode("latin-1")
    return Survey(
        n, largest, is_complex, any_imaginary, n_zero, zero_last, any_mixed, n_two, n_one, _significant(head)
    )


def _significant(text: str) -> int:
    """Most significant digits that a value in the text has."""
    most = 1
    for line in text.splitlines()[:-1]:
        token = line.split()[0] if line.split() else ""
        digits = "".join(c for c in token.upper().replace("D", "E").split("E")[0].lstrip("(") if c.isdigit())
        most = max(most, len(digits.lstrip("0")))
    return min(most, 17)
