"""The light verbs stay light: what they must not import, rather than how long they take."""

from __future__ import annotations

import subprocess
import sys

import pytest

HEAVY = ("numba", "pyscf", "scipy", "jsonschema", "matplotlib")


def imported_by(*arguments: str) -> set[str]:
    code = (
        "import sys\n"
        "from qwfx.cli import main\n"
        "try:\n"
        f"    main({list(arguments)!r})\n"
        "except SystemExit as stop:\n"
        "    assert not stop.code, stop.code\n"
        "print('modules:', ' '.join(m for m in sys.modules if '.' not in m))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(done.stdout.rsplit("modules:", 1)[1].split())


def test_help_imports_nothing_heavy() -> None:
    assert imported_by("--help").isdisjoint((*HEAVY, "h5py", "numpy", "rich"))


@pytest.mark.parametrize("verb", ["show"])
def test_show_imports_neither_pyscf_nor_numba(verb: str, small_file: str) -> None:
    assert imported_by(verb, small_file).isdisjoint(HEAVY)
