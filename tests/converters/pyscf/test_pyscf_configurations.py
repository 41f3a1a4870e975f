"""Witness at whole configurations: checked by the rules, and against PySCF's own annihilation operators."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import pytest
from expansions import random_expansion
from pyscf import fci, gto, mcscf, scf

import qwfx
from qwfx.converters import configurations
from qwfx.converters.configurations import configurations_by_sum, electrons_at_atoms
from qwfx.converters.pyscf import CIVectors, from_pyscf, with_ci_vectors
from qwfx.findings import Outcome, RuleResult
from qwfx.model import Expansion, System, Wavefunction, WitnessConfigurations
from qwfx.reference.determinants import determinant_sum, evaluate_determinants
from qwfx.validate import validate

NAMES = ["rhf", "rhf-cartesian", "rohf", "uhf", "rks", "core-potential", "ghost", "anion-no-down"]


def checked(wavefunction: Wavefunction, path: Path) -> RuleResult:
    qwfx.save(wavefunction, path)
    (result,) = [r for r in validate(path).results if r.rule == "witness-configurations"]
    return result


def witness_of(wavefunction: Wavefunction) -> WitnessConfigurations:
    assert wavefunction.witness is not None
    assert wavefunction.witness.configurations is not None
    return wavefunction.witness.configurations


@pytest.mark.parametrize("name", NAMES)
def test_mean_fields_pass_the_rule(name: str, calculation: Any, tmp_path: Path) -> None:
    wf = from_pyscf(calculation(name))
    found = witness_of(wf)
    assert np.shape(found.positions) == (8, wf.system.n_electrons, 3)
    assert (found.local_energy is None) == (name == "core-potential")
    result = checked(wf, tmp_path / "a.qwfx")
    assert result.outcome is Outcome.PASSED, result.findings
    assert result.coverage.startswith("D at 8 of 8 configurations")


@pytest.fixture(scope="module")
def rohf() -> Any:
    mol = gto.M(atom="Li 0 0 0; H 0.1 0.3 1.6; H 0.2 -0.4 3.1", basis="sto-3g", verbose=0, spin=1)
    return scf.ROHF(mol).run()


def amplitude(vector: np.ndarray, n_orbitals: int, electrons: tuple[int, int], phi: list[np.ndarray]) -> float:
    """<0| psi(r_N) ... psi(r_1) |vector>, psi(r) = sum_p phi_p(r) a_p, by the operators of PySCF, up first."""
    n = list(electrons)
    for spin, annihilate in enumerate((fci.addons.des_a, fci.addons.des_b)):
        for row in phi[spin]:
            pieces = [row[p] * np.asarray(annihilate(vector, n_orbitals, tuple(n), p)) for p in range(n_orbitals)]
            vector = np.sum(pieces, axis=0)
            n[spin] -= 1
    return float(vector.item())


def orbitals_at(mol: Any, C: np.ndarray, found: WitnessConfigurations, n_up: int, m: int) -> list[np.ndarray]:
    values = mol.eval_gto("GTOval", np.asarray(found.positions)[m]) @ C
    return [values[:n_up], values[n_up:]]


def test_values_by_the_annihilation_operators_of_pyscf(rohf: Any, tmp_path: Path) -> None:
    """D of three states of a full CI, one sign for all of them and for all configurations."""
    n_orbitals = rohf.mo_coeff.shape[1]
    solver = fci.FCI(rohf)
    solver.nroots = 3
    _, vectors = solver.kernel()
    wf = from_pyscf(rohf, ci=CIVectors(vectors, 0, n_orbitals, (3, 2)))
    found = witness_of(wf)
    assert checked(wf, tmp_path / "a.qwfx").outcome is Outcome.PASSED
    D = np.asarray(found.sign) * np.exp(found.log_abs)
    places = [orbitals_at(rohf.mol, rohf.mo_coeff, found, 3, m) for m in range(8)]
    theirs = np.array([[amplitude(np.asarray(v), n_orbitals, (3, 2), phi) for phi in places] for v in vectors])
    ratio = D / theirs
    assert abs(abs(ratio[0, 0]) - 1) < 1e-8
    np.testing.assert_allclose(ratio, ratio[0, 0], rtol=1e-7)


def test_a_core_is_as_if_its_orbitals_were_active(rohf: Any, tmp_path: Path) -> None:
    """Creating the core with PySCF's operators on the active state gives the same D."""
    mc = mcscf.CASCI(rohf, 4, 3)
    mc.fcisolver.nroots = 2
    mc.run()
    wf = from_pyscf(mc)
    found = witness_of(wf)
    assert checked(wf, tmp_path / "a.qwfx").outcome is Outcome.PASSED
    n = rohf.mo_coeff.shape[1]
    ratios = []
    for state, vector in enumerate(mc.ci):
        whole = np.zeros((fci.cistring.num_strings(n, 2), fci.cistring.num_strings(n, 1)))
        up, down = (fci.cistring.make_strings(range(4), k) << 1 for k in (2, 1))  # orbital 0 empty, 1 to 4 active
        rows, columns = fci.cistring.strs2addr(n, 2, up), fci.cistring.strs2addr(n, 1, down)
        whole[np.ix_(rows, columns)] = vector
        whole = fci.addons.cre_a(whole, n, (2, 1), 0)
        whole = fci.addons.cre_b(whole, n, (3, 1), 0)
        for m in range(8):
            theirs = amplitude(whole, n, (3, 2), orbitals_at(rohf.mol, mc.mo_coeff, found, 3, m))
            ratios.append(np.asarray(found.sign)[state, m] * np.exp(np.asarray(found.log_abs)[state, m]) / theirs)
    assert abs(abs(ratios[0]) - 1) < 1e-8
    np.testing.assert_allclose(ratios, ratios[0], rtol=1e-7)


