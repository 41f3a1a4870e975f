"""From the errors of a JSON Schema implementation to what a user can act on."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from qwfx.schema_check.documents import Json
from qwfx.schema_check.layout import Entry, Place, find
from qwfx.schema_check.problems import SchemaProblem

__all__ = ["Located", "located", "problems_of"]

MOST_UNKNOWN = 20
"""Unknown members of one group that are named one by one; the rest are counted."""


@dataclass(frozen=True)
class Located:
    """An error of the schema check with its place in the file."""

    keyword: str
    """Keyword that failed."""
    argument: Any
    """Value of that keyword."""
    instance: Any
    schema: Any
    steps: tuple[tuple[str, str], ...]
    """(``members`` or ``attributes``, name) from the root of the check."""
    aspect: tuple[str | int, ...]
    """The rest of the path inside the outline's node: ``dtype``, ``shape``, ``members`` ..."""
    expects: str
    """The sentence that the schema gives with this condition, or empty."""
    place: Place | None
    prefix: str

    @property
    def path(self) -> str:
        """Path in the file."""
        return path_of(self.steps, self.prefix)

    @property
    def entry(self) -> Entry | None:
        """What the schema says of the place."""
        return self.place.entry if self.place is not None else None


def path_of(steps: Sequence[tuple[str, str]], prefix: str = "") -> str:
    """``/group/member@attribute`` from steps."""
    path = prefix
    for container, name in steps:
        path += f"/{name}" if container == "members" else f"{path and ''}@{name}"
    return path if path and not path.startswith("@") else f"/{path}"


def located(error: Any, layout: Place, document: Json, prefix: str) -> Located:
    """Place a ``jsonschema.ValidationError``. `prefix` is the path of the node that was checked ('' for the root)."""
    tokens = list(error.absolute_path)
    steps: list[tuple[str, str]] = []
    while len(tokens) >= 2 and tokens[0] in ("members", "attributes"):
        steps.append((str(tokens[0]), str(tokens[1])))
        del tokens[:2]
    schema_path = list(error.absolute_schema_path)
    keyword = "propertyNames" if "propertyNames" in schema_path else error.validator or ""
    return Located(
        keyword,
        error.validator_value,
        error.instance,
        error.schema,
        tuple(steps),
        tuple(tokens),
        _expects(document, schema_path, document) or "",
        find(layout, tuple(steps)),
        prefix,
    )


def _expects(schema: Any, path: list[str | int], document: Json) -> str | None:
    """The deepest ``expects`` on the way along a schema path, in which ``$ref`` steps are left out; None if no way."""
    if not path:
        return ""
    if isinstance(schema, list):
        return _expects(schema[int(path[0])], path[1:], document) if int(path[0]) < len(schema) else None
    if not isinstance(schema, dict):
        return None
    own = str(schema.get("expects", ""))
    if path[0] in schema:
        deeper = _expects(schema[path[0]], path[1:], document) if len(path) > 1 else ""
        if deeper is not None:
            return deeper or own
    if "$ref" in schema:
        target: Any = document
        for step in str(schema["$ref"]).removeprefix("#/").split("/"):
            target = target[step]
        deeper = _expects(target, path, document)
        if deeper is not None:
            return deeper or own
    return None


def problems_of(error: Located) -> Iterator[SchemaProblem]:
    """One error in plain words; several for several missing or unknown names."""
    writer = WRITERS.get(error.keyword)
    if error.expects and error.keyword in ("not", "oneOf"):
        writer = _condition
    elif error.aspect[:1] == ("kind",):
        writer = _kind
    elif error.aspect[:1] == ("dtype",):
        writer = _dtype
    elif error.aspect[:1] == ("shape",):
        writer = _shape
    elif error.aspect[:1] == ("value",):
        writer = _value
    yield from (writer or _other)(error)


