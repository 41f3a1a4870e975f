"""Runs rules over a file: premises, grouping, and a fault of a rule never taken for 'no findings'."""

from __future__ import annotations

import traceback
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path

from qwfx.errors import EvaluationError, QwfxError, UnsupportedError
from qwfx.findings import Finding, Outcome, RuleResult, Severity
from qwfx.rules.inspection import Inspection, member_of
from qwfx.rules.registry import Covered, Measured, PremiseError, Problem, Rule, foundation

__all__ = ["group", "run_rules"]

GATE = "version"
"""The rule whose errors leave nothing else to say."""

_RANK = {Severity.ERROR: 0, Severity.WARNING: 1, Severity.NOTE: 2}


def run_rules(inspection: Inspection, rules: Sequence[Rule], skipped: dict[str, str]) -> tuple[RuleResult, ...]:
    """Run `rules` in their order; `skipped` gives the reason for those that were not asked for."""
    results: dict[str, RuleResult] = {}
    for number, entry in enumerate(rules):
        if inspection.progress is not None:
            inspection.progress(entry.name, number / len(rules))
        if entry.name in skipped:
            result = RuleResult(entry.name, entry.tier, Outcome.SKIPPED, reason=skipped[entry.name])
        elif reason := _unmet(entry, inspection, results):
            result = RuleResult(entry.name, entry.tier, Outcome.NOT_EVALUATED, reason=reason)
        else:
            result = _run(entry, inspection)
        results[entry.name] = result
        inspection.record(entry.name, result.findings)
    return tuple(results.values())


def _unmet(entry: Rule, inspection: Inspection, results: dict[str, RuleResult]) -> str:
    """Why the premise of a rule does not hold; empty if it does."""
    premise = entry.premise
    for member in premise.members:
        if not inspection.has(member):
            return f"the file has no {member}"
    if premise.any_of and not any(map(inspection.has, premise.any_of)):
        return f"the file has no {' and no '.join(premise.any_of)}"
    for member in premise.absent:
        if inspection.has(member):
            return f"the file has {member}, which this rule does not cover"
    base = foundation(entry.name)
    for name in sorted(base):
        outcome = results[name].outcome if name in results else Outcome.SKIPPED
        if outcome is Outcome.BROKEN:
            return f"rule {name}, on which it rests, broke"
        if outcome is Outcome.SKIPPED:
            return f"rule {name}, on which it rests, was skipped"
        if name == GATE and any(f.severity is Severity.ERROR for f in results[name].findings):
            return f"rule {name} found that this file is not of a version that can be read"
    for member in premise.members:
        if culprit := inspection.damaged(member, base):
            return f"rule {culprit} found an error in {member}"
    present = [m for m in premise.any_of if inspection.has(m)]
    culprits = [inspection.damaged(m, base) for m in present]
    if present and all(culprits):
        return f"rule {culprits[0]} found an error in {present[0]}"
    return ""


def _run(entry: Rule, inspection: Inspection) -> RuleResult:
    problems: list[Problem] = []
    measured: list[str] = []
    covered: list[str] = []
    try:
        for remark in entry.check(inspection):
            if isinstance(remark, Problem):
                problems.append(remark)
            elif isinstance(remark, Measured):
                measured.append(remark.text)
            elif isinstance(remark, Covered):
                covered.append(remark.text)
    except PremiseError as reason:
        if not problems:
            return RuleResult(entry.name, entry.tier, Outcome.NOT_EVALUATED, reason=str(reason))
        covered.append(f"stopped early: {reason}")
    except (UnsupportedError, EvaluationError) as limit:
        return RuleResult(entry.name, entry.tier, Outcome.NOT_EVALUATED, reason=str(limit))
    except QwfxError as fault:
        # The file itself cannot be read here (a damaged chunk, say): that is a finding about the file.
        problems.append(
            Problem(
                fault.where or "/",
                fault.expected or "data that can be read",
                fault.found,
                fault.remedy or "restore the file",
                Severity.ERROR,
            )
        )
    except Exception as fault:  # whatever it is, it must show as a broken rule and never as silence
        return RuleResult(entry.name, entry.tier, Outcome.BROKEN, reason=_describe(fault))
    findings = tuple(_finding(entry, p) for p in group(problems))
    return RuleResult(
        entry.name,
        entry.tier,
        Outcome.FOUND if findings else Outcome.PASSED,
        coverage="; ".join(covered),
        measured="; ".join(measured),
        findings=findings,
    )


def _describe(fault: Exception) -> str:
    frames = traceback.extract_tb(fault.__traceback__)
    place = f" at {Path(frames[-1].filename).name}:{frames[-1].lineno}" if frames else ""
    return f"{type(fault).__name__}: {fault}{place}"


def _finding(entry: Rule, problem: Problem) -> Finding:
    severity = problem.severity or entry.severity
    return Finding(entry.name, severity, problem.where, problem.expected, problem.found, problem.remedy, problem.count)


def group(problems: Iterable[Problem]) -> list[Problem]:
    """Join problems of one cause: same member, severity and remedy. The first stands for all, with their number."""
    joined: dict[tuple[object, ...], Problem] = {}
    for problem in problems:
        key = (_family(problem.where), problem.severity, problem.remedy)
        if key in joined:
            joined[key] = replace(joined[key], count=joined[key].count + problem.count)
        else:
            joined[key] = problem
    return sorted(joined.values(), key=lambda p: _RANK[p.severity] if p.severity else -1)


def _family(where: str) -> str:
    """Where without its index: what may be joined. Attributes stay apart."""
    return f"{member_of(where)}@{where.partition('@')[2]}" if "@" in where else member_of(where)
