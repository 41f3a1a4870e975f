"""Reports count, order and decide the exit code."""

from __future__ import annotations

import pytest

from qwfx.findings import ExitCode, Finding, Outcome, Report, RuleResult, Severity


def finding(severity: Severity) -> Finding:
    return Finding("a-rule", severity, "/basis", "this", "that", "mend it")


@pytest.mark.parametrize(
    ("severities", "outcome", "failure", "code"),
    [
        ((), Outcome.PASSED, "", ExitCode.OK),
        ((Severity.WARNING, Severity.NOTE), Outcome.FOUND, "", ExitCode.OK),
        ((Severity.NOTE, Severity.ERROR), Outcome.FOUND, "", ExitCode.FINDINGS),
        ((Severity.ERROR,), Outcome.FOUND, "not HDF5", ExitCode.FAILED),
        ((), Outcome.BROKEN, "", ExitCode.FAILED),
        ((), Outcome.NOT_EVALUATED, "", ExitCode.OK),
    ],
)
def test_exit_code(severities: tuple[Severity, ...], outcome: Outcome, failure: str, code: ExitCode) -> None:
    result = RuleResult("a-rule", "structure", outcome, findings=tuple(map(finding, severities)))
    report = Report("x.qwfx", "trial", results=(result,), failure=failure)
    assert report.exit_code is code
    for severity in Severity:
        assert report.count(severity) == severities.count(severity)
    ranks = [list(Severity).index(f.severity) for f in report.findings]
    assert ranks == sorted(ranks)
