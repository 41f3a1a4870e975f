"""Every rule has a page, and the examples on it do what the page says."""

from __future__ import annotations

import re
from importlib.resources import files

import pytest
from corpus.edits import blocks_of
from corpus.golden import load, with_finding

from qwfx.findings import Severity
from qwfx.rules import TIERS, all_rules, page_body, rule_page

SECTIONS = ["What it checks", "Why it matters", "How to mend", "Fails", "Passes", "Source"]
NAMES = [rule.name for rule in all_rules()]
RANK = {Severity.NOTE: 0, Severity.WARNING: 1, Severity.ERROR: 2}


def test_pages_and_registry_name_the_same_rules() -> None:
    pages = {p.name.removesuffix(".md") for p in (files("qwfx.rules") / "pages").iterdir()}
    assert pages == set(NAMES)


def test_names_are_words_and_tiers_come_in_order() -> None:
    assert all(re.fullmatch(r"[a-z]+(-[a-z]+)*", name) for name in NAMES)
    tiers = [TIERS.index(rule.tier) for rule in all_rules()]
    assert tiers == sorted(tiers)
    assert set(tiers) == set(range(len(TIERS)))


@pytest.mark.parametrize("name", NAMES)
def test_page_has_all_sections(name: str) -> None:
    body = page_body(name)
    assert re.findall(r"^## (.*)$", body, re.MULTILINE) == SECTIONS
    parts = re.split(r"^## .*$", body, flags=re.MULTILINE)[1:]
    assert all(len(part.strip()) > 10 for part in parts)
    assert set(blocks_of(body)) == {"Fails", "Passes"}


@pytest.mark.parametrize("rule", all_rules(), ids=NAMES)
def test_printed_page_says_what_the_registry_says(rule) -> None:  # type: ignore[no-untyped-def]
    page = rule_page(rule.name)
    assert page.startswith(f"# {rule.name}\n")
    for text in (rule.summary[1:], f"tier: {rule.tier}", f"severity: {rule.severity.value}", rule.cost):
        assert text in page
    for member in (*rule.premise.members, *rule.premise.any_of, *rule.premise.absent, *rule.premise.rules):
        assert member in page


@pytest.mark.parametrize("name", NAMES)
def test_failing_example_fires_and_the_mended_one_does_not(name: str) -> None:
    """Read from the golden reports, which test_rules_golden holds equal to what the validator says of the examples."""
    rule = next(r for r in all_rules() if r.name == name)
    golden = load(name)
    failing, mended = (next(r for r in golden[h]["rules"] if r["rule"] == name) for h in ("fails", "passes"))
    assert failing["outcome"] == "found"
    worst = max(RANK[Severity(f["severity"])] for f in failing["findings"])
    assert worst == RANK[rule.severity]
    for finding in failing["findings"]:
        assert finding["where"].startswith("/")
        assert min(len(finding[key]) for key in ("expected", "found", "remedy")) > 0
    assert mended["outcome"] in ("passed", "found"), mended["reason"]
    assert max((RANK[Severity(f["severity"])] for f in mended["findings"]), default=-1) < worst
    assert golden["passes"]["counts"]["findings"]["error"] == 0


@pytest.mark.parametrize("name", NAMES)
def test_page_quotes_what_its_failing_example_gives(name: str) -> None:
    assert with_finding(page_body(name), load(name)["fails"], name) == page_body(name)
