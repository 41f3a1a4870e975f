"""``qwfx demo``: the main job on built-in data."""

from __future__ import annotations

import sys
from pathlib import Path

import click

from qwfx.findings import ExitCode

__all__ = ["command"]


@click.command("demo")
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False), default=Path("qwfx-demo"))
def command(folder: Path) -> None:
    """Compute, convert, validate, round-trip and break small molecules; the files stay in FOLDER (qwfx-demo).

    Exit code 0 if everything came out as it should, the broken copy being caught included.
    """
    from qwfx.cli.progress import announce_compilation
    from qwfx.demo import run_demo
    from qwfx.report import render_text

    announce_compilation()
    click.echo("Samples of sea spray from the buoy off Port Ansel: three molecules, one file each.")
    good, report = run_demo(folder, click.echo)
    click.echo()
    render_text([report])
    click.echo(f"\nThe files are in {folder}. Look at one with `qwfx show {folder / 'water.qwfx'}`.")
    click.echo("everything came out as it should" if good else "SOMETHING DID NOT COME OUT AS IT SHOULD")
    sys.exit(ExitCode.OK if good else ExitCode.FINDINGS)
