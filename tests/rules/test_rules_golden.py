"""The whole report of each file of the corpus equals the golden one, so that a false alarm fails too."""

from __future__ import annotations

from pathlib import Path

import pytest
from corpus.golden import GOLDEN, cases, load, report_of
from corpus.valid import VALID
from jsonschema import Draft202012Validator

from qwfx.schema_check import load_schema

CASES = cases()


def test_there_is_a_golden_report_for_each_case_and_no_other() -> None:
    assert {p.stem for p in GOLDEN.glob("*.json")} == set(CASES)


@pytest.mark.parametrize("name", CASES)
def test_report_equals_the_golden_one(name: str, tmp_path: Path) -> None:
    golden = load(name)
    assert set(golden) == set(CASES[name])
    for heading, text in CASES[name].items():
        assert report_of(text, tmp_path) == golden[heading]


@pytest.mark.parametrize("name", VALID)
def test_valid_files_have_neither_errors_nor_warnings(name: str) -> None:
    report = load(f"valid-{name}")["file"]
    assert report["exit_code"] == 0
    assert report["counts"]["findings"]["error"] == report["counts"]["findings"]["warning"] == 0
    assert report["counts"]["rules"]["broken"] == 0


def test_each_failing_file_is_caught_for_one_reason_only() -> None:
    """Apart from notes and from what the same change breaks by nature, a defect gives its own finding and no other."""
    schema = Draft202012Validator(load_schema("report"))
    for name in CASES:
        golden = load(name)
        for report in golden.values():
            whole = {**report, "content_digest": ""}
            document = {"format": "qwfx-report", "version": "1.0", "producer": {"name": "qwfx", "version": "1"}}
            schema.validate({**document, "exit_code": report["exit_code"], "files": [whole]})
        if "fails" in golden:
            fired = {r["rule"] for r in golden["fails"]["rules"] if r["findings"]}
            assert name in fired
            assert len(fired) <= 5, (name, fired)
