"""Reports as text, JSON and SARIF."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import pytest
from corpus.edits import build
from jsonschema import Draft202012Validator
from rich.console import Console

from qwfx.findings import ExitCode, Finding, Outcome, Report, RuleResult, Severity
from qwfx.report import render_text, to_json, to_sarif
from qwfx.rules import all_rules
from qwfx.schema_check import load_schema
from qwfx.validate import validate

ERROR = Finding("positive-exponents", Severity.ERROR, "/basis/exponents[3]", "a positive exponent", "-1", "mend it", 2)
NOTE = Finding("spin-order", Severity.NOTE, "/system@n_up", "n_up >= n_down", "0", "nothing")
BAD = Report(
    "dir/bad file.qwfx",
    "trial",
    "1.0",
    "ab" * 32,
    (
        RuleResult("spin-order", "consistency", Outcome.FOUND, findings=(NOTE,)),
        RuleResult("positive-exponents", "consistency", Outcome.FOUND, coverage="all 4 primitives", findings=(ERROR,)),
        RuleResult("orthonormality", "algebra", Outcome.NOT_EVALUATED,
                   reason="rule positive-exponents found an error in /basis"),
        RuleResult("expansion-norm", "algebra", Outcome.PASSED, measured="state 0: sum deviates from 1 by below 1e-12"),
        RuleResult("witness-orbitals", "witness", Outcome.SKIPPED, reason="left out on request"),
    ),
    notes=("a remark",),
)  # fmt: skip
GOOD = Report("good.qwfx", "orbitals", "1.0", "cd" * 32, (RuleResult("version", "structure", Outcome.PASSED),))
BROKEN = Report(
    "broken.qwfx", "trial", "1.0", "", (RuleResult("schema", "structure", Outcome.BROKEN, reason="KeyError"),)
)
FAILED = Report("/absent.qwfx", "auto", failure="no such file")


def text(reports: Any, width: int = 100, **options: Any) -> str:
    out = io.StringIO()
    render_text(reports, Console(file=out, width=width, highlight=False), **options)
    return out.getvalue()


GOLDEN_TEXT = """\
dir/bad file.qwfx: not valid for purpose trial: 1 error, 1 note
  a remark

error  positive-exponents  /basis/exponents[3]  (2 places)
  expected a positive exponent
  found    -1
  to do    mend it

note  spin-order  /system@n_up
  expected n_up >= n_down
  found    0
  to do    nothing

tier         run  found  skipped  not evaluated  broken
consistency    2      2        .              .       .
algebra        1      .        .              1       .
witness        .      .        1              .       .

