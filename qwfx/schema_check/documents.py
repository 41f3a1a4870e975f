"""The schemas as they lie in ``schema/``: loading, and references followed and merged."""

from __future__ import annotations

import json
import re
from functools import lru_cache
from importlib.resources import files
from typing import Any

from qwfx.errors import FileError

__all__ = ["OUTLINE", "Json", "jastrow_forms", "load_schema", "resolve"]

Json = dict[str, Any]

OUTLINE = "qwfx-1.0"
NAME = re.compile(r"(jastrow/)?[a-z][a-z0-9.]*(-[a-z0-9.]+)*")
SUFFIXES = (".schema.json", ".vocabulary.json")


@lru_cache(maxsize=64)
def _read(name: str) -> Json | None:
    if NAME.fullmatch(name) is None:
        return None
    for suffix in SUFFIXES:
        resource = files("qwfx.schema").joinpath(*f"{name}{suffix}".split("/"))
        if resource.is_file():
            document: Json = json.loads(resource.read_text("utf-8"))
            return document
    return None


def load_schema(name: str) -> Json:
    """A schema document by name: ``qwfx-1.0``, ``report``, ``provenance``, ``shapes``, or a Jastrow form.

    A form goes by ``pade`` or ``jastrow/pade``.

    The document is shared between calls: do not change it.

    Raises
    ------
    FileError
        There is no such schema.
    """
    document = _read(name) or _read(f"jastrow/{name}")
    if document is None:
        raise FileError(
            "there is no such schema",
            where=f"schema {name!r}",
            expected="qwfx-1.0, report, provenance, shapes, " + ", ".join(f"jastrow/{f}" for f in jastrow_forms()),
            remedy="check the spelling, or use the version of qwfx that has this schema",
        )
    return document


@lru_cache(maxsize=1)
def jastrow_forms() -> tuple[str, ...]:
    """Names of the registered Jastrow forms: one schema document each."""
    suffix = SUFFIXES[0]
    folder = files("qwfx.schema").joinpath("jastrow")
    return tuple(sorted(f.name[: -len(suffix)] for f in folder.iterdir() if f.name.endswith(suffix)))


def resolve(schema: Json, document: Json) -> Json:
    """`schema` with its ``$ref`` chain (inside `document`) merged in; what stands beside it takes precedence."""
    reference = schema.get("$ref")
    if reference is None:
        return schema
    target: Any = document
    for step in str(reference).removeprefix("#/").split("/"):
        target = target[step]
    return _merged(resolve(target, document), {k: v for k, v in schema.items() if k != "$ref"}, document)


def _merged(base: Json, over: Json, document: Json) -> Json:
    result = dict(base)
    for key, value in over.items():
        below = result.get(key)
        if isinstance(below, dict) and isinstance(value, dict):
            result[key] = _merged(resolve(below, document), resolve(value, document), document)
        else:
            result[key] = value
    return result
