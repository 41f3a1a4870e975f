"""``qwfx outline``: the tree of a file as JSON."""

from __future__ import annotations

import json
from pathlib import Path

import click

from qwfx.cli.options import InputFile

__all__ = ["command"]


@click.command("outline")
@click.argument("file", type=InputFile, required=False)
@click.option("--schema", metavar="NAME", help="Print a schema instead: qwfx-1.0, report, or a Jastrow form.")
def command(file: Path | None, schema: str | None) -> None:
    """Print the outline of FILE: kind, type, shape and attributes of every member, as JSON.

    The outline is what the JSON Schema of the format describes, so that the structural check can be run with any
    JSON Schema implementation.
    """
    if (file is None) == (schema is None):
        raise click.UsageError("give either FILE or --schema NAME")
    if schema is not None:
        from qwfx.schema_check import load_schema

        click.echo(json.dumps(load_schema(schema), indent=2, ensure_ascii=False))
        return
    from qwfx.storage import outline

    assert file is not None
    click.echo(json.dumps(outline(file), indent=2, ensure_ascii=False))
