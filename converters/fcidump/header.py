"""The namelist at the top of an FCIDUMP file, in the spellings met in practice."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from qwfx.errors import ConversionError, UnsupportedError

__all__ = ["LARGEST", "LONGEST", "OPENING", "Header", "read_header"]

OPENING = re.compile(rb"(?:\xef\xbb\xbf)?(?:\s|[!#][^\n]*\n)*[&$]FCI\b", re.IGNORECASE)
"""A byte order mark, blank lines and comments, then the name of the namelist."""
CLOSING = re.compile(rb"[&$]END\b|/|^\s*[&$]\s*$", re.IGNORECASE | re.MULTILINE)
ASIDE = re.compile(rb"'[^'\n]*'|\"[^\"\n]*\"|![^\n]*")
"""What says nothing of the namelist's form: quoted text, which may hold any sign, and comments."""
KEY = re.compile(r"([A-Za-z_]\w*)\s*(?:\(\s*\d+\s*\))?\s*=")
WHOLE = re.compile(r"(?:(\d{1,6})\*)?([+-]?\d{1,9})")
LARGEST = 4096
"""Most orbitals: one-electron matrices are stored in full, and positions of integrals must fit 64 bits."""
KNOWN = {"NORB", "NELEC", "MS2", "ORBSYM", "ISYM", "UHF", "IUHF"}
TRUE, FALSE = re.compile(r"\.?T(RUE)?\.?$", re.IGNORECASE), re.compile(r"\.?F(ALSE)?\.?$", re.IGNORECASE)
LONGEST = 1 << 22
"""A namelist of more bytes than this is none (a thousand orbitals take a few kilobytes)."""


@dataclass(frozen=True)
class Header:
    """What the namelist says."""

    n_orbitals: int
    n_electrons: int
    ms2: int | None
    orbital_symmetry: tuple[int, ...]
    """As written; empty if there is none."""
    state_symmetry: int | None
    """As written."""
    spin_resolved: bool
    extra: Mapping[str, str] = field(default_factory=dict)
    """Other keys, as text."""
    end: int = 0
    """Offset of the first byte behind the namelist."""
    lines: Mapping[str, int] = field(default_factory=dict)
    """Line of the file on which each key stands."""

    def flag(self, key: str) -> bool:
        """Whether a logical key is there and true."""
        return TRUE.match(self.extra.get(key, "")) is not None

    def line_of(self, key: str) -> int:
        """The line of a key, or of the beginning of the namelist."""
        return self.lines.get(key, self.lines[""])


def _error(where: str, found: str, expected: str, remedy: str = "") -> ConversionError:
    return ConversionError(found, where=where, expected=expected, remedy=remedy or "mend the namelist")


