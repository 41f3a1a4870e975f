"""The README shows what really happens: its blocks are run, in order, in one folder."""

from __future__ import annotations

from pathlib import Path

import pytest
from documentation import blocks, run_block

README = Path(__file__).parents[1] / "README.md"


def test_readme_blocks(tmp_path: Path) -> None:
    found = list(blocks(README))
    assert len(found) >= 5
    for block in found:
        if any("pytest" in command or "pip install" in command for command, _ in block.commands):
            continue  # the commands that set up the environment this test runs in, and that run this test
        run_block(block, tmp_path)


def test_the_runner_notices_a_difference(tmp_path: Path) -> None:
    page = tmp_path / "page.md"
    text = "```console\n$ echo one two\none ...\n$ echo three\nfour\n```\n\n```python\nassert 1 + 1 == 3\n```\n"
    page.write_text(text)
    console, python = blocks(page)
    with pytest.raises(AssertionError, match="four"):
        run_block(console, tmp_path)
    with pytest.raises(AssertionError, match="1 \\+ 1 == 3"):
        run_block(python, tmp_path)
