"""Either implementation gives the rules the same answer, and the compiler announces itself."""

from __future__ import annotations

from pathlib import Path

import pytest
from corpus.edits import build

from qwfx.findings import Outcome
from qwfx.rules import evaluator
from qwfx.validate import validate

NUMERIC = ("orthonormality", "linear-dependence", "witness-orbitals", "witness-configurations")


@pytest.mark.parametrize("name", ["hydrogen", "helium", "triplet", "watched", "carbon", "water", "dressed"])
def test_plain_and_compiled_functions_give_one_report(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = build(name, tmp_path / "a.qwfx")
    plain = validate(path)
    monkeypatch.setattr(evaluator, "PLAIN_PRIMITIVE_PAIRS", -1)
    monkeypatch.setattr(evaluator, "PLAIN_VALUES", -1)
    compiled = validate(path)
    ran = [r for r in plain.results if r.rule in NUMERIC and r.outcome is Outcome.PASSED]
    assert len(ran) >= 2
    assert compiled.results == plain.results


def test_compiling_is_announced_where_it_happens(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    from qwfx import kernels

    path = build("hydrogen", tmp_path / "a.qwfx")
    monkeypatch.setattr(evaluator, "PLAIN_PRIMITIVE_PAIRS", -1)
    monkeypatch.setattr(kernels, "compiled", lambda: False)
    said: list[str] = []
    validate(path, rules=["orthonormality"], progress=lambda phase, _: said.append(phase))
    assert any("compiling" in phase for phase in said)
