"""``qwfx validate``: are these files right?"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import click

from qwfx.cli.options import InputFile
from qwfx.cli.progress import progress_line
from qwfx.findings import ExitCode

__all__ = ["command"]


@click.command("validate")
@click.argument("files", type=InputFile, nargs=-1, required=True)
@click.option(
    "--purpose", type=click.Choice(["auto", "orbitals", "trial", "hamiltonian"]), default="auto", show_default=True,
    help="What the file is to be used for; auto: what its members allow.",
)  # fmt: skip
@click.option("--rule", "rules", multiple=True, metavar="NAME", help="Run this rule or tier only; may be repeated.")
@click.option("--skip", "skip", multiple=True, metavar="NAME", help="Leave this rule or tier out; may be repeated.")
@click.option("--format", "form", type=click.Choice(["text", "json", "sarif"]), default="text", show_default=True)
@click.option("--verbose", is_flag=True, help="List every rule, with what it measured.")
def command(
    files: tuple[Path, ...], purpose: str, rules: tuple[str, ...], skip: tuple[str, ...], form: str, verbose: bool
) -> None:
    """Check FILES and report what was run, skipped, not evaluated, and found.

    Exit code 0: valid; 1: findings of severity error; 2: could not be checked. `qwfx explain RULE` tells more about a
    finding.
    """
    from qwfx.report import render_text, to_json, to_sarif
    from qwfx.validate import validate

    reports = []
    with progress_line() as progress:
        for file in files:
            reports.append(
                validate(file, purpose=purpose, rules=list(rules) or None, skip=skip, progress=progress)
            )
    if form == "json":
        click.echo(json.dumps(to_json(reports), indent=2, ensure_ascii=False))
    elif form == "sarif":
        click.echo(json.dumps(to_sarif(reports), indent=2, ensure_ascii=False))
    else:
        render_text(reports, verbose=verbose)
    worst = max((report.exit_code for report in reports), default=ExitCode.OK)
    sys.exit(int(worst))
