"""Jastrow terms from a TOML file."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import numpy as np

from qwfx.errors import ConversionError, FileError
from qwfx.model import JastrowTerm

if sys.version_info >= (3, 11):
    import tomllib
else:
    import tomli as tomllib

__all__ = ["read_terms"]

INTEGERS = ("atoms", "powers")


def read_terms(path: Path) -> dict[str, JastrowTerm]:
    """The terms of a TOML file: a table for each, its name is that of the term.

    ``form`` names the form, other single values are attributes, arrays are members, as the schema of the form has
    them. Raises FileError, or ConversionError for what is no TOML or no table of numbers and words; whether a form has
    such members is not looked at here.
    """
    try:
        tables = tomllib.loads(path.read_bytes().decode("utf-8"))
    except OSError as error:
        raise FileError(
            f"cannot be read ({error.strerror or error})", where=str(path), expected="a readable file",
            remedy="check the path and the permissions",
        ) from None  # fmt: skip
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise ConversionError(
            f"is no TOML: {error}", where=str(path), expected="a table for each term", remedy="mend the line"
        ) from None
    if not tables:
        raise ConversionError(
            "there are no terms", where=str(path), expected="a table for each term, such as [pairs]", remedy="write one"
        )
    return {name: _term(table, f"{path}: [{name}]") for name, table in tables.items()}


def _term(table: Any, where: str) -> JastrowTerm:
    if not isinstance(table, dict) or not isinstance(table.get("form"), str):
        raise ConversionError(
            f"{table!r:.60}" if not isinstance(table, dict) else f"form is {table.get('form')!r}",
            where=where,
            expected='a table with form = "..."',
            remedy="see FORMAT.md, section 7",
        )
    attributes = {k: v for k, v in table.items() if k != "form" and not isinstance(v, list)}
    members = {k: _array(k, v, f"{where} {k}") for k, v in table.items() if isinstance(v, list)}
    for key, value in attributes.items():
        if isinstance(value, bool) or not isinstance(value, str | int | float):
            raise ConversionError(f"{value!r:.60}", where=f"{where} {key}", expected="a number, a word or an array")
    return JastrowTerm(str(table["form"]), attributes, members)


def _array(name: str, value: list[Any], where: str) -> Any:
    try:
        array = np.array(value)
    except ValueError:  # rows of different lengths
        array = np.array(None)
    expected = "whole numbers" if name in INTEGERS else "words" if name == "channel" else "numbers"
    kinds = {"whole numbers": "i", "words": "U", "numbers": "if"}[expected]
    if array.dtype.kind not in kinds:
        raise ConversionError(
            f"{value!r:.60}", where=where, expected=f"{expected}, rows of one length", remedy="mend the array"
        )
    return array if kinds == "U" else array.astype(np.int32 if kinds == "i" else np.float64)
