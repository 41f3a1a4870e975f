"""The report as SARIF 2.1.0 (OASIS Standard, 27 March 2020), which code-scanning tools display."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import PurePath
from typing import Any
from urllib.parse import quote

from qwfx._version import __version__
from qwfx.findings import ExitCode, Finding, Outcome, Report, Severity
from qwfx.rules import Rule, all_rules, rule_page

__all__ = ["to_sarif"]

SCHEMA = "https://docs.oasis-open.org/sarif/sarif/v2.1.0/errata01/os/schemas/sarif-schema-2.1.0.json"
LEVEL = {Severity.ERROR: "error", Severity.WARNING: "warning", Severity.NOTE: "note"}


def to_sarif(reports: Report | Sequence[Report]) -> dict[str, Any]:
    """One run with the findings of all files as results; faults of the checker itself as notifications."""
    files = [reports] if isinstance(reports, Report) else list(reports)
    index = {rule.name: i for i, rule in enumerate(all_rules())}
    notifications = [n for number, report in enumerate(files) for n in _notifications(report, number)]
    worst = max((r.exit_code for r in files), default=ExitCode.OK)
    return {
        "$schema": SCHEMA,
        "version": "2.1.0",
        "runs": [
            {
                "tool": {
                    "driver": {
                        "name": "qwfx",
                        "semanticVersion": __version__,
                        "rules": [_descriptor(rule) for rule in all_rules()],
                    }
                },
                "columnKind": "unicodeCodePoints",
                "artifacts": [{"location": {"uri": _uri(report.file)}} for report in files],
                "invocations": [
                    {
                        "executionSuccessful": worst is not ExitCode.FAILED,
                        "exitCode": int(worst),
                        "toolExecutionNotifications": notifications,
                    }
                ],
                "results": [
                    _result(finding, index[finding.rule], report.file, number)
                    for number, report in enumerate(files)
                    for finding in report.findings
                ],
            }
        ],
    }


def _descriptor(rule: Rule) -> dict[str, Any]:
    return {
        "id": rule.name,
        "shortDescription": {"text": f"{rule.summary[0].upper()}{rule.summary[1:]}."},
        "help": {"text": rule_page(rule.name), "markdown": rule_page(rule.name)},
        "defaultConfiguration": {"level": LEVEL[rule.severity]},
        "properties": {"tags": [rule.tier, *rule.purposes]},
    }


def _result(finding: Finding, index: int, file: str, number: int) -> dict[str, Any]:
    several = f" ({finding.count} places)" if finding.count > 1 else ""
    return {
        "ruleId": finding.rule,
        "ruleIndex": index,
        "level": LEVEL[finding.severity],
        "message": {
            "text": f"{finding.where}: expected {finding.expected}; found {finding.found}{several}. "
            f"To do: {finding.remedy}."
        },
        "locations": [
            {
                "physicalLocation": {"artifactLocation": {"uri": _uri(file), "index": number}},
                "logicalLocations": [{"fullyQualifiedName": finding.where, "kind": "member"}],
            }
        ],
        "occurrenceCount": finding.count,
    }


def _notifications(report: Report, number: int) -> list[dict[str, Any]]:
    place = [{"physicalLocation": {"artifactLocation": {"uri": _uri(report.file), "index": number}}}]
    texts: list[tuple[str | None, str]] = [(None, report.failure)] if report.failure else []
    texts += [(r.rule, f"the rule broke: {r.reason}") for r in report.results if r.outcome is Outcome.BROKEN]
    return [
        {
            "level": "error",
            "message": {"text": text},
            "locations": place,
            **({"associatedRule": {"id": rule}} if rule else {}),
        }
        for rule, text in texts
    ]


def _uri(file: str) -> str:
    path = PurePath(file)
    return path.as_uri() if path.is_absolute() else quote(path.as_posix())
