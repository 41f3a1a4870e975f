"""The lines of [MO]: headings ``Key= value`` and coefficients ``function value``, parsed from bytes."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.numbers import JIT, NOT_A_NUMBER, UNDECIDED, number_at, power_table, text_to_float
from qwfx.errors import ConversionError

if TYPE_CHECKING:
    from qwfx.converters.molden.sections import WrittenOrbitals

__all__ = ["read_orbitals"]

FINE, BAD_INDEX, BAD_VALUE, OUT_OF_RANGE, MORE, TWICE = range(6)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _headings(text: Any, start: int, end: int, where: Any) -> int:
    """Offsets of the lines that contain ``=``; how many there are (`where` may be too short to hold all)."""
    n, i = 0, start
    while i < end:
        begin, equals = i, False
        while i < end and text[i] != 10:
            equals = equals or text[i] == 61
            i += 1
        if equals:
            if n < len(where):
                where[n] = begin
            n += 1
        i += 1
    return n


@njit(**JIT)  # type: ignore[untyped-decorator]
def _coefficients(
    text: Any, start: int, end: int, table: Any, bits: Any, row: Any, seen: Any, slow: Any
) -> tuple[int, int, int]:
    """Fill one orbital from its lines; where it stopped, why, and how many values are left to Python (`slow`)."""
    i, n_slow = start, 0
    while True:
        while i < end and text[i] <= 32:
            i += 1
        if i >= end:
            return i, FINE, n_slow
        begin = i
        function = 0
        while i < end and 48 <= text[i] <= 57:
            function = min(function * 10 + text[i] - 48, 100_000_000)
            i += 1
        if i == begin or i >= end or not (text[i] == 32 or text[i] == 9):
            return begin, BAD_INDEX, n_slow
        if function < 1 or function > len(row):
            return begin, OUT_OF_RANGE, n_slow
        if seen[function - 1]:
            return begin, TWICE, n_slow
        while i < end and (text[i] == 32 or text[i] == 9):
            i += 1
        i, status = number_at(text, i, end, table, bits)
        if status == NOT_A_NUMBER:
            return begin, BAD_VALUE, n_slow
        if status == UNDECIDED and n_slow < len(slow):
            slow[n_slow] = begin
            n_slow += 1
        row[function - 1] = bits[0]
        seen[function - 1] = True
        while i < end and (text[i] == 32 or text[i] == 9 or text[i] == 13):
            i += 1
        if i < end and text[i] != 10:
            return begin, MORE, n_slow


def _line(text: NDArray[np.uint8], position: int) -> int:
    return int(np.count_nonzero(text[:position] == 10)) + 1


def _text_at(text: NDArray[np.uint8], position: int) -> str:
    end = position + int(np.argmax(np.append(text[position : position + 400], np.uint8(10)) == 10))
    return bytes(text[position:end]).decode("latin-1").strip()


def _bad(name: str, line: int, found: str, expected: str, remedy: str = "mend the line") -> ConversionError:
    return ConversionError(found, where=f"{name}:{line}", expected=expected, remedy=remedy)


def read_orbitals(
    text: NDArray[np.uint8], start: int, end: int, first_line: int, n_functions: int, name: str
) -> WrittenOrbitals:
    """Parse [MO], which lies between two offsets. Raises ConversionError with the line."""
    from qwfx.converters.molden.sections import WrittenOrbitals

    count = _headings(text, start, end, np.zeros(0, dtype=np.int64))
    offsets = np.zeros(count, dtype=np.int64)
    _headings(text, start, end, offsets)
    if not count:
        raise _bad(name, first_line, "[MO] has no orbitals", "Ene=, Spin=, Occup= and coefficients", "check the file")
    ends = [_end_of_line(text, int(o), end) for o in offsets]
    # An orbital begins with a heading that has something else than a heading before it.
    groups: list[list[int]] = []
    for k in range(count):
        between = text[ends[k - 1] : offsets[k]] if k else text[:0]
        if k == 0 or (between > 32).any():
            groups.append([])
        groups[-1].append(k)
    values = np.zeros((len(groups), n_functions))
    result = WrittenOrbitals(values, [], [], [], [], 0)
    table, bits, slow = power_table(), np.zeros(1, dtype=np.uint64), np.zeros(n_functions, dtype=np.int64)
    starts = [int(offsets[group[0]]) for group in groups] + [end]
    line, counted = first_line, start
    for number, group in enumerate(groups):
        line += int(np.count_nonzero(text[counted : starts[number]] == 10))
        counted = starts[number]
        result.lines.append(line)
        _heading(text, [(int(offsets[k]), ends[k]) for k in group], result, name, line)
        seen = np.zeros(n_functions, dtype=np.bool_)
        row = values[number].view(np.uint64)
        at, status, n_slow = _coefficients(text, ends[group[-1]], starts[number + 1], table, bits, row, seen, slow)
        for position in slow[:n_slow]:
            function, value = _text_at(text, int(position)).split()[:2]
            values[number, int(function) - 1] = text_to_float(value.encode())
        if status != FINE:
            _complain(text, at, status, n_functions, name)
        if not np.isfinite(values[number]).all():
            raise _bad(name, line, "a coefficient is not finite", "finite numbers", "check how the file was made")
    result.decimals = _decimals(bytes(text[ends[groups[0][-1]] : starts[1]]).decode("latin-1"))
    return result


def _end_of_line(text: NDArray[np.uint8], start: int, end: int) -> int:
    tail = text[start : min(start + 4096, end)]
    hits = np.flatnonzero(tail == 10)
    return start + int(hits[0]) + 1 if len(hits) else end


def _complain(text: NDArray[np.uint8], at: int, status: int, n_functions: int, name: str) -> None:
    shown = _text_at(text, at)
    found, expected = {
        BAD_INDEX: (f"{shown[:40]!r}", "the number of a function and a coefficient"),
        BAD_VALUE: (f"the coefficient in {shown[:40]!r} is not a number", "a number"),
        OUT_OF_RANGE: (f"a coefficient of function {shown.split()[0]}", f"1 to {n_functions}, as the basis has it"),
        MORE: (f"there is more behind the coefficient: {shown[:40]!r}", "the number of a function and a coefficient"),
        TWICE: (f"a second coefficient of function {shown.split()[0]}", "one for each function"),
    }[status]
    remedy = "check the flags [5D], [7F], [9G] and the shells" if status == OUT_OF_RANGE else "mend the line"
    raise _bad(name, _line(text, at), found, expected, remedy)


def _heading(
    text: NDArray[np.uint8], spans: list[tuple[int, int]], result: WrittenOrbitals, name: str, line: int
) -> None:
    """Keys of one orbital, in any order and case."""
    from qwfx.converters.molden.sections import number

    keys: dict[str, str] = {}
    for begin, end in spans:
        key, _, value = bytes(text[begin:end]).decode("latin-1").partition("=")
        keys[key.strip().lower()] = value.strip()
    spin = keys.get("spin", "alpha").lower()
    if not spin.startswith(("a", "b")):
        raise _bad(name, line, f"the spin is {keys['spin']!r}", "Alpha or Beta")
    result.spins.append("alpha" if spin.startswith("a") else "beta")
    for key, target, what in (("ene", result.energies, "the energy"), ("occup", result.occupations, "the occupation")):
        found = keys.get(key)
        target.append(number(found.split()[0], name, line, what) if found else None)
    result.symmetries.append(keys.get("sym") or None)


def _decimals(text: str) -> int:
    """Digits that the coefficients carry: places behind the point, or those of the significand."""
    most = 1
    for row in text.splitlines()[:200]:
        tokens = row.split()
        if len(tokens) == 2:
            significand = tokens[1].upper().replace("D", "E").split("E")[0]
            most = max(most, len(significand.partition(".")[2]))
    return min(most, 16)


