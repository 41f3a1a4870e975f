"""``qwfx diff``: two files, member by member."""

from __future__ import annotations

import json
import sys
from dataclasses import asdict
from pathlib import Path

import click

from qwfx.cli.options import InputFile
from qwfx.findings import ExitCode

__all__ = ["command"]


@click.command("diff")
@click.argument("first", type=InputFile)
@click.argument("second", type=InputFile)
@click.option("--absolute", type=click.FloatRange(min=0), default=0.0, show_default=True, help="Allowed difference.")
@click.option(
    "--relative", type=click.FloatRange(min=0), default=0.0, show_default=True,
    help="Allowed difference in units of the larger of the two numbers.",
)  # fmt: skip
@click.option("--everything", is_flag=True, help="Compare provenance and digests too.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(first: Path, second: Path, absolute: float, relative: float, everything: bool, form: str) -> None:
    """Compare the members of two .qwfx files.

    Exit code 0: the same within the tolerances; 1: different; 2: could not be compared. This compares numbers as they
    are stored: two files of the same physics with other signs or another order of orbitals are different here.
    """
    from qwfx.compare.members import compare_files

    result = compare_files(first, second, absolute=absolute, relative=relative, everything=everything)
    if form == "json":
        report = {"first": str(first), "second": str(second), "same": result.same, **asdict(result)}
        click.echo(json.dumps(report, indent=2))
        sys.exit(ExitCode.OK if result.same else ExitCode.FINDINGS)
    for d in result.differences:
        click.echo(f"{d.path}: {d.kind}")
        click.echo(f"  first:  {d.first}")
        click.echo(f"  second: {d.second}")
        if d.n_different:
            size = f", largest difference {d.largest:.3g}" if d.largest is not None else ""
            click.echo(f"  {d.n_different} element{'s' if d.n_different > 1 else ''} differ{size}")
    verdict = "different" if result.differences else "same"
    noun = "difference" if len(result.differences) == 1 else "differences"
    click.echo(
        f"{verdict}: {len(result.differences)} {noun}; {result.n_same} members agree, "
        f"{result.n_identical} of them to the bit"
        + (f"; not compared: {', '.join(result.left_out)} (--everything compares them)" if result.left_out else "")
    )
    sys.exit(ExitCode.OK if result.same else ExitCode.FINDINGS)
