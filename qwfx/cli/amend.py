"""``qwfx amend``: put Jastrow terms or determinants into a file."""

from __future__ import annotations

from pathlib import Path

import click

from qwfx.cli.options import InputFile, print_notes
from qwfx.cli.progress import progress_line

__all__ = ["command"]


def _sets(_ctx: click.Context, _parameter: click.Parameter, value: str | None) -> tuple[str, str] | None:
    if value is None:
        return None
    up, comma, down = value.partition(",")
    if not comma or not up or not down:
        raise click.BadParameter(f"{value!r} is not of the form UP,DOWN")
    return up.strip(), down.strip()


@click.command("amend")
@click.argument("file", type=InputFile)
@click.option("--jastrow", type=InputFile, metavar="TERMS.toml", help="Jastrow terms: a table for each.")
@click.option("--start-jastrow", is_flag=True, help="Electron-electron terms that fulfil the cusp conditions.")
@click.option("--determinants", type=InputFile, metavar="LIST", help="An expansion: a line for each determinant.")
@click.option("--sets", callback=_sets, metavar="UP,DOWN", help="Orbital sets that the list of determinants counts.")
@click.option("--replace", "replacing", is_flag=True, help="Replace terms, or an expansion, that are there.")
@click.option("--output", type=InputFile, help="Write to another file, and leave FILE as it is.")
@click.option("--force", is_flag=True, help="Replace the output if it exists.")
def command(
    file: Path, jastrow: Path | None, start_jastrow: bool, determinants: Path | None, sets: tuple[str, str] | None,
    replacing: bool, output: Path | None, force: bool,
) -> None:  # fmt: skip
    """Put Jastrow terms or determinants into FILE.

    They are checked first; FILE is changed as a whole or not at all, and says in its provenance what was done.
    """
    from qwfx.amend import amend
    from qwfx.errors import FileError

    if output is not None and output.exists() and not force:
        raise FileError(
            "already exists", where=str(output), expected="a name that is free",
            remedy="choose another name, or replace the file with --force",
        )  # fmt: skip
    with progress_line() as progress:
        done = amend(
            file, output or file, jastrow=jastrow, start_jastrow=start_jastrow, determinants=determinants, sets=sets,
            replacing=replacing, progress=progress,
        )  # fmt: skip
    click.echo(f"{file} -> {output}:" if output else f"{file}:")
    print_notes(done.notes)