def _said(entry: Entry | None) -> str:
    """``dataset float64 (atom, 3): Cartesian coordinates`` and the like."""
    if entry is None:
        return "a member of the format"
    words = " or ".join(_types(entry))
    if entry.kind == "dataset":
        head = f"a dataset of {words}, shape {entry.shape_text}"
    else:
        head = f"an attribute of {words}" if entry.kind == "attribute" else "a group"
    return f"{head}: {entry.description.rstrip('.')}"


def _types(entry: Entry) -> tuple[str, ...]:
    integer = {"int8", "uint64"} <= set(entry.dtypes)
    return ("integer",) if integer else entry.dtypes


def _looks(node: Any) -> str:
    if not isinstance(node, dict):
        return f"{node!r}"
    if node.get("kind") == "group":
        return "a group"
    shape = ", ".join(map(str, node.get("shape", ())))
    if node.get("kind") == "dataset":
        return f"a dataset of {node.get('dtype')}, shape ({shape})"
    return f"an attribute of {node.get('dtype')}"


def _near(name: str, names: Sequence[str]) -> str:
    from difflib import get_close_matches

    near = get_close_matches(name.lower(), names, n=1, cutoff=0.65)
    return near[0] if near else ""


def _below(error: Located, container: str, name: str) -> tuple[str, Entry | None]:
    child = error.place.child(container, name) if error.place is not None else None
    return path_of((*error.steps, (container, name)), error.prefix), child.entry if child else None


def _listed(error: Located, container: str) -> list[str]:
    if error.place is None:
        return []
    return list(error.place.attributes if container == "attributes" else error.place.members)


def _missing(error: Located, names: Sequence[str], because: str = "") -> Iterator[SchemaProblem]:
    container = str(error.aspect[-1]) if error.aspect else ""
    if container not in ("members", "attributes"):
        for name in names:
            yield SchemaProblem(error.path, f"a node of the outline with `{name}`", f"a node without `{name}`",
                                "make the outline with a program that follows FORMAT.md", "required")  # fmt: skip
        return
    unknown = [name for name in error.instance if name not in _listed(error, container)]
    for name in names:
        path, entry = _below(error, container, name)
        similar = _near(name, unknown)
        remedy = f"write it; perhaps `{similar}` is meant to be it" if similar else "write it"
        thing = "attribute" if container == "attributes" else "member"
        yield SchemaProblem(path, because or _said(entry), f"the {thing} is missing", remedy, "required")


def _required(error: Located) -> Iterator[SchemaProblem]:
    yield from _missing(error, [n for n in error.argument if n not in error.instance], error.expects)


def _dependent(error: Located) -> Iterator[SchemaProblem]:
    for name, needs in error.argument.items():
        if name in error.instance:
            yield from _missing(
                error, [n for n in needs if n not in error.instance], f"`{'` and `'.join(needs)}`, as there is `{name}`"
            )


def _unknown(error: Located) -> Iterator[SchemaProblem]:
    container = str(error.aspect[-1]) if error.aspect else "members"
    known = _listed(error, container) or list(error.schema.get("properties", {}))
    extra = [name for name in error.instance if name not in error.schema.get("properties", {})]
    thing = "attribute" if container == "attributes" else "member"
    free = [name for name in known if name not in error.instance]
    for name in extra[:MOST_UNKNOWN]:
        path = path_of((*error.steps, (container, name)), error.prefix)
        similar = _near(name, free)
        expected = f"one of {', '.join(known)}" if known else f"no {thing}s here"
        remedy = f"rename it to `{similar}`" if similar else "remove it, or move it under /extensions/<owner>"
        yield SchemaProblem(path, expected, f"an unknown {thing}, {_looks(error.instance[name])}", remedy,
                            "additionalProperties")  # fmt: skip
    if len(extra) > MOST_UNKNOWN:
        yield SchemaProblem(error.path, "members of the format", f"{len(extra) - MOST_UNKNOWN} more unknown {thing}s",
                            "move them under /extensions/<owner>", "additionalProperties")  # fmt: skip


