"""The house keeps its order: imports go down only, and no room prints but the command line."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

TOP = Path(__file__).parents[1]

# Floor of each room, from the ground up; a module may import from its own room and from lower floors.
FLOORS = [
    {"_version", "errors", "findings"},
    {"atomic"},
    {"elements", "model", "points"},
    {"reference", "schema", "schema_check", "storage"},
    {"kernels"},
    {"trial"},
    {"rules"},
    {"occupation_lines", "jastrow_terms"},
    {"converters"},
    {"amend", "conversion", "report", "summary", "validate"},
    {"compare"},
    {"demo"},
    {"cli"},
    {"__main__"},
]
FLOOR_OF = {room: level for level, rooms in enumerate(FLOORS) for room in rooms}
PEERS_ALLOWED = {
    ("storage", "schema_check"): False,
    ("schema_check", "schema"): True,
}
HDF5_ONLY_IN = "storage"
LONGEST = 400
LONGER_FOR_A_REASON: dict[str, str] = {}


def modules() -> Iterator[tuple[str, str, Path]]:
    """(room, module name, path) of every module of the package."""
    for root, prefix in ((TOP / "qwfx", ()), (TOP / "converters", ("converters",)), (TOP / "schema", ("schema",))):
        for path in sorted(root.rglob("*.py")):
            parts = prefix + path.relative_to(root).with_suffix("").parts
            room = parts[0] if parts[0] != "__init__" else "qwfx"
            yield room, ".".join(parts), path


MODULES = list(modules())


def imported_rooms(path: Path) -> Iterator[tuple[str, int]]:
    """(room, line) of every import of the package's own modules, those inside functions too."""
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        names: list[str] = []
        if isinstance(node, ast.Import):
            names = [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module:
            names = [node.module] if node.module != "qwfx" else [f"qwfx.{alias.name}" for alias in node.names]
        for name in names:
            if name.startswith("qwfx."):
                yield name.split(".")[1], node.lineno


@pytest.mark.parametrize(("room", "name", "path"), MODULES, ids=[m[1] for m in MODULES])
def test_arrows_go_down_only(room: str, name: str, path: Path) -> None:
    if room == "qwfx":  # the front door re-exports lazily
        return
    assert room in FLOOR_OF, f"the room {room} is not on the plan: give it a floor in FLOORS"
    for target, line in imported_rooms(path):
        if target == room or target in {"load", "save", "__version__"}:
            continue
        assert target in FLOOR_OF, f"{path}:{line} imports the unknown room {target}"
        peers = FLOOR_OF[target] == FLOOR_OF[room] and PEERS_ALLOWED.get((room, target), False)
        assert FLOOR_OF[target] < FLOOR_OF[room] or peers, f"{path}:{line}: {room} must not import {target}"


def test_converters_do_not_know_storage() -> None:
    for room, _, path in MODULES:
        if room == "converters":
            assert "storage" not in {target for target, _ in imported_rooms(path)}, path


@pytest.mark.parametrize(("room", "name", "path"), MODULES, ids=[m[1] for m in MODULES])
def test_only_storage_imports_h5py_and_only_the_command_line_prints(room: str, name: str, path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        imports = [a.name for a in node.names] if isinstance(node, ast.Import) else []
        imports += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
        if any(i == "h5py" or i.startswith("h5py.") for i in imports):
            assert room == HDF5_ONLY_IN, f"{path}:{node.lineno} imports h5py"
        called = node.func.id if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) else ""
        if called == "print":
            assert room == "cli", f"{path}:{node.lineno} prints"


@pytest.mark.parametrize(("room", "name", "path"), MODULES, ids=[m[1] for m in MODULES])
def test_modules_stay_short(room: str, name: str, path: Path) -> None:
    lines = len(path.read_text("utf-8").splitlines())
    assert lines <= LONGEST or name in LONGER_FOR_A_REASON, f"{path} has {lines} lines: split it, or give the reason"


def test_every_room_goes_into_the_wheel() -> None:
    """An editable installation finds a room that is not listed, the wheel does not."""
    listed = (TOP / "pyproject.toml").read_text("utf-8").partition("packages = [")[2].partition("]")[0]
    rooms = {"qwfx"} | {
        ".".join(("qwfx", *path.parent.relative_to(TOP).parts)).replace("qwfx.qwfx", "qwfx")
        for root in ("qwfx", "converters", "schema")
        for path in (TOP / root).rglob("__init__.py")
    }
    assert {line.strip(' ",') for line in listed.splitlines() if line.strip()} == rooms
