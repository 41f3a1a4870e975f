"""``qwfx show``: what is in a file, at a glance."""

from __future__ import annotations

import json
from pathlib import Path

import click

from qwfx.cli.options import InputFile

__all__ = ["command"]

DIGEST_SHOWN = 12


def _size(n_bytes: int) -> str:
    size = float(n_bytes)
    for unit in ("bytes", "KiB", "MiB", "GiB"):
        if size < 1024 or unit == "GiB":
            return f"{size:.0f} {unit}" if unit == "bytes" else f"{size:.1f} {unit}"
        size /= 1024
    raise AssertionError


@click.command("show")
@click.argument("files", type=InputFile, nargs=-1, required=True)
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(files: tuple[Path, ...], form: str) -> None:
    """Print what is in FILES, with the content digest in short.

    The digest is the stored one; `qwfx validate` checks that it holds.
    """
    import textwrap

    from qwfx.storage import load, open_raw
    from qwfx.summary import summarise

    documents = []
    for number, file in enumerate(files):
        with open_raw(file) as raw:
            root = raw.attributes("/")
            size = raw.path.stat().st_size
        wavefunction = load(file)
        lines = summarise(wavefunction)
        digest = str(root.get("content_digest", ""))
        if form == "json":
            documents.append({
                "file": str(file), "version": str(root.get("version", "")), "bytes": size, "content_digest": digest,
                "lines": [list(line) for line in lines],
            })  # fmt: skip
            continue
        if number:
            click.echo()
        click.echo(click.style(str(file), bold=True) + f": {root.get('format')} {root.get('version')}, {_size(size)}")
        rows = [*lines, ("content", digest[:DIGEST_SHOWN] if digest else "no digest in the file")]
        width = max(len(head) for head, _ in rows) + 2
        for head, text in rows:
            click.echo(
                textwrap.fill(text, 100, initial_indent=f"  {head:{width}}", subsequent_indent=" " * (width + 2))
            )
    if form == "json":
        click.echo(json.dumps(documents, indent=2, ensure_ascii=False))