def _condition(error: Located) -> Iterator[SchemaProblem]:
    if error.keyword == "not":
        yield SchemaProblem(error.path, error.expects, f"{_looks(error.instance)} that does not belong here",
                            "remove it, or complete what it belongs to", "condition")  # fmt: skip
        return
    names = ", ".join(error.instance) if isinstance(error.instance, dict) else repr(error.instance)
    yield SchemaProblem(error.path, error.expects, names or "nothing", "add what is missing, remove the other",
                        error.keyword)  # fmt: skip


def _kind(error: Located) -> Iterator[SchemaProblem]:
    wanted = "a group" if error.argument == "group" else "a dataset"
    yield SchemaProblem(error.path, wanted if error.entry is None else _said(error.entry), f"a {error.instance}",
                        f"write it as {wanted}", "kind")  # fmt: skip


def _dtype(error: Located) -> Iterator[SchemaProblem]:
    words = " or ".join(_types(error.entry)) if error.entry else str(error.argument)
    if error.keyword == "const":
        words = str(error.argument)
    remedy = f"write it as {error.entry.written_as or words}" if error.entry else f"write it as {words}"
    yield SchemaProblem(error.path, error.expects or f"type {words}", f"type {error.instance}", remedy, "dtype")


def _axes(number: int) -> str:
    return f"{number} ax{'i' if number == 1 else 'e'}s"


def _shape(error: Located) -> Iterator[SchemaProblem]:
    dims = error.entry.shape_text if error.entry and error.entry.dims else ""
    if error.entry is not None and error.entry.kind == "attribute":
        yield SchemaProblem(error.path, "one number or text (a scalar)", f"shape {tuple(error.instance)}",
                            "write a scalar attribute", "shape")  # fmt: skip
    elif error.keyword in ("minItems", "maxItems"):
        yield SchemaProblem(
            error.path,
            f"{_axes(error.argument)}{', ' + dims if dims else ''}" if error.argument else "a scalar",
            f"{_axes(len(error.instance))}, shape ({', '.join(map(str, error.instance))})",
            "write it with the axes that FORMAT.md gives",
            "shape",
        )
    else:
        yield SchemaProblem(
            error.path,
            f"extent {error.argument} of axis {error.aspect[-1]}{', shape ' + dims if dims else ''}"
            if error.keyword == "const"
            else f"extent of at least {error.argument}",
            f"extent {error.instance}",
            "write the axes in the order that FORMAT.md gives",
            "shape",
        )


def _value(error: Located) -> Iterator[SchemaProblem]:
    expected = error.expects or (error.entry.expects if error.entry else "")
    if not expected:
        if error.keyword in ("enum", "const"):
            options = error.argument if error.keyword == "enum" else [error.argument]
            expected = " or ".join(f"`{option}`" if isinstance(option, str) else str(option) for option in options)
        elif error.keyword == "minimum":
            expected = f"at least {error.argument}"
        else:
            expected = "text" if error.argument == "string" else "an integer"
    similar = ""
    if error.keyword == "enum" and isinstance(error.instance, str):
        similar = _near(error.instance, [str(a) for a in error.argument])
    remedy = f"perhaps `{similar}` is meant" if similar else "correct the attribute"
    yield SchemaProblem(error.path, expected, repr(error.instance), remedy, error.keyword)


def _name(error: Located) -> Iterator[SchemaProblem]:
    path = path_of((*error.steps, ("members", str(error.instance))), error.prefix)
    yield SchemaProblem(path, error.expects, f"the name {str(error.instance)[:80]!r}", "rename it", "propertyNames")


def _other(error: Located) -> Iterator[SchemaProblem]:
    aspect = ".".join(map(str, error.aspect)) or "node"
    yield SchemaProblem(error.path, f"what the schema says: {error.keyword} {error.argument!r}"[:200],
                        f"{aspect} = {error.instance!r}"[:200],
                        "make the outline with a program that follows FORMAT.md", error.keyword)  # fmt: skip


WRITERS: dict[str, Callable[[Located], Iterator[SchemaProblem]]] = {
    "required": _required,
    "dependentRequired": _dependent,
    "additionalProperties": _unknown,
    "propertyNames": _name,
}