def test_a_wrong_sign_in_the_file_is_found(rohf: Any, tmp_path: Path) -> None:
    wf = from_pyscf(mcscf.CASCI(rohf, 4, 3).run())
    assert wf.expansion is not None
    c = np.array(wf.expansion.coefficients)
    c[0, np.argsort(np.abs(c[0]))[-2]] *= -1
    wrong = replace(wf, expansion=replace(wf.expansion, coefficients=c))
    result = checked(wrong, tmp_path / "a.qwfx")
    assert result.outcome is Outcome.FOUND
    assert result.findings[0].where.startswith("/witness/configurations/log_abs")


def test_vectors_put_in_later_leave_no_witness_of_others(rohf: Any) -> None:
    base = from_pyscf(rohf)
    assert witness_of(base)
    _, vector = fci.FCI(rohf).kernel()
    later = with_ci_vectors(base, vector, n_core=0, n_active=rohf.mo_coeff.shape[1], electrons=(3, 2))
    assert later.witness is not None
    assert later.witness.configurations is None


def test_long_expansions_have_a_note(rohf: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(configurations, "MANY_ENTRIES", 3)
    wf = from_pyscf(mcscf.CASCI(rohf, 4, 3).run())
    assert wf.witness is not None
    assert wf.witness.configurations is None
    assert any("too long" in note for note in wf.provenance.steps[0]["notes"])


# --- the sum itself ------------------------------------------------------------------------------------------------


def system(n_up: int, n_down: int) -> System:
    return System(n_up, n_down, ("A", "B"), np.array([9, 1], np.int32), np.array([9.0, 1.0]),
                  np.array([[0.0, 0, 0], [1.0, 2.0, 0.5]]))  # fmt: skip


def planes(n: int, kind: type, seed: int = 3) -> Any:
    """Orbitals that are sums of Gaussians at random places, by formula."""
    rng = np.random.default_rng(seed)
    centers, exponents = rng.normal(size=(n, 3)), rng.uniform(0.3, 3, n)
    mix = rng.normal(size=(n, n)) + (1j * rng.normal(size=(n, n)) if kind is complex else 0)

    def orbitals(_name: str, points: np.ndarray) -> np.ndarray:
        d = points[:, None] - centers
        r2 = (d**2).sum(axis=2)
        g = np.exp(-exponents * r2)
        slopes = np.moveaxis(-2 * exponents[:, None] * d * g[..., None], 2, 0)
        return np.array([g, *slopes, (4 * exponents**2 * r2 - 6 * exponents) * g]) @ mix

    return orbitals


@pytest.mark.parametrize("kind", [float, complex])
@pytest.mark.parametrize("electrons", [(1, 0), (3, 2), (4, 4)])
def test_sum_against_rows_put_in_their_place(electrons: tuple[int, int], kind: type) -> None:
    """`evaluate_determinants` differentiates each determinant by its rows."""
    expansion = random_expansion(np.random.default_rng(5), electrons, 7, 20, 2, kind is complex)
    orbitals = planes(7, kind)
    found, why = configurations_by_sum(system(*electrons), expansion, orbitals, with_energies=True)
    assert found is not None, why
    total = determinant_sum(expansion, *electrons)
    for m, places in enumerate(np.asarray(found.positions)):
        mine = evaluate_determinants(total, orbitals("", places[: electrons[0]]), orbitals("", places[electrons[0] :]))
        for word in ("log_abs", "sign", "gradients", "laplacian"):
            theirs = np.asarray(getattr(found, word))[:, m]
            np.testing.assert_allclose(theirs, getattr(mine, word), rtol=1e-7, atol=1e-8, err_msg=word)


def test_strings_that_vanish_still_have_derivatives() -> None:
    """One determinant is exactly zero where others are not; its derivatives are not zero. Exact numbers by mpmath."""
    strings = np.array([[0b0111], [0b1011], [0b1101]], dtype=np.uint64)
    c = np.array([[0.5, -0.25, 0.75]])
    expansion = Expansion("a", "a", strings, np.zeros((1, 1), np.uint64), np.arange(4), np.zeros(3, np.int64), c)
    phi = np.random.default_rng(7).integers(-4, 5, size=(5, 3, 4)).astype(float)
    phi[0, 2, :3] = phi[0, 0, :3] + phi[0, 1, :3]
    found, why = configurations_by_sum(system(3, 0), expansion, lambda *_: phi, with_energies=False)
    assert found is not None, why

    def det(a: np.ndarray) -> float:
        return float(mpmath.det(mpmath.matrix(a.tolist())))

    occupied = ([0, 1, 2], [0, 1, 3], [0, 2, 3])
    assert det(phi[0][:, occupied[0]]) == 0
    D = sum(c[0, e] * det(phi[0][:, own]) for e, own in enumerate(occupied))
    sums, of_the_first = np.zeros((3, 4)), 0.0
    for electron, k in np.ndindex(3, 4):
        for e, own in enumerate(occupied):
            a = phi[0][:, own].copy()
            a[electron] = phi[k + 1][electron, own]
            sums[electron, k] += c[0, e] * det(a)
            of_the_first += abs(det(a)) if e == 0 else 0
    assert of_the_first > 1
    assert np.allclose(found.log_abs, np.log(abs(D)), rtol=0, atol=1e-13)
    assert np.allclose(found.gradients, sums[:, :3] / D, rtol=1e-12)
    assert np.allclose(found.laplacian, sums[:, 3].sum() / D, rtol=1e-12)


@pytest.mark.parametrize("phi", [np.ones((5, 2, 3)), np.ones((5, 2, 3)) + 1e-13 * np.arange(30).reshape(5, 2, 3) ** 2])
def test_where_d_is_lost_in_rounding_nothing_is_told(phi: np.ndarray) -> None:
    expansion = random_expansion(np.random.default_rng(5), (2, 0), 3, 1)
    found, why = configurations_by_sum(system(2, 0), expansion, lambda *_: phi, with_energies=False)
    assert found is None
    assert "vanished" in why


def test_electrons_are_in_every_shell() -> None:
    """Of neon's, some are as near as the innermost shell, none on a plane of symmetry, all where density is."""
    places = electrons_at_atoms(System(5, 5, ("Ne",), np.array([10], np.int32), np.array([10.0]), np.zeros((1, 3))))
    distance = np.linalg.norm(places, axis=2)
    assert distance.min() < 0.15
    assert 1.0 < distance.max() < 8
    assert np.abs(places).min() > 0
