"""Total spin against PySCF's, and cusps of real files with factors of each kind."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from expansions import random_expansion
from pyscf import fci, gto, mcscf, scf
from pyscf.fci import cistring

from qwfx.converters.pyscf import from_pyscf
from qwfx.findings import Outcome, Severity
from qwfx.model import JastrowTerm, Wavefunction
from qwfx.reference.determinants import determinant_sum
from qwfx.rules.algebra_spin import spin_square
from qwfx.storage import save
from qwfx.trial import starting_jastrow
from qwfx.validate import validate


@pytest.mark.parametrize(("n_up", "n_down"), [(2, 2), (3, 1), (1, 3), (3, 0), (0, 2), (4, 3), (1, 1)])
@pytest.mark.parametrize("seed", range(4))
def test_spin_square_is_that_of_pyscf(n_up: int, n_down: int, seed: int) -> None:
    """PySCF orders operators as F15 does, up to one sign for all."""
    norb = 5
    expansion = random_expansion(np.random.default_rng(seed), (n_up, n_down), norb, 9, 2)
    total = determinant_sum(expansion, n_up, n_down)
    strings = [cistring.make_strings(range(norb), n).tolist() for n in (n_up, n_down)]
    places = [
        [own.index(int(s)) for s in member[:, 0]]
        for own, member in zip(strings, (expansion.up_strings, expansion.down_strings), strict=True)
    ]
    for state, square in enumerate(spin_square(total, norb)):
        vector = np.zeros((len(strings[0]), len(strings[1])))
        vector[np.array(places[0])[total.rows], np.array(places[1])[total.columns]] = total.coefficients[state]
        vector /= np.linalg.norm(vector)
        assert square == pytest.approx(fci.spin_op.spin_square0(vector, norb, (n_up, n_down))[0], abs=1e-10)


def outcome(wf: Wavefunction, tmp_path: Path, rule: str) -> Any:
    save(wf, tmp_path / "x.qwfx")
    report = validate(tmp_path / "x.qwfx", rules=[rule])
    return next(r for r in report.results if r.rule == rule)


def test_spin_of_real_calculations(tmp_path: Path) -> None:
    mol = gto.M(atom="O 0 0 0; O 0 0 1.2", basis="sto-3g", spin=2, verbose=0)
    mf = scf.ROHF(mol).run()
    found = outcome(from_pyscf(mcscf.CASCI(mf, 4, (4, 2)).run()), tmp_path, "total-spin")
    assert found.outcome is Outcome.PASSED
    assert "S = 1.0000" in found.measured
    two = outcome(from_pyscf(scf.UHF(mol).run()), tmp_path, "total-spin")
    assert two.outcome is Outcome.NOT_EVALUATED
    # The component of the triplet with as many up as down electrons: right, but said.
    mc = mcscf.CASCI(mf, 4, (3, 3))
    mc.fcisolver.nroots = 4
    mc.run()
    states = from_pyscf(mc)
    result = outcome(states, tmp_path, "total-spin")
    assert any(f.severity is Severity.NOTE and f.found == "S = 1" for f in result.findings)
    # Signs of another order of operators: up and down interleaved.
    assert states.expansion is not None
    e = states.expansion
    total = determinant_sum(e, 8, 8)
    pairs = zip(total.up[total.rows], total.down[total.columns], strict=True)
    sign = [(-1) ** sum(int(q < p) for p in up for q in down) for up, down in pairs]
    wrong = replace(states, expansion=replace(e, coefficients=np.asarray(e.coefficients) * sign))
    assert any(f.severity is Severity.WARNING for f in outcome(wrong, tmp_path, "total-spin").findings)


def nuclear_term(slopes: list[float]) -> JastrowTerm:
    """A term whose slope at both nuclei is this: polynomials of 3 bohr."""
    L, C = 3.0, 3
    c = [[0.0, slope / (-L) ** C] for slope in slopes]
    members = {"channel": np.array(["up", "down"]), "atoms": np.array([0, 1]), "cutoff": np.full(2, L),
               "coefficients": np.array(c)}  # fmt: skip
    return JastrowTerm("cutoff-polynomial", {"body": "electron-nucleus", "smoothness": C}, members)


def test_cusps_of_gaussian_functions(tmp_path: Path) -> None:
    wf = from_pyscf(scf.RHF(gto.M(atom="Li 0 0 0; H 0 0 1.6", basis="6-31g", verbose=0)).run())
    wf = replace(wf, jastrow=starting_jastrow(wf.system))
    assert outcome(wf, tmp_path, "electron-cusps").outcome is Outcome.PASSED
    notes = outcome(wf, tmp_path, "nuclear-cusps").findings
    assert [f.severity for f in notes] == [Severity.NOTE] * len(notes)
    assert "meets Li1" in notes[0].expected or "meets Li" in notes[0].expected
    assert float(notes[0].found) == pytest.approx(0, abs=1e-3)  # Gaussian functions have no slope at all
    term = nuclear_term([-3.0, -3.0])
    dressed = replace(wf, jastrow={**wf.jastrow, "nuclei": term})
    found = outcome(dressed, tmp_path, "nuclear-cusps").findings  # right at lithium, wrong at hydrogen
    assert {f.severity for f in found} == {Severity.WARNING}
    assert all("H" in f.expected for f in found)
    assert float(found[0].found) == pytest.approx(-3, abs=1e-3)


def test_cusps_over_a_core_potential(tmp_path: Path) -> None:
    mol = gto.M(atom="C 0 0 0; O 0 0 1.1", basis="ccecpccpvdz", ecp="ccecp", verbose=0)
    wf = from_pyscf(scf.RHF(mol).run())
    wf = replace(wf, jastrow=starting_jastrow(wf.system))
    assert outcome(wf, tmp_path, "nuclear-cusps").outcome is Outcome.PASSED
    wf = replace(wf, jastrow={**wf.jastrow, "nuclei": nuclear_term([-4.0, 0.0])})
    found = outcome(wf, tmp_path, "nuclear-cusps").findings
    assert all("which has a core potential" in f.expected for f in found)
    assert all(float(f.found) == pytest.approx(-4, abs=1e-2) for f in found)
    assert all("an up electron" in f.expected for f in found)


def test_pairs_are_named(tmp_path: Path) -> None:
    wf = from_pyscf(scf.UHF(gto.M(atom="N 0 0 0", basis="6-31g", spin=3, verbose=0)).run())
    (name, term), = starting_jastrow(wf.system).items()
    c = np.array(term.members["coefficients"])
    rows = term.members["channel"].tolist()
    c[rows.index("up_up")] *= 2
    wf = replace(wf, jastrow={name: JastrowTerm(term.form, term.attributes, {**term.members, "coefficients": c})})
    (finding,) = outcome(wf, tmp_path, "electron-cusps").findings
    assert "an up and an up electron" in finding.expected
    assert float(finding.found) == pytest.approx(0.5, abs=1e-3)
    only_nuclei = JastrowTerm("pade", {"body": "electron-nucleus"}, {
        "channel": np.array(["up"]), "atoms": np.array([0]), "a": np.zeros(1), "b": np.ones(1)})  # fmt: skip
    assert outcome(replace(wf, jastrow={"n": only_nuclei}), tmp_path, "electron-cusps").outcome is Outcome.NOT_EVALUATED