measured
expansion-norm  state 0: sum deviates from 1 by below 1e-12
not evaluated because of earlier findings: orthonormality
`qwfx explain positive-exponents` tells more; --verbose lists every rule
"""


def test_text_of_one_file_whole() -> None:
    assert text(BAD) == GOLDEN_TEXT


def test_text_has_no_colours_where_it_is_no_terminal_and_no_trailing_blanks() -> None:
    shown = text([BAD, GOOD])
    assert "\x1b" not in shown
    assert not [line for line in shown.splitlines() if line != line.rstrip()]


def test_text_on_a_terminal_has_colours() -> None:
    out = io.StringIO()
    render_text(BAD, Console(file=out, force_terminal=True, color_system="standard", width=100))
    assert "\x1b[1;31m" in out.getvalue()


def test_text_of_several_files_ends_with_a_line_for_all() -> None:
    last = text([BAD, GOOD, GOOD, FAILED]).splitlines()[-1]
    assert last == "4 files: 2 valid, 1 not valid, 1 not checked in full"


def test_verbose_lists_every_rule_with_its_reason() -> None:
    shown = text(BAD, verbose=True)
    for words in ("expansion-norm", "left out on request", "rule positive-exponents found an error", "not evaluated"):
        assert words in shown


def test_a_broken_rule_and_a_failure_lead_the_text() -> None:
    assert text(BROKEN).startswith("broken.qwfx: not fully checked: 1 rule broke\n")
    assert "please report it" in text(BROKEN)
    assert text(FAILED) == "/absent.qwfx: could not be checked\n  no such file\n"


def test_markup_in_a_report_is_shown_as_it_stands() -> None:
    odd = Finding("schema", Severity.ERROR, "/orbitals/[red]x", "[bold]a", "[/b]", ":smile:")
    shown = text(
        Report("[x].qwfx", "trial", results=(RuleResult("schema", "structure", Outcome.FOUND, findings=(odd,)),))
    )
    for words in ("[x].qwfx", "/orbitals/[red]x", "[bold]a", "[/b]", ":smile:"):
        assert words in shown


def test_narrow_terminals_keep_every_word() -> None:
    shown = "".join(text(BAD, width=40).split())
    assert "statedeviatesfrom1bybelow1e-12".replace("state", "sum") in shown
    assert "/basis/exponents[3]" in shown


@pytest.mark.parametrize("reports", [BAD, GOOD, BROKEN, FAILED, [BAD, GOOD, BROKEN, FAILED], []])
def test_json_follows_its_schema(reports: Any) -> None:
    document = json.loads(json.dumps(to_json(reports)))
    Draft202012Validator(load_schema("report")).validate(document)
    many = reports if isinstance(reports, list) else [reports]
    assert [f["exit_code"] for f in document["files"]] == [int(r.exit_code) for r in many]
    assert document["exit_code"] == max((int(r.exit_code) for r in many), default=0)


def test_json_carries_every_field() -> None:
    (file,) = to_json(BAD)["files"]
    assert file["counts"]["findings"] == {"error": 1, "warning": 0, "note": 1}
    assert file["counts"]["rules"] == {"passed": 1, "found": 2, "skipped": 1, "not-evaluated": 1, "broken": 0}
    rule = next(r for r in file["rules"] if r["rule"] == "positive-exponents")
    assert rule["findings"] == [
        {"severity": "error", "where": "/basis/exponents[3]", "expected": "a positive exponent", "found": "-1",
         "remedy": "mend it", "count": 2}
    ]  # fmt: skip
    assert (file["content_digest"], file["notes"]) == ("ab" * 32, ["a remark"])


def test_json_leaves_out_a_content_digest_that_is_none() -> None:
    odd = Report("a", "trial", "1.0", "not a digest")
    assert to_json(odd)["files"][0]["content_digest"] == ""


SARIF: dict[str, Any] = {
    "type": "object",
    "required": ["version", "runs", "$schema"],
    "properties": {
        "version": {"const": "2.1.0"},
        "runs": {"items": {
            "required": ["tool", "results", "invocations", "artifacts"],
            "properties": {
                "tool": {"required": ["driver"], "properties": {"driver": {
                    "required": ["name", "rules"],
                    "properties": {"rules": {"uniqueItems": True, "items": {
                        "required": ["id", "shortDescription", "help", "defaultConfiguration"],
                        "properties": {"defaultConfiguration": {"properties": {"level": {"$ref": "#/$defs/level"}}}},
                    }}},
                }}},
                "invocations": {"items": {"required": ["executionSuccessful"],
                                          "properties": {"executionSuccessful": {"type": "boolean"}}}},
                "results": {"items": {
                    "required": ["ruleId", "ruleIndex", "level", "message", "locations"],
                    "properties": {
                        "level": {"$ref": "#/$defs/level"},
                        "message": {"required": ["text"], "properties": {"text": {"type": "string", "minLength": 1}}},
                        "locations": {"minItems": 1, "items": {
                            "required": ["physicalLocation", "logicalLocations"],
                            "properties": {"physicalLocation": {"properties": {"artifactLocation": {
                                "required": ["uri"], "properties": {"uri": {"pattern": "^[!-~]+$"}}}}}},
                        }},
                        "occurrenceCount": {"type": "integer", "minimum": 1},
                    },
                }},
            },
        }},
    },
    "$defs": {"level": {"enum": ["none", "note", "warning", "error"]}},
}  # fmt: skip
"""What section 3 of the SARIF 2.1.0 standard requires of the parts that are used here."""


@pytest.mark.parametrize("reports", [BAD, FAILED, [BAD, GOOD, BROKEN, FAILED], []])
def test_sarif_has_the_required_structure(reports: Any) -> None:
    Draft202012Validator(SARIF).validate(json.loads(json.dumps(to_sarif(reports))))


def test_sarif_results_point_at_their_rule_and_file() -> None:
    (run,) = to_sarif([GOOD, BAD])["runs"]
    assert [a["location"]["uri"] for a in run["artifacts"]] == ["good.qwfx", "dir/bad%20file.qwfx"]
    rules = run["tool"]["driver"]["rules"]
    assert [r["id"] for r in rules] == [r.name for r in all_rules()]
    first = run["results"][0]
    assert rules[first["ruleIndex"]]["id"] == first["ruleId"] == "positive-exponents"
    assert (first["level"], first["occurrenceCount"]) == ("error", 2)
    (location,) = first["locations"]
    assert location["physicalLocation"]["artifactLocation"] == {"uri": "dir/bad%20file.qwfx", "index": 1}
    assert location["logicalLocations"][0]["fullyQualifiedName"] == "/basis/exponents[3]"
    assert run["invocations"][0] == {"executionSuccessful": True, "exitCode": 1, "toolExecutionNotifications": []}


def test_sarif_tells_faults_of_the_checker_apart_from_findings() -> None:
    (run,) = to_sarif([BROKEN, FAILED])["runs"]
    invocation = run["invocations"][0]
    assert invocation["executionSuccessful"] is False
    assert invocation["exitCode"] == ExitCode.FAILED
    rule, file = invocation["toolExecutionNotifications"]
    assert rule["associatedRule"] == {"id": "schema"}
    assert "KeyError" in rule["message"]["text"]
    assert file["message"]["text"] == "no such file"
    assert run["results"] == []


def test_a_real_report_in_all_forms(tmp_path: Path) -> None:
    report = validate(build("hydrogen\n/basis/exponents[2] = -0.1688554", tmp_path / "a.qwfx"))
    assert "not valid for purpose trial: 1 error" in text(report)
    Draft202012Validator(load_schema("report")).validate(to_json(report))
    assert [r["ruleId"] for r in to_sarif(report)["runs"][0]["results"]] == ["positive-exponents"]
