"""Check an outline: JSON Schema, the shapes vocabulary, and the schema of each Jastrow form."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from functools import lru_cache
from typing import Any

from qwfx.model import FORMAT_VERSION
from qwfx.schema_check.dims import Ledger
from qwfx.schema_check.documents import OUTLINE, jastrow_forms, load_schema
from qwfx.schema_check.layout import layout
from qwfx.schema_check.messages import Located, located, path_of, problems_of
from qwfx.schema_check.problems import SchemaProblem

__all__ = ["check_outline"]

VOCABULARY = ("dims", "counts", "binds")
RANK = {"kind": 0, "required": 1, "dependentRequired": 1, "oneOf": 1, "condition": 2, "dtype": 2, "shape": 2,
        "additionalProperties": 4, "dims": 5}  # fmt: skip


@lru_cache(maxsize=1)
def _validator_class() -> Any:
    """A 2020-12 validator whose vocabulary keywords report themselves as errors: that carries their place along.

    This is sound because the schemas use them nowhere under ``if``, ``not``, ``oneOf`` or ``anyOf``.
    """
    from jsonschema import Draft202012Validator, ValidationError, validators

    def report(validator: Any, argument: Any, instance: Any, schema: Any) -> Iterator[Any]:
        yield ValidationError("an entry of the shapes vocabulary")  # the engine adds keyword, argument and place

    return validators.extend(Draft202012Validator, dict.fromkeys(VOCABULARY, report))


@lru_cache(maxsize=32)
def _validator(name: str) -> Any:
    return _validator_class()(load_schema(name))


def check_outline(outline: Mapping[str, Any]) -> tuple[SchemaProblem, ...]:
    """Every way in which an outline departs from the schema of the format, the most basic first.

    Parameters
    ----------
    outline
        The HDF5 tree as plain JSON, as FORMAT.md (section Outline) describes it.

    Returns
    -------
    tuple of SchemaProblem
        Empty if the outline is sound. In a file of a newer minor version, members that this version does not know are
        still listed, with keyword ``additionalProperties`` and a remedy that says so: a reader reports and ignores
        them.
    """
    ledger = Ledger(dict(load_schema(OUTLINE)["dimensions"]))
    found = list(_walk(OUTLINE, outline, "", {}, ledger))
    for term, node in _terms(outline):
        found.extend(_term(term, node, ledger))
    shaped = {problem.path for problem in found if problem.keyword == "shape"}
    found.extend(problem for problem in ledger.problems() if problem.path not in shaped)
    newer = _newer_minor(outline)
    return tuple(_ordered(_mark_newer(problem, newer) for problem in _without_consequences(found)))


def _walk(
    name: str, node: Any, prefix: str, bindings: Mapping[str, str], ledger: Ledger
) -> Iterator[SchemaProblem]:
    """Problems of one node against one schema; extents go to the ledger."""
    document, place = load_schema(name), layout(name)
    errors = [located(error, place, document, prefix) for error in _validator(name).iter_errors(node)]
    binds = {error.steps: (str(error.argument), error.steps[-1][1]) for error in errors if error.keyword == "binds"}
    seen: set[tuple[Any, ...]] = set()
    for error in errors:
        if error.keyword in VOCABULARY:
            _enter(error, {**bindings, **_bound(error, binds)}, ledger)
            continue
        for problem in problems_of(error):
            # `required` gives one error for each missing name, and the message of each names them all.
            key = (problem.path, problem.keyword, problem.found)
            if key not in seen:
                seen.add(key)
                yield problem


def _bound(error: Located, binds: Mapping[tuple[tuple[str, str], ...], tuple[str, str]]) -> dict[str, str]:
    heads = (error.steps[: n + 1] for n in range(len(error.steps)))
    return dict(binds[head] for head in heads if head in binds)


def _enter(error: Located, bindings: Mapping[str, str], ledger: Ledger) -> None:
    node = error.instance
    if not isinstance(node, dict):
        return
    if error.keyword == "counts":
        value = node.get("value")
        if isinstance(value, int) and not isinstance(value, bool):
            ledger.count(error.path, value, error.argument, bindings)
    elif error.keyword == "dims":
        shape = node.get("shape")
        if isinstance(shape, list) and all(isinstance(n, int) for n in shape):
            ledger.shape(error.path, shape, error.argument, bindings)


def _terms(outline: Mapping[str, Any]) -> Iterator[tuple[str, Mapping[str, Any]]]:
    node: Any = outline
    for name in ("members", "jastrow", "members"):
        node = node.get(name) if isinstance(node, Mapping) else None
    if isinstance(node, Mapping):
        for term, below in node.items():
            if isinstance(below, Mapping) and below.get("kind") == "group":
                yield str(term), below


def _term(term: str, node: Mapping[str, Any], ledger: Ledger) -> Iterator[SchemaProblem]:
    attributes = node.get("attributes")
    form = attributes.get("form") if isinstance(attributes, Mapping) else None
    word = form.get("value") if isinstance(form, Mapping) else None
    if not isinstance(word, str):
        return  # the schema of the outline has said so
    prefix = path_of((("members", "jastrow"), ("members", term)))
    if word not in jastrow_forms():
        from difflib import get_close_matches

        near = get_close_matches(word, jastrow_forms(), n=1)
        yield SchemaProblem(
            f"{prefix}@form",
            "a registered form: " + ", ".join(jastrow_forms()),
            repr(word),
            f"perhaps `{near[0]}` is meant" if near else "use a registered form, or a qwfx that knows this one",
            "enum",
        )
        return
    name = f"jastrow/{word}"
    for dimension, words in load_schema(name).get("dimensions", {}).items():
        ledger.meanings[f"{dimension}:{term}"] = words
    yield from _walk(name, node, prefix, {"term": term}, ledger)


def _without_consequences(problems: list[SchemaProblem]) -> Iterator[SchemaProblem]:
    """Leave out what only follows from a group that stands where a dataset should, or the reverse."""
    wrong_kind = [problem.path for problem in problems if problem.keyword == "kind"]
    for problem in problems:
        follows = any((problem.path + "/").startswith((f"{path}/", f"{path}@")) for path in wrong_kind)
        if problem.keyword == "kind" or not follows:
            yield problem


def _ordered(problems: Iterator[SchemaProblem]) -> list[SchemaProblem]:
    return sorted(problems, key=lambda p: (p.path.count("/") if p.keyword == "kind" else 9, RANK.get(p.keyword, 3)))


def _newer_minor(outline: Mapping[str, Any]) -> str:
    """The version of the file if it has the known major and a newer minor version, else empty."""
    try:
        version = str(outline["attributes"]["version"]["value"])
        major, minor = map(int, version.split("."))
    except (KeyError, TypeError, ValueError):
        return ""
    known = tuple(map(int, FORMAT_VERSION.split(".")))
    return version if major == known[0] and minor > known[1] else ""


def _mark_newer(problem: SchemaProblem, newer: str) -> SchemaProblem:
    if not newer or problem.keyword != "additionalProperties":
        return problem
    return SchemaProblem(
        problem.path,
        f"a member that version {FORMAT_VERSION} knows, or one that version {newer} added",
        problem.found,
        f"none for the file if version {newer} has it; a newer qwfx checks it",
        problem.keyword,
    )
