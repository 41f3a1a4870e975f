"""Tier *structure*: the tree of the file against the schema, its version, and what a purpose needs."""

from __future__ import annotations

import re
from collections.abc import Iterator
from typing import TYPE_CHECKING

from qwfx.findings import Severity
from qwfx.model import FORMAT_NAME, FORMAT_VERSION
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Premise, Problem, Remark, rule

if TYPE_CHECKING:
    from qwfx.schema_check import SchemaProblem

__all__: list[str] = []

CLOSED = ("additionalProperties", "unevaluatedProperties")
"""Schema keywords that speak of members which the schema does not know."""


@rule(
    name="version",
    tier="structure",
    severity=Severity.ERROR,
    summary="the root says format qwfx and a version that this reader knows",
)
def version(file: Inspection) -> Iterator[Remark]:
    name = file.attribute("/", "format")
    if name != FORMAT_NAME:
        yield Problem(
            "/@format",
            repr(FORMAT_NAME),
            "no such attribute" if name is None else repr(name),
            "write the root attribute, or check that this file is what you think it is",
        )
    stored = file.attribute("/", "version")
    match = re.fullmatch(r"(\d+)\.(\d+)", str(stored))
    known_major, known_minor = map(int, FORMAT_VERSION.split("."))
    if match is None:
        yield Problem(
            "/@version",
            "MAJOR.MINOR, such as '1.0'",
            "no such attribute" if stored is None else repr(stored),
            "write the root attribute with the version of FORMAT.md that the file follows",
        )
        return
    major, minor = int(match[1]), int(match[2])
    if major != known_major:
        yield Problem(
            "/@version", f"major version {known_major}", f"version {stored}", "use a qwfx that knows this version"
        )
    elif minor > known_minor:
        yield Problem(
            "/@version",
            f"version {FORMAT_VERSION} or older",
            f"version {stored}",
            "members that are new in it are not checked; a newer qwfx checks them",
            Severity.NOTE,
        )


def _newer_minor(file: Inspection) -> bool:
    match = re.fullmatch(r"(\d+)\.(\d+)", str(file.attribute("/", "version")))
    return match is not None and int(match[2]) > int(FORMAT_VERSION.split(".")[1])


def _outline_problems(file: Inspection) -> tuple[SchemaProblem, ...]:
    """All problems of the outline, found once per file."""
    if file.schema_problems is None:
        from qwfx.schema_check import check_outline

        file.schema_problems = tuple(check_outline(dict(file.raw.outline)))
    return file.schema_problems


@rule(
    name="schema",
    tier="structure",
    severity=Severity.ERROR,
    premise=Premise(rules=("version",)),
    summary="groups, data sets, kinds and attributes are those that the schema requires",
)
def schema(file: Inspection) -> Iterator[Remark]:
    for problem in _outline_problems(file):
        if problem.keyword != "dims" and problem.keyword not in CLOSED:
            yield Problem(problem.path, problem.expected, problem.found, problem.remedy)
    yield Covered("the whole outline")


@rule(
    name="unknown-members",
    tier="structure",
    severity=Severity.ERROR,
    premise=Premise(rules=("version",)),
    summary="no group, data set or attribute that the schema does not know, outside /extensions",
)
def unknown_members(file: Inspection) -> Iterator[Remark]:
    newer = _newer_minor(file)
    for problem in _outline_problems(file):
        if problem.keyword in CLOSED:
            yield Problem(
                problem.path, problem.expected, problem.found, problem.remedy, Severity.NOTE if newer else None
            )
    yield Covered("the whole outline")


@rule(
    name="dimensions",
    tier="structure",
    severity=Severity.ERROR,
    premise=Premise(rules=("schema",)),
    summary="dimensions that several members share have one extent",
)
def dimensions(file: Inspection) -> Iterator[Remark]:
    for problem in _outline_problems(file):
        if problem.keyword == "dims":
            yield Problem(problem.path, problem.expected, problem.found, problem.remedy)
    yield Covered("the shapes of all data sets")


NEEDED = {
    "orbitals": ("/system", "/basis", "/orbitals"),
    "trial": ("/system", "/basis", "/orbitals", "/expansion"),
    "hamiltonian": ("/system", "/hamiltonian"),
}


@rule(
    name="purpose-members",
    tier="structure",
    severity=Severity.ERROR,
    summary="what the purpose needs is in the file",
)
def purpose_members(file: Inspection) -> Iterator[Remark]:
    needed = NEEDED[file.purpose]
    for member in needed:
        absent = not file.has(member)
        if absent or (member == "/orbitals" and not file.orbital_sets):
            yield Problem(
                member,
                f"this group, for purpose {file.purpose}",
                "it is absent" if absent else "it is empty",
                f"write it, or validate for what the file can do: {_possible(file)}",
            )
    yield Covered(f"{', '.join(needed)}, for purpose {file.purpose}")


def _possible(file: Inspection) -> str:
    possible = [name for name, needed in NEEDED.items() if all(map(file.has, needed))]
    return " or ".join(f"--purpose {name}" for name in possible) or "nothing, as it stands"
