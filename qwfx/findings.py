"""What a check says: findings, the outcome of each rule, the report of a file, and the exit codes."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import Enum, IntEnum

__all__ = ["ExitCode", "Finding", "Outcome", "Report", "RuleResult", "Severity"]


class Severity(str, Enum):
    """How bad a finding is. Only errors make a file invalid."""

    ERROR = "error"
    WARNING = "warning"
    NOTE = "note"


class Outcome(str, Enum):
    """What became of a rule in one run."""

    PASSED = "passed"
    FOUND = "found"
    """The rule ran and has findings."""
    SKIPPED = "skipped"
    """Not asked for: by purpose, by choice of the user, or by budget."""
    NOT_EVALUATED = "not-evaluated"
    """Its premise does not hold: the file lacks what the rule is about, or an earlier rule found it damaged."""
    BROKEN = "broken"
    """The rule itself failed: a fault of qwfx, never counted as 'no findings'."""


class ExitCode(IntEnum):
    """Exit codes of the command line, the same for all verbs."""

    OK = 0
    FINDINGS = 1
    FAILED = 2


@dataclass(frozen=True)
class Finding:
    """One thing that is wrong or notable, said so that a user can act on it."""

    rule: str
    severity: Severity
    where: str
    """Path of the member in the file, with the first index concerned, such as ``/basis/exponents[12]``."""
    expected: str
    found: str
    remedy: str
    count: int = 1
    """How many places this finding stands for; like ones are grouped so that one cause gives one finding."""


@dataclass(frozen=True)
class RuleResult:
    """The outcome of one rule on one file."""

    rule: str
    tier: str
    outcome: Outcome
    reason: str = ""
    """Why it was skipped, not evaluated or broken."""
    coverage: str = ""
    """What was looked at, such as ``all 900 x 900 elements`` or ``first 10000 of 3000000 entries``."""
    measured: str = ""
    """The figure that decided, such as ``largest deviation 3.1e-15, tolerance 1e-08``."""
    findings: tuple[Finding, ...] = ()


@dataclass(frozen=True)
class Report:
    """The outcome of one validation: what was run, skipped, not evaluated and broken, and what was found."""

    file: str
    purpose: str
    format_version: str = ""
    content_digest: str = ""
    results: tuple[RuleResult, ...] = ()
    failure: str = ""
    """Why the file could not be checked at all (absent, not HDF5, refused as unsafe), or empty."""
    notes: tuple[str, ...] = field(default=())

    @property
    def findings(self) -> tuple[Finding, ...]:
        """All findings, errors first, otherwise in the order of the rules."""
        rank = {Severity.ERROR: 0, Severity.WARNING: 1, Severity.NOTE: 2}
        return tuple(sorted((f for r in self.results for f in r.findings), key=lambda f: rank[f.severity]))

    def count(self, severity: Severity) -> int:
        """Number of findings of one severity."""
        return sum(f.severity is severity for f in self.findings)

    @property
    def exit_code(self) -> ExitCode:
        """0 valid, 1 findings of severity error, 2 could not be checked (or a rule broke)."""
        if self.failure or any(r.outcome is Outcome.BROKEN for r in self.results):
            return ExitCode.FAILED
        return ExitCode.FINDINGS if self.count(Severity.ERROR) else ExitCode.OK
