"""The lines of [MO]: headings ``Key= value`` and coefficients ``function value``, parsed from bytes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.molden.text import LARGEST, bad, number
from qwfx.converters.numbers import JIT, NOT_A_NUMBER, UNDECIDED, number_at, power_table, text_to_float
from qwfx.kernels.stale import forget_stale

if TYPE_CHECKING:
    from qwfx.converters.molden.sections import WrittenOrbitals

__all__ = ["count_functions", "read_orbitals"]

PIECE = 1 << 20
"""Bytes that are searched at a time: whoever needs the first orbital alone does not wait for the last."""
FINE, BAD_INDEX, BAD_VALUE, OUT_OF_RANGE, MORE, TWICE = range(6)


@dataclass(frozen=True)
class _Orbital:
    """One orbital of [MO]: the line where it begins, its keys (three letters), where its coefficients are."""

    line: int
    keys: dict[str, str]
    start: int
    end: int


def _headings(text: NDArray[np.uint8], start: int, end: int) -> Iterator[int]:
    """Offsets of the lines that contain ``=``, ascending."""
    last = -1
    for piece in range(start, end, PIECE):
        for equals in (np.flatnonzero(text[piece : min(piece + PIECE, end)] == 61) + piece).tolist():
            if last >= 0 and not (text[last:equals] == 10).any():
                continue  # a second one on the same line
            last, step = equals, 64
            while last > start:
                newlines = np.flatnonzero(text[max(last - step, start) : last] == 10)
                if len(newlines):
                    last = max(last - step, start) + int(newlines[-1]) + 1
                    break
                last, step = max(last - step, start), 4 * step
            yield last


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


def read_orbitals(
    text: NDArray[np.uint8], spans: list[tuple[int, int, int]], n_functions: int, name: str
) -> WrittenOrbitals:
    """Parse the sections [MO]: each lies between two offsets and begins at a line. Raises ConversionError."""
    from qwfx.converters.molden.sections import WrittenOrbitals

    orbitals = [orbital for span in spans for orbital in _orbitals(text, *span)]
    if not orbitals:
        raise bad(name, spans[0][2], "[MO] has no orbitals", "Ene=, Spin=, Occup= and coefficients", "check the file")
    result = WrittenOrbitals(np.zeros((0, n_functions)), [], [], [], [], 0)
    for orbital in orbitals:
        result.lines.append(orbital.line)
        _heading(orbital.keys, result, name, orbital.line)
    for spin in ("alpha", "beta"):
        count = result.spins.count(spin)
        if count > n_functions:
            raise bad(
                name, orbitals[0].line, f"there are {count} orbitals of the spin {spin} over {n_functions} functions",
                "at most as many orbitals as functions", "check the flags [5D], [7F], [9G] and the shells",
            )  # fmt: skip
    result.coefficients = values = np.zeros((len(orbitals), n_functions))
    table, bits, slow = power_table(), np.zeros(1, dtype=np.uint64), np.zeros(n_functions, dtype=np.int64)
    for place, orbital in enumerate(orbitals):
        seen = np.zeros(n_functions, dtype=np.bool_)
        row = values[place].view(np.uint64)
        at, status, n_slow = _coefficients(text, orbital.start, orbital.end, table, bits, row, seen, slow)
        if status != FINE:
            _complain(text, at, status, n_functions, name)
        for position in slow[:n_slow]:
            function, value = _text_at(text, int(position)).split()[:2]
            values[place, int(function) - 1] = text_to_float(value.encode("latin-1"))
        if not np.all(np.abs(values[place]) < LARGEST):
            found = "a coefficient is too large or not finite"
            raise bad(name, orbital.line, found, f"magnitudes below {LARGEST:.0e}", "check how the file was made")
    first = max(orbitals, key=lambda o: o.end - o.start)
    result.decimals = _decimals(bytes(text[first.start : first.end][:20_000]).decode("latin-1"))
    return result


def _orbitals(text: NDArray[np.uint8], start: int, end: int, first_line: int) -> Iterator[_Orbital]:
    """The orbitals of one section. One begins with a heading after coefficients, or with a key that it has already."""
    line, counted = first_line, start
    orbital: _Orbital | None = None
    for offset in _headings(text, start, end):
        stop = _end_of_line(text, offset, end)
        key, _, value = bytes(text[offset:stop]).decode("latin-1").partition("=")
        key = key.strip().lower()[:3]
        if orbital is None or key in orbital.keys or (text[orbital.start : offset] > 32).any():
            if orbital is not None:
                yield replace(orbital, end=offset)
            line += int(np.count_nonzero(text[counted:offset] == 10))
            counted = offset
            orbital = _Orbital(line, {}, stop, end)
        orbital.keys[key] = value.strip()
        orbital = replace(orbital, start=stop)
    if orbital is not None:
        yield orbital


def count_functions(text: NDArray[np.uint8], spans: list[tuple[int, int, int]]) -> int:
    """How many functions the first orbital lists, if it lists 1, 2, 3, ... without a gap; else 0."""
    orbital = next((o for span in spans for o in _orbitals(text, *span)), None)
    words = b"" if orbital is None else bytes(text[orbital.start : orbital.end])
    numbers = [row.split()[0] for row in words.split(b"\n") if row.strip()]
    return len(numbers) if numbers == [b"%d" % (k + 1) for k in range(len(numbers))] else 0


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
    raise bad(name, _line(text, at), found, expected, remedy)


def _heading(keys: dict[str, str], result: WrittenOrbitals, name: str, line: int) -> None:
    """Values of the keys of one orbital."""
    spin = keys.get("spi", "alpha").lower()
    if not spin.startswith(("a", "b")):
        raise bad(name, line, f"the spin is {keys['spi']!r}", "Alpha or Beta")
    result.spins.append("alpha" if spin.startswith("a") else "beta")
    for key, target, what in (("ene", result.energies, "the energy"), ("occ", result.occupations, "the occupation")):
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


forget_stale(_coefficients, Path(__file__).parent, Path(__file__).parents[1])
