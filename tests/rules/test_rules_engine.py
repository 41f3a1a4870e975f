"""The engine: premises, grouping, damage, and a rule that breaks."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qwfx.errors import FileError, UnsupportedError
from qwfx.findings import ExitCode, Outcome, Report, RuleResult, Severity
from qwfx.rules import registry
from qwfx.rules.engine import group, run_rules
from qwfx.rules.inspection import Inspection, member_of, overlaps
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Remark, Rule


class Memory:
    """A file in memory: data sets by path."""

    path = Path("memory.qwfx")
    outline: Mapping[str, Any] = {}

    def __init__(self, **arrays: Any) -> None:
        self.arrays = {f"/{name.replace('__', '/')}": np.asarray(value) for name, value in arrays.items()}

    def has(self, member: str) -> bool:
        return any(path == member or path.startswith(member + "/") for path in self.arrays)

    def members(self, group: str) -> list[str]:
        return [p.split("/")[-1] for p in self.arrays if p.rpartition("/")[0] == group]

    def attributes(self, group: str) -> Mapping[str, Any]:
        return {}

    def shape(self, member: str) -> tuple[int, ...]:
        return self.arrays[member].shape

    def read(self, member: str, start: int | None = None, stop: int | None = None, axis: int = 0) -> np.ndarray:
        array = self.arrays[member]
        return array[(slice(None),) * axis + (slice(start, stop),)] if array.ndim else array


Check = Callable[[Inspection], Iterator[Remark]]


@pytest.fixture
def rules(monkeypatch: pytest.MonkeyPatch) -> dict[str, Rule]:
    """An empty registry."""
    fresh: dict[str, Rule] = {}
    monkeypatch.setattr(registry, "_RULES", fresh)
    return fresh


def add(name: str, check: Check, premise: Premise | None = None, severity: Severity = Severity.ERROR) -> None:
    registry.register(
        Rule(name, "structure", severity, premise or Premise(), "nothing", registry.PURPOSES, "a rule", check)
    )


def run(raw: Memory, skipped: dict[str, str] | None = None) -> dict[str, RuleResult]:
    results = run_rules(Inspection(raw), registry.registered(), skipped or {})
    return {r.rule: r for r in results}


def sound(file: Inspection) -> Iterator[Remark]:
    yield Covered("everything")
    yield Measured("1 of 1")


def faulty(file: Inspection) -> Iterator[Remark]:
    yield Problem("/a/x[3]", "even", "odd", "make it even")


def test_rule_without_problems_passes_with_its_coverage(rules: dict[str, Rule]) -> None:
    add("plain", sound)
    result = run(Memory())["plain"]
    assert (result.outcome, result.coverage, result.measured) == (Outcome.PASSED, "everything", "1 of 1")


def test_broken_rule_is_never_taken_for_no_findings(rules: dict[str, Rule]) -> None:
    def breaks(file: Inspection) -> Iterator[Remark]:
        yield Problem("/a", "x", "y", "z")
        raise ZeroDivisionError("oops")

    add("breaks", breaks)
    add("later", sound, Premise(rules=("breaks",)))
    results = run(Memory(a__x=1))
    assert results["breaks"].outcome is Outcome.BROKEN
    assert "ZeroDivisionError: oops at test_rules_engine.py:" in results["breaks"].reason
    assert results["later"].outcome is Outcome.NOT_EVALUATED
    assert "broke" in results["later"].reason
    assert Report("f", "trial", results=tuple(results.values())).exit_code is ExitCode.FAILED


def test_damage_stops_what_rests_on_it_and_nothing_else(rules: dict[str, Rule]) -> None:
    add("first", faulty)
    add("same", sound, Premise(members=("/a",), rules=("first",)))
    add("other", sound, Premise(members=("/b",), rules=("first",)))
    add("further", sound, Premise(members=("/a",), rules=("other",)))
    add("either", sound, Premise(any_of=("/a", "/b"), rules=("first",)))
    add("free", sound, Premise(members=("/a",)))
    results = run(Memory(a__x=1, b__y=2))
    outcomes = {name: r.outcome for name, r in results.items()}
    assert outcomes["first"] is Outcome.FOUND
    assert outcomes["same"] is outcomes["further"] is Outcome.NOT_EVALUATED
    assert results["further"].reason == "rule first found an error in /a"
    assert outcomes["other"] is outcomes["either"] is outcomes["free"] is Outcome.PASSED


def test_a_warning_is_no_damage(rules: dict[str, Rule]) -> None:
    add("first", faulty, severity=Severity.WARNING)
    add("same", sound, Premise(members=("/a",), rules=("first",)))
    assert run(Memory(a__x=1))["same"].outcome is Outcome.PASSED


def test_absent_members_are_named(rules: dict[str, Rule]) -> None:
    add("needs", sound, Premise(members=("/a", "/c")))
    add("some", sound, Premise(any_of=("/c", "/d")))
    add("without", sound, Premise(absent=("/a",)))
    results = run(Memory(a__x=1))
    assert results["needs"].reason == "the file has no /c"
    assert results["some"].reason == "the file has no /c and no /d"
    assert results["without"].reason == "the file has /a, which this rule does not cover"


def test_skipped_foundation(rules: dict[str, Rule]) -> None:
    add("first", sound)
    add("second", sound, Premise(rules=("first",)))
    results = run(Memory(), {"first": "left out on request"})
    assert results["first"].outcome is Outcome.SKIPPED
    assert results["first"].reason == "left out on request"
    assert results["second"].reason == "rule first, on which it rests, was skipped"


def test_premise_that_fails_on_looking_closer(rules: dict[str, Rule]) -> None:
    def nothing_here(file: Inspection) -> Iterator[Remark]:
        raise PremiseError("nothing to judge")
        yield Covered("never")

    def halfway(file: Inspection) -> Iterator[Remark]:
        yield Problem("/a", "x", "y", "z")
        raise PremiseError("too big")

    add("empty", nothing_here)
    add("halfway", halfway)
    results = run(Memory())
    assert (results["empty"].outcome, results["empty"].reason) == (Outcome.NOT_EVALUATED, "nothing to judge")
    assert results["halfway"].outcome is Outcome.FOUND
    assert "too big" in results["halfway"].coverage


def test_file_that_cannot_be_read_is_a_finding_and_a_limit_is_not(rules: dict[str, Rule]) -> None:
    def unreadable(file: Inspection) -> Iterator[Remark]:
        raise FileError("a chunk is damaged", where="/a/x")
        yield Covered("never")

    def limited(file: Inspection) -> Iterator[Remark]:
        raise UnsupportedError("l = 9")
        yield Covered("never")

    add("unreadable", unreadable, severity=Severity.NOTE)
    add("limited", limited)
    results = run(Memory())
    (finding,) = results["unreadable"].findings
    assert (finding.severity, finding.where, finding.found) == (Severity.ERROR, "/a/x", "a chunk is damaged")
    assert results["limited"].outcome is Outcome.NOT_EVALUATED


def test_like_problems_become_one_finding() -> None:
    problems = [Problem(f"/a/x[{i}]", "even", str(i), "make it even", count=2) for i in (1, 3, 5)]
    other = Problem("/a/x[7]", "even", "7", "make it even", Severity.NOTE)
    attribute = Problem("/a@x", "even", "7", "make it even")
    joined = group([*problems, other, attribute, Problem("/a@y", "even", "7", "make it even")])
    assert [(p.where, p.count) for p in joined if p.severity is None] == [("/a/x[1]", 6), ("/a@x", 1), ("/a@y", 1)]
    assert [p.where for p in joined if p.severity is Severity.NOTE] == ["/a/x[7]"]


def test_registry_refuses_doubles_and_unknown_foundations(rules: dict[str, Rule]) -> None:
    add("one", sound)
    with pytest.raises(ValueError, match="twice"):
        add("one", sound)
    with pytest.raises(ValueError, match="not registered before"):
        add("two", sound, Premise(rules=("three",)))


def test_rules_that_read_arrays_rest_on_the_structure(rules: dict[str, Rule]) -> None:
    add("dimensions", sound)

    @registry.rule(name="reader", tier="algebra", severity=Severity.NOTE, summary="reads")
    def reader(file: Inspection) -> Iterator[Remark]:
        yield Covered("all")

    assert rules["reader"].premise.rules == ("dimensions",)


@pytest.mark.parametrize(
    ("where", "member"),
    [("/a/b[1,2]", "/a/b"), ("/a@n", "/a"), ("/@version", "/"), ("/", "/"), ("/a/b[3]@c", "/a/b")],
)
def test_member_of(where: str, member: str) -> None:
    assert member_of(where) == member


def test_overlaps() -> None:
    assert overlaps("/a", "/a/b")
    assert overlaps("/a/b", "/a")
    assert overlaps("/a", "/a")
    assert not overlaps("/a", "/ab")
    assert not overlaps("/", "/a")
    assert overlaps("/", "/")


def test_blocks_cover_each_row_once_and_overlap_as_asked(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("qwfx.rules.inspection.BLOCK_BYTES", 16 * 2 * 3)
    rows = np.arange(20).reshape(10, 2)
    file = Inspection(Memory(a__x=rows))
    pieces = list(file.blocks("/a/x"))
    assert [start for start, _ in pieces] == [0, 3, 6, 9]
    assert np.array_equal(np.concatenate([block for _, block in pieces]), rows)
    assert [(start, len(block)) for start, block in file.blocks("/a/x", overlap=1)] == [(0, 3), (2, 4), (5, 4), (8, 2)]


@pytest.mark.parametrize("shape", [(2, 9), (9, 2), (3, 2, 4), (5,), ()])
def test_pieces_cover_each_element_once(shape: tuple[int, ...], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("qwfx.rules.inspection.BLOCK_BYTES", 16 * 2 * 4)
    whole = np.arange(np.prod(shape, dtype=int)).reshape(shape)
    copy = np.full(shape, -1)
    for origin, piece in Inspection(Memory(a__x=whole)).pieces("/a/x"):
        place = tuple(slice(o, o + n) for o, n in zip(origin, piece.shape, strict=True))
        assert (copy[place] == -1).all()
        copy[place] = piece
        assert piece.size <= 12
    assert np.array_equal(copy, whole)
