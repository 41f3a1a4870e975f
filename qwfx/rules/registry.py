"""The registry of rules: the one source for the engine, for ``qwfx explain`` and for the report formats.

A rule is a small generator over an `Inspection`. It yields `Problem`, `Measured` and `Covered`; the engine adds the
name and the severity, groups like problems and catches whatever goes wrong. A rule that finds, on looking closer, that
it has nothing to judge raises `PremiseError` with the reason.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal, TypeAlias

from qwfx.findings import Severity
from qwfx.reference.faults import Fault

if TYPE_CHECKING:
    from qwfx.rules.inspection import Inspection

__all__ = [
    "PURPOSES",
    "TIERS",
    "Covered",
    "Measured",
    "Premise",
    "PremiseError",
    "Problem",
    "Purpose",
    "Remark",
    "Rule",
    "foundation",
    "register",
    "registered",
    "rule",
]

Tier: TypeAlias = Literal["structure", "consistency", "algebra", "witness", "digests"]
TIERS: tuple[Tier, ...] = ("structure", "consistency", "algebra", "witness", "digests")

Purpose: TypeAlias = Literal["orbitals", "trial", "hamiltonian"]
PURPOSES: tuple[Purpose, ...] = ("orbitals", "trial", "hamiltonian")


@dataclass(frozen=True)
class Problem:
    """One thing that a rule found, before the engine makes a `qwfx.findings.Finding` of it."""

    where: str
    """Member with the first index concerned: ``/basis/exponents[12]``, ``/system@n_up``."""
    expected: str
    found: str
    remedy: str
    severity: Severity | None = None
    """None: the severity of the rule. A rule may state a milder one, never a worse one."""
    count: int = 1

    @classmethod
    def of(cls, fault: Fault, count: int = 1) -> Problem:
        """A fault that evaluators find too, in the same words."""
        return cls(fault.where, fault.expected, fault.found, fault.remedy, count=count)


@dataclass(frozen=True)
class Measured:
    """The figure that decided."""

    text: str


@dataclass(frozen=True)
class Covered:
    """What was looked at."""

    text: str


class PremiseError(Exception):
    """Raised by a rule whose premise turns out not to hold; the argument is the reason, for the report."""


Remark: TypeAlias = Problem | Measured | Covered
Check: TypeAlias = "Callable[[Inspection], Iterator[Remark]]"


@dataclass(frozen=True)
class Premise:
    """What must hold before a rule can say anything.

    `members`: all of these present, and not found damaged by the rules that this one rests on. `any_of`: at least one
    of these, likewise. `absent`: none of these (features that the evaluator does not cover). `rules`: the rules that
    this one rests on, and theirs in turn; only their errors about `members` and `any_of` count.
    """

    members: tuple[str, ...] = ()
    any_of: tuple[str, ...] = ()
    absent: tuple[str, ...] = ()
    rules: tuple[str, ...] = ()

    def sentence(self) -> str:
        """The premise in words, for the page of the rule."""
        parts = []
        if self.members:
            parts.append(f"the file has {' and '.join(self.members)}")
        if self.any_of:
            parts.append(f"the file has {' or '.join(self.any_of)}")
        if self.absent:
            parts.append(f"the file has no {' and no '.join(self.absent)}")
        if self.rules:
            parts.append(f"no error about them from {', '.join(self.rules)}")
        return "; ".join(parts) or "none"


@dataclass(frozen=True)
class Rule:
    """One rule with all that is known of it apart from its page."""

    name: str
    tier: Tier
    severity: Severity
    """The worst severity that its findings have."""
    premise: Premise
    cost: str
    """What it reads and computes, in words."""
    purposes: tuple[Purpose, ...]
    summary: str
    check: Check


_RULES: dict[str, Rule] = {}


def register(entry: Rule) -> None:
    """Add one rule; names are unique and the rules it rests on must be registered before it."""
    if entry.name in _RULES:
        raise ValueError(f"rule {entry.name!r} is registered twice")
    unknown = [name for name in entry.premise.rules if name not in _RULES]
    if unknown:
        raise ValueError(f"rule {entry.name!r} rests on {unknown}, which are not registered before it")
    _RULES[entry.name] = entry


def rule(
    *,
    name: str,
    tier: Tier,
    severity: Severity,
    summary: str,
    premise: Premise | None = None,
    cost: str = "",
    purposes: tuple[Purpose, ...] = PURPOSES,
) -> Callable[[Check], Check]:
    """Decorator that registers a generator function as a rule.

    Rules of the tiers that read arrays rest on ``dimensions`` (and so on ``schema`` and ``version``) without saying so.
    """

    wanted = premise or Premise()
    if tier in ("consistency", "algebra", "witness"):
        wanted = replace(wanted, rules=("dimensions", *wanted.rules))

    price = cost or ("the outline" if tier == "structure" else "the small data sets that it is about")

    def wrap(check: Check) -> Check:
        register(Rule(name, tier, severity, wanted, price, purposes, summary, check))
        return check

    return wrap


def registered() -> tuple[Rule, ...]:
    """All rules by tier, within a tier in the order of registration."""
    return tuple(sorted(_RULES.values(), key=lambda r: TIERS.index(r.tier)))


def foundation(name: str) -> frozenset[str]:
    """The names of all rules on which rule `name` rests, directly or through others."""
    direct = _RULES[name].premise.rules
    return frozenset(direct).union(*(foundation(other) for other in direct))
