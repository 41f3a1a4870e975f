"""The layout that a schema describes: one entry for each group, dataset and attribute, in the order of the schema."""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import lru_cache

from qwfx.schema_check.documents import OUTLINE, Json, load_schema, resolve

__all__ = ["Entry", "Place", "entries", "find", "layout"]


@dataclass(frozen=True)
class Entry:
    """What the schema says of one group, dataset or attribute."""

    path: str
    """Path with wildcards, such as ``/orbitals/<set>/coefficients`` or ``/system@n_up``."""
    kind: str
    """``group``, ``dataset`` or ``attribute``."""
    dtypes: tuple[str, ...]
    """Types that a reader accepts; empty for a group."""
    written_as: str
    """The type that a writer uses; empty where several are allowed."""
    dims: tuple[str | int, ...]
    variants: tuple[tuple[str, tuple[str | int, ...]], ...]
    """(body, dims) where the shape depends on the body of a Jastrow term."""
    units: str
    values: tuple[str | int, ...]
    """The values of an attribute, where they are enumerated."""
    expects: str
    description: str
    required: bool

    @property
    def shape_text(self) -> str:
        """The shape in words of the schema, such as ``(atom, 3)``."""
        if not self.variants:
            return _tuple_text(self.dims)
        bodies: dict[str, list[str]] = {}
        for body, dims in self.variants:
            bodies.setdefault(_tuple_text(dims), []).append(body)
        return "; ".join(f"{' and '.join(words)}: {shape}" for shape, words in bodies.items())


@dataclass(frozen=True)
class Place:
    """An entry and what lies below it."""

    entry: Entry
    attributes: dict[str, Place] = field(default_factory=dict)
    members: dict[str, Place] = field(default_factory=dict)
    wildcard: Place | None = None
    closed: bool = True
    """Whether members and attributes that are not listed are forbidden."""

    def child(self, container: str, name: str) -> Place | None:
        """The place of one attribute or member, a wildcard one if its name is free."""
        if container == "attributes":
            return self.attributes.get(name)
        return self.members.get(name, self.wildcard)


def _tuple_text(dims: tuple[str | int, ...]) -> str:
    return "(" + ", ".join(re.sub(r":\{term\}", "", str(text)) for text in dims) + ")"


def _variants(group: Json, name: str) -> tuple[tuple[str, tuple[str | int, ...]], ...]:
    """(body, dims) that the conditions of a Jastrow form give a member."""
    found = []
    for condition in group.get("allOf", ()):
        member = condition.get("then", {}).get("properties", {}).get("members", {}).get("properties", {}).get(name)
        if isinstance(member, dict) and "dims" in member:
            body = condition["if"]["properties"]["attributes"].get("properties", {}).get("body")
            if body is not None:
                found.append((body["properties"]["value"]["const"], tuple(member["dims"])))
    return tuple(found)


def _entry(
    path: str, kind: str, merged: Json, required: bool, document: Json, owner: Json | None = None
) -> Entry:
    properties = merged.get("properties", {})
    dtype = resolve(properties.get("dtype", {}), document)
    value = resolve(properties.get("value", {}), document)
    dtypes = tuple(dtype.get("enum", ())) if kind != "group" else ()
    return Entry(
        path,
        kind,
        dtypes,
        merged.get("written_as", dtypes[0] if len(dtypes) == 1 else ""),
        tuple(merged.get("dims", ())),
        _variants(owner or {}, path.rpartition("/")[2]),
        merged.get("units", ""),
        tuple(value.get("enum", (value["const"],) if "const" in value else ())),
        merged.get("expects", ""),
        merged.get("description", ""),
        required,
    )


def _place(schema: Json, path: str, required: bool, document: Json, owner: Json | None = None) -> Place:
    merged = resolve(schema, document)
    properties = merged.get("properties", {})
    kind = resolve(properties.get("kind", {}), document).get("const", "attribute")
    entry = _entry(path, kind, merged, required, document, owner)
    if kind != "group":
        return Place(entry)
    attributes = resolve(properties.get("attributes", {}), document)
    members = resolve(properties.get("members", {}), document)
    wildcard = None
    if isinstance(free := members.get("additionalProperties"), dict):
        binds = resolve(free, document).get("binds", "name")
        wildcard = _place(free, f"{path.rstrip('/')}/<{binds}>", False, document)
    return Place(
        entry,
        {
            name: _place(below, f"{path}@{name}", name in attributes.get("required", ()), document)
            for name, below in attributes.get("properties", {}).items()
        },
        {
            name: _place(below, f"{path.rstrip('/')}/{name}", name in members.get("required", ()), document, merged)
            for name, below in members.get("properties", {}).items()
        },
        wildcard,
        members.get("additionalProperties", True) is False,
    )


@lru_cache(maxsize=32)
def layout(name: str = OUTLINE) -> Place:
    """The layout of a schema; a Jastrow form stands at ``/jastrow/<term>``."""
    document = load_schema(name)
    return _place(document, "/jastrow/<term>" if name.startswith("jastrow/") else "/", True, document)


def entries(place: Place) -> Iterator[Entry]:
    """All entries from `place` down, attributes before members."""
    yield place.entry
    for below in (*place.attributes.values(), *place.members.values()):
        yield from entries(below)
    if place.wildcard is not None:
        yield from entries(place.wildcard)


def find(place: Place, steps: tuple[tuple[str, str], ...]) -> Place | None:
    """The place reached by ``(container, name)`` steps, or None where the schema knows no such place."""
    at: Place | None = place
    for container, name in steps:
        if at is None:
            return None
        at = at.child(container, name)
    return at