def read_header(text: bytes, name: str) -> Header:
    """Parse the namelist at the start of `text`. Raises ConversionError with file and line."""
    opening = OPENING.match(text)
    if opening is None:
        raise _error(f"{name}:1", "the file does not begin with &FCI", "a namelist &FCI ... &END", "check the file")
    # Offsets stay as they are: of `bare` comments are blanked out, of `form` quoted text as well.
    bare = ASIDE.sub(lambda m: b" " * len(m.group()) if m.group()[:1] == b"!" else m.group(), text[:LONGEST])
    form = ASIDE.sub(lambda m: (b" " if m.group()[:1] == b"!" else b"_") * len(m.group()), text[:LONGEST])
    closing = CLOSING.search(form, opening.end())
    first_line = text.count(b"\n", 0, opening.end()) + 1
    if closing is None:
        raise _error(f"{name}:{first_line}", "the namelist &FCI is not closed", "&END, $END or / after the last key")
    body = bare[opening.end() : closing.start()].decode("latin-1")
    keys = _keys(body, form[opening.end() : closing.start()].decode("latin-1"), name, first_line)

    def line_of(key: str) -> str:
        return f"{name}:{first_line + body[: keys[key][1]].count(chr(10))}"

    def integer(key: str, default: int | None = None) -> int | None:
        if key not in keys:
            return default
        values = _integers(keys[key][0], key, line_of(key))
        if len(values) != 1:
            raise _error(line_of(key), f"{key} has {len(values)} values", "one")
        return values[0]

    counts = {}
    for key in ("NORB", "NELEC"):
        value = integer(key)
        if value is None:
            raise _error(f"{name}:{first_line}", f"the namelist has no {key}", "NORB and NELEC")
        if value < (1 if key == "NORB" else 0):
            raise _error(line_of(key), f"{key} is {value}", "a positive number")
        counts[key] = value
    if counts["NORB"] > 2 * LARGEST:
        raise UnsupportedError(
            f"NORB is {counts['NORB']}",
            where=line_of("NORB"),
            expected=f"at most {LARGEST} orbitals",
            remedy="mend NORB, or leave out orbitals",
        )
    flags = [_flag(keys[key][0], key, line_of(key)) for key in ("UHF", "IUHF") if key in keys]
    symmetry = tuple(_integers(keys["ORBSYM"][0], "ORBSYM", line_of("ORBSYM"))) if "ORBSYM" in keys else ()
    return Header(
        counts["NORB"],
        counts["NELEC"],
        integer("MS2"),
        symmetry,
        integer("ISYM"),
        any(flags),
        {key: " ".join(value.strip(" \t\r\n,").split()) for key, (value, _) in keys.items() if key not in KNOWN},
        _behind(bare, closing.end()),
        {"": first_line} | {key: first_line + body.count("\n", 0, offset) for key, (_, offset) in keys.items()},
    )


def _behind(bare: bytes, position: int) -> int:
    """The end of the line on which the namelist is closed, if nothing but blanks follow there."""
    end = bare.find(b"\n", position)
    rest = bare[position : end if end >= 0 else len(bare)]
    return position + len(rest) if not rest.strip() else position


def _keys(body: str, form: str, name: str, first_line: int) -> dict[str, tuple[str, int]]:
    """Key in capitals -> (text of its values, offset); `form` is `body` without quoted text.

    A key of ours without a value (``MS2=,``) counts as absent, as in a namelist of Fortran.
    """
    found = list(KEY.finditer(form))
    before = body[: found[0].start()] if found else body
    if before.strip(" \t\r\n,"):
        line = first_line + before.count("\n")
        raise _error(f"{name}:{line}", f"{before.strip()[:40]!r} stands before the first key", "KEY=value, ...")
    keys: dict[str, tuple[str, int]] = {}
    for match, following in zip(found, [*found[1:], None][: len(found)], strict=True):
        key = match.group(1).upper()
        if key in keys:
            line = first_line + body.count("\n", 0, match.start())
            raise _error(f"{name}:{line}", f"{key} is given twice", "each key once")
        keys[key] = body[match.end() : following.start() if following else len(body)], match.start()
    return {key: item for key, item in keys.items() if key not in KNOWN or item[0].strip(" \t\r\n,")}


def _integers(text: str, key: str, where: str) -> list[int]:
    """Integers separated by commas or blanks, with repeat counts such as ``8*1``."""
    values: list[int] = []
    for token in re.split(r"[,\s]+", text.strip(" \t\r\n,")):
        parts = WHOLE.fullmatch(token)
        if parts is None:
            raise _error(where, f"{key} has the value {token[:40]!r}", "whole numbers")
        values += [int(parts.group(2))] * int(parts.group(1) or 1)
        if len(values) > 2 * LARGEST:
            raise _error(where, f"{key} has more than {2 * LARGEST} values", "one for each orbital")
    return values


def _flag(text: str, key: str, where: str) -> bool:
    word = text.strip(" \t\r\n,")
    if TRUE.match(word) or word == "1":
        return True
    if FALSE.match(word) or word == "0":
        return False
    raise _error(where, f"{key} is {word!r}", ".TRUE. or .FALSE.")
