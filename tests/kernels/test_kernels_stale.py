"""Compiled code of a kernel that calls a changed one is forgotten."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

CALLEE = "from numba import njit\n\n@njit(cache=True)\ndef one():\n    return {}\n"
CALLER = "from callee import one\nfrom numba import njit\n\n@njit(cache=True)\ndef twice():\n    return 2 * one()\n"
RUN = """
import sys
sys.path.insert(0, {folder!r})
from pathlib import Path
import caller
from qwfx.kernels.stale import forget_stale
forgotten = forget_stale(caller.twice, Path({folder!r})) if {forget} else None
print(caller.twice(), forgotten)
"""


def run(folder: Path, forget: bool) -> list[str]:
    environment = {k: v for k, v in os.environ.items() if k != "NUMBA_CACHE_DIR"}
    code = RUN.format(folder=str(folder), forget=forget)
    done = subprocess.run(
        [sys.executable, "-B", "-c", code], capture_output=True, text=True, check=True, env=environment
    )
    return done.stdout.split()


def test_changed_kernels_are_compiled_anew(tmp_path: Path) -> None:
    (tmp_path / "callee.py").write_text(CALLEE.format(1))
    (tmp_path / "caller.py").write_text(CALLER)
    assert run(tmp_path, True) == ["2", "False"]  # nothing was kept yet
    assert run(tmp_path, True) == ["2", "False"]  # what is kept is sound
    (tmp_path / "callee.py").write_text(CALLEE.format(21))
    assert run(tmp_path, True) == ["42", "True"]
    assert run(tmp_path, True) == ["42", "False"]
