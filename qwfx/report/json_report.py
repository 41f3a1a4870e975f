"""The JSON report; its schema is ``schema/report.schema.json``."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Any

from qwfx._version import __version__
from qwfx.findings import ExitCode, Finding, Outcome, Report, RuleResult, Severity

__all__ = ["REPORT_VERSION", "to_json"]

REPORT_VERSION = "1.0"


def to_json(reports: Report | Sequence[Report]) -> dict[str, Any]:
    """Reports of one or several files as plain JSON."""
    files = [reports] if isinstance(reports, Report) else list(reports)
    worst = max((r.exit_code for r in files), default=ExitCode.OK)
    return {
        "format": "qwfx-report",
        "version": REPORT_VERSION,
        "producer": {"name": "qwfx", "version": __version__},
        "exit_code": int(worst),
        "files": [_file(r) for r in files],
    }


def _file(report: Report) -> dict[str, Any]:
    outcomes = [r.outcome for r in report.results]
    whole = re.fullmatch(r"[0-9a-f]{64}", report.content_digest)
    return {
        "file": report.file,
        "purpose": report.purpose,
        "format_version": report.format_version,
        "content_digest": report.content_digest if whole else "",
        "valid": report.exit_code is ExitCode.OK,
        "exit_code": int(report.exit_code),
        "failure": report.failure,
        "notes": list(report.notes),
        "counts": {
            "findings": {s.value: report.count(s) for s in Severity},
            "rules": {o.value: outcomes.count(o) for o in Outcome},
        },
        "rules": [_rule(r) for r in report.results],
    }


def _rule(result: RuleResult) -> dict[str, Any]:
    return {
        "rule": result.rule,
        "tier": result.tier,
        "outcome": result.outcome.value,
        "reason": result.reason,
        "coverage": result.coverage,
        "measured": result.measured,
        "findings": [_finding(f) for f in result.findings],
    }


def _finding(finding: Finding) -> dict[str, Any]:
    return {
        "severity": finding.severity.value,
        "where": finding.where,
        "expected": finding.expected,
        "found": finding.found,
        "remedy": finding.remedy,
        "count": finding.count,
    }
