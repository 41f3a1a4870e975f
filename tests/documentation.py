"""Run the code blocks of a Markdown file, in order and in one folder, and compare what they print.

A ``console`` block holds commands (``$ `` in front) and their output; a ``python`` block is run as it is. ``...`` in an
expected output stands for anything. Blocks of other kinds are not run.
"""

from __future__ import annotations

import doctest
import os
import re
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

__all__ = ["Block", "blocks", "run_block"]


@dataclass
class Block:
    """One fenced block."""

    kind: str
    line: int
    text: str
    commands: list[tuple[str, str]] = field(default_factory=list)
    """(command, expected output) of a console block."""


def blocks(path: Path) -> Iterator[Block]:
    """The fenced blocks of `path` that are to be run."""
    text = path.read_text("utf-8")
    for match in re.finditer(r"^```(\w+)\n(.*?)^```$", text, re.MULTILINE | re.DOTALL):
        kind, body = match.group(1), match.group(2)
        line = text.count("\n", 0, match.start()) + 1
        block = Block(kind, line, body)
        if kind == "console":
            for part in re.split(r"^\$ ", body, flags=re.MULTILINE)[1:]:
                command, _, output = part.partition("\n")
                block.commands.append((command, output))
        if kind in ("console", "python"):
            yield block


def run_block(block: Block, folder: Path) -> None:
    """Run one block in `folder`; an AssertionError shows expected and real output."""
    environment = dict(os.environ, PATH=f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}", COLUMNS="100")
    if block.kind == "python":
        done = subprocess.run(
            [sys.executable, "-W", "error", "-c", block.text],
            cwd=folder,
            env=environment,
            capture_output=True,
            text=True,
        )
        assert done.returncode == 0, f"line {block.line}:\n{block.text}\n{done.stderr}"
        return
    checker = doctest.OutputChecker()
    for command, expected in block.commands:
        done = subprocess.run(
            ["bash", "-c", command],
            cwd=folder,
            env=environment,
            capture_output=True,
            text=True,
            stdin=subprocess.DEVNULL,
        )
        found = done.stdout + done.stderr
        options = doctest.ELLIPSIS | doctest.NORMALIZE_WHITESPACE
        assert checker.check_output(expected, found, options), (
            f"line {block.line}: $ {command}\n--- expected\n{expected}\n--- found\n{found}"
        )
