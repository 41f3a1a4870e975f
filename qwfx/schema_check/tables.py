"""The tables of FORMAT.md from the schemas. ``python -m qwfx.schema_check.tables`` rewrites the marked blocks."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import replace
from importlib.resources import files
from pathlib import Path

from qwfx.schema_check.documents import OUTLINE, load_schema
from qwfx.schema_check.layout import Entry, Place, find, layout

__all__ = ["dimensions_table", "format_text", "layout_table", "replace_blocks", "with_tables"]

HEAD = "| member | type | shape | units | required | meaning |\n| --- | --- | --- | --- | --- | --- |"


def layout_table(name: str) -> str:
    """The table of one group (``/system``) or of one Jastrow form (``jastrow/pade``) as Markdown."""
    if name.startswith("jastrow/"):
        place, depth = layout(name), len("/jastrow/<term>")
    else:
        steps = tuple(("members", step) for step in name.strip("/").split("/") if step)
        found = find(layout(), steps)
        if found is None:
            raise ValueError(f"the schema has no group {name}")
        place, depth = found, len(name.rstrip("/"))
    if name == "/":
        rows = [_row(below.entry, depth) for below in place.attributes.values()]
    else:
        rows = [_row(entry, depth) for entry in _below(place)]
    return "\n".join([HEAD, *rows])


def _below(place: Place) -> Iterator[Entry]:
    for attribute in place.attributes.values():
        yield attribute.entry
    for member in (*_joined(place), *([place.wildcard] if place.wildcard is not None else [])):
        yield member.entry
        yield from _below(member)


def _joined(place: Place) -> Iterator[Place]:
    """Members, where neighbours that are alike but for the name stand as one under all their names."""
    groups: list[tuple[list[str], Place]] = []
    for name, member in place.members.items():
        if groups and _alike(member, name) == _alike(groups[-1][1], groups[-1][0][0]):
            groups[-1][0].append(name)
        else:
            groups.append(([name], member))
    for names, member in groups:
        yield member if len(names) == 1 else _renamed(member, f"/{names[0]}", f"/{{{','.join(names)}}}")


def _alike(place: Place, name: str) -> Place:
    return _renamed(place, f"/{name}", "/*")


def _renamed(place: Place, old: str, new: str) -> Place:
    at = len(place.entry.path) - len(old)

    def rename(below: Place) -> Place:
        path = below.entry.path[:at] + new + below.entry.path[at + len(old) :]
        return Place(
            replace(below.entry, path=path),
            {name: rename(p) for name, p in below.attributes.items()},
            {name: rename(p) for name, p in below.members.items()},
            rename(below.wildcard) if below.wildcard is not None else None,
            below.closed,
        )

    return rename(place)


def _row(entry: Entry, depth: int) -> str:
    name = entry.path[depth:].lstrip("/")
    if entry.kind == "group":
        cells = [f"`{name}/`", "group", "", ""]
    else:
        kind = entry.written_as or " or ".join(entry.dtypes)
        shape = entry.shape_text if entry.kind == "dataset" else "attribute"
        cells = [f"`{name}`", kind, shape, entry.units]
    cells += ["yes" if entry.required else "no", entry.description]
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def dimensions_table() -> str:
    """What each name of a dimension counts."""
    rows = [f"| `{name}` | {words} |" for name, words in load_schema(OUTLINE)["dimensions"].items()]
    return "\n".join(["| dimension | number of |", "| --- | --- |", *rows])


def replace_blocks(text: str, kind: str, make: Callable[[str], str]) -> str:
    """Fill every block between ``<!-- kind: argument -->`` and ``<!-- end kind -->`` with what `make` says of it."""
    pattern = re.compile(rf"(<!-- {kind}(?:: (\S+))? -->\n).*?(<!-- end {kind} -->)", re.DOTALL)
    return pattern.sub(lambda m: f"{m[1]}{make(m[2] or '')}\n{m[3]}", text)


def with_tables(text: str) -> str:
    """FORMAT.md with its tables made anew."""
    return replace_blocks(replace_blocks(text, "table", layout_table), "dimensions", lambda _: dimensions_table())


def format_text() -> str:
    """FORMAT.md as it lies beside the schemas."""
    return files("qwfx.schema").joinpath("FORMAT.md").read_text("utf-8")


if __name__ == "__main__":
    target = Path(str(files("qwfx.schema").joinpath("FORMAT.md")))
    target.write_text(with_tables(target.read_text("utf-8")), "utf-8")
