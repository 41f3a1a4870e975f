"""``qwfx convert``: from one format to another."""

from __future__ import annotations

from pathlib import Path

import click

from qwfx.cli.options import InputFile, as_option, print_notes, set_option, settings
from qwfx.cli.progress import progress_line

__all__ = ["command"]


def _print_formats(ctx: click.Context, _parameter: click.Parameter, wanted: bool) -> None:
    if not wanted or ctx.resilient_parsing:
        return
    from qwfx.converters.registry import available

    found, failed = available()
    click.echo("qwfx       .qwfx file: read and written")
    for converter in found.values():
        click.echo(f"{converter.name:10} {converter.title} ({', '.join(converter.suffixes)})")
        for option in converter.options:
            values = f" [{'|'.join(option.choices)}]" if option.choices else ""
            print_notes((f"--set {option.name}=...{values}: {option.help}",), prefix="             ")
    for name, reason in failed.items():
        click.echo(f"{name:10} could not be loaded: {reason}")
    ctx.exit()


@click.command("convert")
@click.argument("source", type=InputFile)
@click.argument("target", type=InputFile)
@as_option
@click.option("--to", "target_format", metavar="FORMAT", help="Format of the target, where its ending does not tell.")
@set_option
@click.option("--force", is_flag=True, help="Replace the target if it exists.")
@click.option("--quiet", is_flag=True, help="Say nothing unless something goes wrong.")
@click.option(
    "--formats", is_flag=True, is_eager=True, expose_value=False, callback=_print_formats,
    help="List the formats and their options, and exit.",
)  # fmt: skip
def command(
    source: Path,
    target: Path,
    source_format: str | None,
    target_format: str | None,
    assignments: tuple[str, ...],
    reading: str | None,
    force: bool,
    quiet: bool,
) -> None:
    """Convert SOURCE to TARGET.

    The format of SOURCE is recognised by its content, that of TARGET by its ending (.qwfx, .molden, .fcidump, .chk).
    TARGET appears whole or not at all.
    """
    from qwfx.conversion import convert

    options = settings(assignments, reading)
    with progress_line() as progress:
        done = convert(
            source,
            target,
            source_format=source_format,
            target_format=target_format,
            options=options,
            overwrite=force,
            progress=progress,
        )
    if quiet:
        return
    click.echo(f"{source} ({done.source_format}) -> {target} ({done.target_format})")
    if done.reading_notes:
        click.echo("reading:")
        print_notes(done.reading_notes)
    if done.writing_notes:
        click.echo("writing:")
        print_notes(done.writing_notes)
