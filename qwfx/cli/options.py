"""Options that several verbs share."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, TypeVar

import click

__all__ = ["InputFile", "as_option", "print_notes", "set_option", "settings"]

F = TypeVar("F", bound=Callable[..., Any])

# Existence is checked where the file is opened, so that every verb says it with the same words and exit code.
InputFile = click.Path(path_type=Path)


def as_option(function: F) -> F:
    """``--as FORMAT``: the format of the source."""
    return click.option(
        "--as", "source_format", metavar="FORMAT", help="Format of the source, where the content does not tell."
    )(function)


def set_option(function: F) -> F:
    """``--set NAME=VALUE`` and ``--reading NAME``: options of the converter."""
    function = click.option(
        "--set", "assignments", metavar="NAME=VALUE", multiple=True, help="An option of the converter; may be repeated."
    )(function)
    return click.option(
        "--reading", metavar="NAME", help="How a Molden file normalises its functions, where it does not tell."
    )(function)


def settings(assignments: tuple[str, ...], reading: str | None) -> dict[str, str]:
    """The options as a mapping. Raises click.BadParameter for one without ``=`` or given twice."""
    options: dict[str, str] = {}
    for assignment in assignments + ((f"reading={reading}",) if reading else ()):
        name, equals, value = assignment.partition("=")
        if not equals or not name:
            raise click.BadParameter(f"{assignment!r} is not of the form NAME=VALUE", param_hint="--set")
        if name in options:
            raise click.BadParameter(f"the option {name} is given twice", param_hint="--set")
        options[name.strip()] = value.strip()
    return options


def print_notes(notes: tuple[str, ...], prefix: str = "  - ") -> None:
    """Each note on lines of its own."""
    import textwrap

    for note in notes:
        click.echo(textwrap.fill(note, 100, initial_indent=prefix, subsequent_indent=" " * len(prefix)))
