"""`validate`: purposes, choice of rules, and files that cannot be checked."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from corpus.edits import build

from qwfx.errors import UnsupportedError
from qwfx.findings import ExitCode, Outcome, Report
from qwfx.rules import all_rules
from qwfx.validate import validate


def outcomes(report: Report) -> dict[str, Outcome]:
    return {r.rule: r.outcome for r in report.results}


@pytest.fixture(scope="module")
def hydrogen(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build("hydrogen", tmp_path_factory.mktemp("validate") / "hydrogen.qwfx")


@pytest.mark.parametrize(
    ("name", "purpose"),
    [("hydrogen", "trial"), ("water", "orbitals"), ("lattice", "hamiltonian"), ("integrals_only", "hamiltonian")],
)
def test_purpose_follows_the_content_and_the_report_says_so(name: str, purpose: str, tmp_path: Path) -> None:
    report = validate(build(name, tmp_path / "a.qwfx"))
    assert report.purpose == purpose
    assert any(purpose in note for note in report.notes)
    assert report.exit_code is ExitCode.OK
    assert Outcome.SKIPPED not in outcomes(report).values()
    assert report.format_version == "1.0"
    assert len(report.content_digest) == 64


def test_chosen_purpose_skips_the_rules_of_others(hydrogen: Path) -> None:
    report = validate(hydrogen, purpose="orbitals")
    result = outcomes(report)
    assert result["string-order"] is result["coulomb-bounds"] is Outcome.SKIPPED
    assert result["orthonormality"] is Outcome.PASSED
    reason = next(r.reason for r in report.results if r.rule == "string-order")
    assert reason == "not for purpose orbitals"
    assert outcomes(validate(hydrogen, purpose="hamiltonian"))["orthonormality"] is Outcome.SKIPPED


def test_purpose_that_the_file_cannot_serve(tmp_path: Path) -> None:
    report = validate(build("water", tmp_path / "a.qwfx"), purpose="trial")
    (finding,) = [f for f in report.findings if f.rule == "purpose-members"]
    assert finding.where == "/expansion"
    assert "--purpose orbitals" in finding.remedy
    assert report.exit_code is ExitCode.FINDINGS


def test_unknown_purpose_and_rule(hydrogen: Path) -> None:
    with pytest.raises(UnsupportedError, match="no purpose"):
        validate(hydrogen, purpose="sampling")
    with pytest.raises(UnsupportedError, match="orthonormality"):
        validate(hydrogen, rules=["orthonormalty"])
    with pytest.raises(UnsupportedError, match="no rule or tier"):
        validate(hydrogen, skip=["zzzz"])


def test_choice_of_one_rule_runs_what_it_rests_on(hydrogen: Path) -> None:
    report = validate(hydrogen, rules=["orthonormality"])
    ran = {name for name, outcome in outcomes(report).items() if outcome is Outcome.PASSED}
    assert {"orthonormality", "version", "schema", "dimensions", "function-count", "finite-numbers"} <= ran
    assert outcomes(report)["witness-orbitals"] is Outcome.SKIPPED
    assert any("rest on them" in note and "function-count" in note for note in report.notes)


def test_choice_of_a_tier_and_skipping(hydrogen: Path) -> None:
    report = validate(hydrogen, rules=["digests"])
    assert outcomes(report)["member-digests"] is outcomes(report)["content-digest"] is Outcome.PASSED
    report = validate(hydrogen, skip=["digests", "orthonormality"])
    skipped = {name for name, outcome in outcomes(report).items() if outcome is Outcome.SKIPPED}
    assert skipped == {"member-digests", "content-digest", "orthonormality"}
    assert len(report.results) == len(all_rules())


def test_files_that_cannot_be_checked(tmp_path: Path) -> None:
    absent = validate(tmp_path / "absent.qwfx")
    assert absent.failure
    assert absent.exit_code is ExitCode.FAILED
    text = tmp_path / "text.qwfx"
    text.write_text("not HDF5")
    assert validate(text).exit_code is ExitCode.FAILED
    assert str(text) in validate(text).failure
    assert validate(tmp_path).exit_code is ExitCode.FAILED


def test_truncated_file_is_a_failure_not_a_crash(hydrogen: Path, tmp_path: Path) -> None:
    whole = hydrogen.read_bytes()
    for part in (0.2, 0.6, 0.95):
        cut = tmp_path / "cut.qwfx"
        cut.write_bytes(whole[: int(len(whole) * part)])
        report = validate(cut)
        assert report.exit_code is not ExitCode.OK
        assert not any(r.outcome is Outcome.BROKEN for r in report.results)


def test_unknown_major_version_leaves_the_rest_unevaluated(tmp_path: Path) -> None:
    report = validate(build('hydrogen\n/@version = "2.0"', tmp_path / "a.qwfx"))
    result = outcomes(report)
    assert result.pop("version") is Outcome.FOUND
    result.pop("purpose-members")
    assert set(result.values()) == {Outcome.NOT_EVALUATED}


def test_progress_is_told_the_phase(hydrogen: Path) -> None:
    seen: list[tuple[str, float]] = []
    validate(hydrogen, progress=lambda phase, fraction: seen.append((phase, fraction)))
    assert "orthonormality" in {phase for phase, _ in seen}
    assert all(0 <= fraction <= 1 for _, fraction in seen)


DAMAGES = ("absent", "empty", "text", "huge", "negative")


@pytest.mark.parametrize("damage", DAMAGES)
def test_no_rule_breaks_on_a_damaged_member(damage: str, tmp_path: Path) -> None:
    """Whatever one member is replaced by, each rule finds something, passes, or is not evaluated."""
    import h5py

    base = build("helium", tmp_path / "base.qwfx")
    with h5py.File(base) as file:
        members: list[str] = []
        file.visititems(lambda name, node: members.append(name))
    for member in members:
        path = tmp_path / "damaged.qwfx"
        path.write_bytes(base.read_bytes())
        with h5py.File(path, "r+") as file:
            if not _spoil(file, member, damage):
                continue
        report = validate(path)
        broken = [r for r in report.results if r.outcome is Outcome.BROKEN]
        assert not broken, (member, broken)
        # Digests see any change; only what is optional may be absent, and then /digests misses it.
        assert report.exit_code is not ExitCode.OK, member


def _spoil(file: Any, member: str, damage: str) -> bool:
    node = file[member]
    kind = getattr(getattr(node, "dtype", None), "kind", "")
    if damage in ("huge", "negative"):
        if kind not in "if" or not kind:
            return False
        node[...] = -5 if damage == "negative" else (100 if node.dtype.itemsize == 1 else 1_000_003)
        return True
    del file[member]
    if damage != "absent":
        file[member] = [0.0][:0] if damage == "empty" else [b"text"]
    return True
