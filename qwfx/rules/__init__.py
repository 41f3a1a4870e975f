"""The rules of the validator. Importing this registers all of them; it imports nothing heavy."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

# The order of registration is the order of the report.
from qwfx.rules import (  # isort: skip
    structure,
    consistency_basis,
    consistency_system,
    consistency_potentials,
    consistency_orbitals,
    consistency_expansion,
    consistency_hamiltonian,
    consistency_jastrow,
    consistency_tables,
    algebra_orbitals,
    algebra_expansion,
    algebra_spin,
    algebra_cusps,
    algebra_hamiltonian,
    witness,
    digests,
)
from qwfx.rules.registry import PURPOSES, TIERS, Rule, registered

__all__ = ["PURPOSES", "TIERS", "Rule", "all_rules", "rule_page"]

_MODULES = (
    structure,
    consistency_basis,
    consistency_system,
    consistency_potentials,
    consistency_orbitals,
    consistency_expansion,
    consistency_hamiltonian,
    consistency_jastrow,
    consistency_tables,
    algebra_orbitals,
    algebra_expansion,
    algebra_spin,
    algebra_cusps,
    algebra_hamiltonian,
    witness,
    digests,
)


@cache
def all_rules() -> tuple[Rule, ...]:
    """All rules, by tier, in the order in which they run."""
    return registered()


def page_body(name: str) -> str:
    """The written part of a rule's page: `qwfx/rules/pages/NAME.md`."""
    return (files("qwfx.rules") / "pages" / f"{name}.md").read_text(encoding="utf-8")


def rule_page(name: str) -> str:
    """The page of a rule as Markdown: what the registry knows, then the written part."""
    rule = {r.name: r for r in all_rules()}[name]
    mildness = "" if rule.severity.value == "note" else " at most"
    head = (
        f"# {rule.name}\n\n{rule.summary[0].upper()}{rule.summary[1:]}.\n\n"
        f"- tier: {rule.tier}\n- severity: {rule.severity.value}{mildness}\n"
        f"- premise: {rule.premise.sentence()}\n- cost: {rule.cost}\n- purposes: {', '.join(rule.purposes)}\n\n"
    )
    return head + page_body(name) + EXAMPLES


EXAMPLES = """
The examples name a small valid file (they are built by tests/corpus/valid.py) and what is changed in it.
"""
