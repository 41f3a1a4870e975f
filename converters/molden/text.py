"""A Molden file as text: its sections, their lines, the numbers in them, and errors that tell the place."""

from __future__ import annotations

import hashlib
import mmap
import re
from collections.abc import Iterator
from dataclasses import dataclass
from math import isfinite
from pathlib import Path
from typing import TypeAlias

from qwfx.errors import ConversionError, FileError

__all__ = ["Section", "Text", "bad", "integer", "lines", "number", "open_text", "sha256", "split_sections"]

HEADING = re.compile(rb"[ \t]*\[([^\]\n]+)\][ \t]*([^\n]*)")
Text: TypeAlias = bytes | mmap.mmap
MAPPED_ABOVE = PIECE = 1 << 20
LARGEST = 1e12
"""Of any number but a charge or a power, so that no formula overflows."""


@dataclass(frozen=True)
class Section:
    name: str
    argument: str
    start: int
    end: int
    line: int
    """Line of the heading, from 1."""


def bad(name: str, line: int, found: str, expected: str, remedy: str = "mend the line") -> ConversionError:
    """An error at a line of a file."""
    return ConversionError(found, where=f"{name}:{line}", expected=expected, remedy=remedy)


def number(token: str, name: str, line: int, what: str) -> float:
    """A number, with D or E or no letter before the exponent; finite."""
    text = token.upper().replace("D", "E")
    try:
        value = float(text)
    except ValueError:
        match = re.fullmatch(r"([+-]?[\d.]+)([+-]\d+)", text)
        if match is None:
            raise bad(name, line, f"{what} is {token!r}", "a number") from None
        value = float(f"{match.group(1)}E{match.group(2)}")
    if not isfinite(value) or abs(value) > LARGEST:
        raise bad(name, line, f"{what} is {token!r}", f"a number of a magnitude below {LARGEST:.0e}")
    return value


def integer(token: str, name: str, line: int, what: str) -> int:
    """A whole number."""
    if not re.fullmatch(r"[+-]?[0-9]{1,9}", token):
        raise bad(name, line, f"{what} is {token!r}", "a whole number")
    return int(token)


def open_text(path: Path) -> Text:
    """The bytes of a file; those of a large one stay on the disk, so that they are not held beside the numbers."""
    try:
        with open(path, "rb") as stream:
            if stream.seek(0, 2) > MAPPED_ABOVE:
                text: Text = mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ)
            else:
                stream.seek(0)
                text = stream.read()
    except OSError as error:
        raise FileError(
            f"cannot be read ({error.strerror or error})",
            where=str(path),
            expected="a readable file",
            remedy="check the path and the permissions",
        ) from None
    if text.find(b"\n") < 0 <= text.find(b"\r"):
        return text[:].replace(b"\r", b"\n")  # lines that end with a carriage return alone
    return text


def _find_headings(text: Text) -> Iterator[re.Match[bytes]]:
    """Headings in order: every bracket that begins a line (looked for first, since files are long and these few)."""
    at = text.find(b"[")
    while at >= 0:
        match = HEADING.match(text, text.rfind(b"\n", 0, at) + 1)
        if match is not None and match.start(1) == at + 1:
            yield match
        at = text.find(b"[", at + 1)


def _count_lines(text: Text, start: int, end: int) -> int:
    """Line ends between two offsets."""
    return sum(text[k : min(k + PIECE, end)].count(b"\n") for k in range(start, end, PIECE))


def split_sections(text: Text) -> list[Section]:
    found = list(_find_headings(text))
    ends = [m.start() for m in found[1:]] + [len(text)] * bool(found)
    sections, line, seen = [], 1, 0
    for match, end in zip(found, ends, strict=True):
        line += _count_lines(text, seen, match.start(1))
        seen = match.start(1)
        heading = " ".join(match.group(1).decode("latin-1").lower().split())
        sections.append(Section(heading, match.group(2).decode("latin-1").strip(), match.end(), end, line))
    return sections


def lines(text: Text, section: Section) -> list[tuple[int, list[str]]]:
    """(line number, tokens) of the lines of a section that are neither blank nor comments."""
    rows = text[section.start : section.end].decode("latin-1").split("\n")
    # The text begins behind the heading: its rest of the line is row 0.
    split = ((section.line + k, row.split()) for k, row in enumerate(rows) if k)
    return [(line, tokens) for line, tokens in split if tokens and not tokens[0].startswith("#")]


def sha256(text: Text) -> str:
    digest = hashlib.sha256()
    for start in range(0, len(text), PIECE):
        digest.update(text[start : start + PIECE])
    return digest.hexdigest()
