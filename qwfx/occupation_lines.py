"""Expansions from a plain text list of determinants, for those who have them from elsewhere.

A line is one determinant: its coefficients (one for each state; two numbers ``re,im`` make a complex one), a ``|``, the
occupied up orbitals, a ``|``, the occupied down orbitals. Orbitals count from 1, ranges are ``3-7``, none are ``-``;
there are blanks or commas between them.
What follows a ``#`` is a comment::

    # water, two states
    0.98   0.02 | 1-5       | 1-5
    -0.11  0.95 | 1-4 6     | 1-4 6

The determinant is that of the orbitals in the order in which they stand: written in another than ascending order, its
sign is that of the permutation (FORMAT.md, F15).
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import ConversionError, FileError
from qwfx.model import Expansion

__all__ = ["expansion_of", "read_list", "write_list"]

Line = tuple[list[complex], tuple[int, ...], tuple[int, ...]]


def read_list(path: Path, n_orbitals: tuple[int, int], sets: tuple[str, str]) -> Expansion:
    """The expansion that a file lists.

    Parameters
    ----------
    n_orbitals : orbitals of the up and of the down set.
    sets : their names.

    Raises FileError, or ConversionError with the line: for a line that is none, orbitals out of range or twice, another
    number of states or electrons than before, a determinant that was listed before.
    """
    try:
        text = path.read_text("utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise FileError(
            f"cannot be read ({getattr(error, 'strerror', None) or error})", where=str(path),
            expected="a text file", remedy="check the path",
        ) from None  # fmt: skip
    lines: list[Line] = []
    seen: dict[tuple[tuple[int, ...], tuple[int, ...]], int] = {}
    for number, line in enumerate(text.splitlines(), 1):
        bare = line.partition("#")[0].strip()
        if not bare:
            continue
        where = f"{path}:{number}"
        coefficients, up, down = _line(bare, where, n_orbitals)
        if lines and (len(coefficients), len(up), len(down)) != (len(lines[0][0]), len(lines[0][1]), len(lines[0][2])):
            raise _bad(
                where, f"{len(coefficients)} coefficients, {len(up)} up and {len(down)} down orbitals",
                f"{len(lines[0][0])}, {len(lines[0][1])} and {len(lines[0][2])}, as in the first line",
            )  # fmt: skip
        key = tuple(sorted(up)), tuple(sorted(down))
        if key in seen:
            raise _bad(where, f"the determinant of line {seen[key]} again", "each determinant once")
        seen[key] = number
        sign = _parity(up) * _parity(down)
        lines.append(([sign * c for c in coefficients], *key))
    if not lines:
        raise _bad(str(path), "there are no determinants", "coefficients | up orbitals | down orbitals")
    values = np.array([line[0] for line in lines]).T
    return expansion_of(
        np.array([line[1] for line in lines], dtype=np.int64).reshape(len(lines), -1),
        np.array([line[2] for line in lines], dtype=np.int64).reshape(len(lines), -1),
        values if np.iscomplexobj(values) and values.imag.any() else values.real,
        n_orbitals,
        sets,
    )


def _bad(where: str, found: str, expected: str) -> ConversionError:
    return ConversionError(found, where=where, expected=expected, remedy="mend the line")


def _line(text: str, where: str, n_orbitals: tuple[int, int]) -> Line:
    parts = text.split("|")
    if len(parts) != 3 or not parts[0].split():
        raise _bad(where, f"{text[:60]!r}", "coefficients | up orbitals | down orbitals")
    coefficients = []
    for word in parts[0].split():
        try:
            numbers = [float(part.upper().replace("D", "E")) for part in word.split(",")]
            if len(numbers) > 2 or not np.isfinite(numbers).all():
                raise ValueError
        except ValueError:
            raise _bad(where, f"the coefficient {word!r}", "a number, or re,im") from None
        coefficients.append(complex(*numbers))
    up, down = (_orbitals(part, where, n) for part, n in zip(parts[1:], n_orbitals, strict=True))
    return coefficients, up, down


def _orbitals(text: str, where: str, n_orbitals: int) -> tuple[int, ...]:
    orbitals: list[int] = []
    for word in text.replace(",", " ").split():
        if word == "-":
            continue
        first, dash, last = word.partition("-")
        if not first.isdecimal() or (dash and not last.isdecimal()) or (dash and int(last) < int(first)):
            raise _bad(where, f"the orbitals {word!r}", "numbers from 1, or ranges such as 3-7")
        if max(int(first), int(last or 0)) > n_orbitals or int(first) < 1:
            raise _bad(where, f"the orbitals {word!r}", f"1 to {n_orbitals}")
        orbitals += range(int(first) - 1, int(last or first))
    if len(set(orbitals)) < len(orbitals):
        raise _bad(where, f"an orbital twice in {text.strip()!r}", "each once")
    return tuple(orbitals)


def _parity(orbitals: tuple[int, ...]) -> int:
    """Sign of the permutation that sorts them."""
    exchanges = sum(a > b for k, b in enumerate(orbitals) for a in orbitals[:k])
    return -1 if exchanges % 2 else 1


def expansion_of(
    up: NDArray[np.int64], down: NDArray[np.int64], coefficients: NDArray[np.generic], n_orbitals: tuple[int, int],
    sets: tuple[str, str],
) -> Expansion:  # fmt: skip
    """The expansion of E determinants: orbitals (E, n_up) and (E, n_down), ascending, coefficients (states, E)."""
    n_words = max(1, -(-max(n_orbitals) // 64))
    strings, places = [], []
    for occupied in (up, down):
        words = np.zeros((len(occupied), n_words), dtype=np.uint64)
        for column in occupied.T:
            np.bitwise_or.at(
                words, (np.arange(len(occupied)), column // 64), np.uint64(1) << (column % 64).astype(np.uint64)
            )
        order = np.lexsort(words.T)  # the last word decides first
        new = np.ones(len(words), dtype=bool)
        new[1:] = (words[order][1:] != words[order][:-1]).any(axis=1)
        place = np.empty(len(words), dtype=np.int64)
        place[order] = np.cumsum(new) - 1
        strings.append(words[order][new])
        places.append(place)
    order = np.lexsort((places[1], places[0]))
    counts = np.bincount(places[0], minlength=len(strings[0]))
    return Expansion(
        sets[0], sets[1], strings[0], strings[1], np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        places[1][order], np.ascontiguousarray(np.asarray(coefficients)[:, order]),
    )  # fmt: skip


def write_list(expansion: Expansion, n_up: int, n_down: int) -> str:
    """The list of an expansion, to the last digit; `read_list` gives the same expansion again."""
    from qwfx.reference.determinants import occupied

    up = occupied(np.asarray(expansion.up_strings), n_up)
    down = occupied(np.asarray(expansion.down_strings), n_down)
    offsets, columns = np.asarray(expansion.row_start), np.asarray(expansion.columns)
    values = np.asarray(expansion.coefficients)
    rows = np.repeat(np.arange(len(up)), np.diff(offsets))
    lines = []
    for e, (i, j) in enumerate(zip(rows.tolist(), columns.tolist(), strict=True)):
        words = [f"{c.real!r},{c.imag!r}" if isinstance(c, complex) else repr(c) for c in values[:, e].tolist()]
        orbitals = (" ".join(str(p + 1) for p in side) or "-" for side in (up[i].tolist(), down[j].tolist()))
        lines.append(f"{' '.join(words)} | {' | '.join(orbitals)}\n")
    return "".join(lines)
