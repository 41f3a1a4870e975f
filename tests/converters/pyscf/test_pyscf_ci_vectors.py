"""CI vectors in and out: phases against a Hamiltonian made operator by operator, and against PySCF's energies."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from operators import State, annihilate, create, energy
from pyscf import ao2mo, fci, gto, mcscf, scf

import qwfx
from qwfx.converters.pyscf import CIVectors, expansion_from_ci, from_pyscf, to_ci_vectors, with_ci_vectors
from qwfx.converters.pyscf import energy as qwfx_energy
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.findings import Outcome, Severity
from qwfx.model import Expansion, Wavefunction
from qwfx.reference.determinants import DeterminantSum, determinant_sum
from qwfx.validate import validate


def molecule() -> Any:
    return gto.M(atom="H 0 0 0; H 0 0.1 1.5; H 0.2 0 3.1; H 0 0 4.4; H 0.1 0.3 6", unit="bohr", basis="sto-3g",
                 spin=1, verbose=0)  # fmt: skip


def integrals(mf: Any) -> tuple[np.ndarray, np.ndarray]:
    C = mf.mo_coeff
    return C.T @ mf.get_hcore() @ C, ao2mo.restore(1, ao2mo.kernel(mf.mol, C), C.shape[1])


@pytest.fixture(scope="module")
def rohf() -> Any:
    return scf.ROHF(molecule()).run()


def test_phases_by_a_hamiltonian_made_operator_by_operator(rohf: Any) -> None:
    """A wrong order of operators anywhere changes the energy of every state."""
    mc = mcscf.CASCI(rohf, 4, 3)  # a core of one orbital
    mc.fcisolver.nroots = 3
    mc.run()
    wf = from_pyscf(mc)
    assert wf.expansion is not None
    total = determinant_sum(wf.expansion, 3, 2)
    h, eri = integrals(rohf)
    for state in range(3):
        assert energy(total, state, h, eri, rohf.mol.energy_nuc()) == pytest.approx(mc.e_tot[state], abs=1e-9)
    sound = np.asarray(wf.expansion.coefficients)
    flipped = sound * np.where(np.arange(sound.shape[1]) % 3, 1, -1)
    wrong = determinant_sum(Expansion(**{**vars(wf.expansion), "coefficients": flipped}), 3, 2)
    assert abs(energy(wrong, 0, h, eri, rohf.mol.energy_nuc()) - mc.e_tot[0]) > 1e-3


def test_full_ci_of_a_solver(rohf: Any) -> None:
    solver = fci.FCI(rohf)
    total, vector = solver.kernel()
    wf = with_ci_vectors(from_pyscf(rohf), vector, n_core=0, n_active=5, electrons=(3, 2))
    assert wf.expansion is not None
    h, eri = integrals(rohf)
    found = energy(determinant_sum(wf.expansion, 3, 2), 0, h, eri, rohf.mol.energy_nuc())
    assert found == pytest.approx(total, abs=1e-9)


def selected(rohf: Any) -> tuple[Any, Any]:
    solver = fci.selected_ci.SCI(rohf.mol)
    solver.ci_coeff_cutoff = solver.select_cutoff = 5e-2
    h, eri = integrals(rohf)
    total, vector = solver.kernel(h, eri, 5, (3, 2), ecore=rohf.mol.energy_nuc())
    return total, vector


def test_selected_ci(rohf: Any) -> None:
    total, vector = selected(rohf)
    assert vector.size < 100
    base = from_pyscf(rohf)
    h, eri = integrals(rohf)
    for wf in (
        with_ci_vectors(base, vector, n_core=0, n_active=5, electrons=(3, 2)),
        with_ci_vectors(base, np.asarray(vector), strings=vector._strs, n_core=0, n_active=5, electrons=(3, 2)),
    ):
        assert wf.expansion is not None
        found = energy(determinant_sum(wf.expansion, 3, 2), 0, h, eri, rohf.mol.energy_nuc())
        assert found == pytest.approx(total, abs=1e-9)
    with pytest.raises(ConversionError, match="elements"):
        with_ci_vectors(base, np.asarray(vector), n_core=0, n_active=5, electrons=(3, 2))


def test_selected_ci_in_an_active_space(rohf: Any) -> None:
    mc = mcscf.CASCI(rohf, 4, 3)
    mc.fcisolver = fci.SCI(rohf.mol)
    mc.run()
    wf = from_pyscf(mc)
    h, eri = integrals(rohf)
    assert wf.expansion is not None
    found = energy(determinant_sum(wf.expansion, 3, 2), 0, h, eri, rohf.mol.energy_nuc())
    assert found == pytest.approx(mc.e_tot, abs=1e-9)


def test_roots_over_different_strings(rohf: Any) -> None:
    """Each state over strings of its own: the expansion is over all of them."""
    one = np.array([[0.8, 0.0], [0.1, 0.6]])
    two = np.array([[1.0]])
    e = expansion_from_ci(
        [_marked(one, ([0b0111, 0b1011], [0b0011, 0b0101])), _marked(two, ([0b1101], [0b0011]))],
        n_core=1, n_active=4, electrons=(3, 2), n_orbitals=(5, 5),
    )  # fmt: skip
    assert np.asarray(e.up_strings)[:, 0].tolist() == [0b01111, 0b10111, 0b11011]
    assert np.asarray(e.coefficients).shape == (2, 4)
    assert np.abs(np.asarray(e.coefficients)).sum(axis=1).tolist() == pytest.approx([1.5, 1.0])


class _Marked(np.ndarray):
    _strs: Any


def _marked(values: np.ndarray, strings: tuple[list[int], list[int]]) -> Any:
    vector = values.view(_Marked)
    vector._strs = tuple(np.array(s) for s in strings)
    return vector


def test_small_coefficients_are_left_out_with_their_weight(rohf: Any) -> None:
    mc = mcscf.CASCI(rohf, 4, 3)
    mc.fcisolver.nroots = 2
    mc.run()
    whole, part = from_pyscf(mc).expansion, from_pyscf(mc, ci_threshold=0.05).expansion
    assert whole is not None
    assert part is not None
    assert whole.discarded_weight is None
    c = np.asarray(part.coefficients)
    assert c.shape[1] < np.asarray(whole.coefficients).shape[1]
    assert np.abs(c).max(axis=0).min() >= 0.05
    assert part.discarded_weight is not None
    assert np.allclose((c**2).sum(axis=1) + part.discarded_weight, 1, atol=1e-12)
    assert (part.discarded_weight > 0).any()
    with pytest.raises(ConversionError, match="ci-threshold"):
        from_pyscf(mc, ci_threshold=2.0)


@pytest.mark.parametrize("n_core", [None, 0, 1])
def test_out_again(rohf: Any, n_core: int | None) -> None:
    mc = mcscf.CASCI(rohf, 4, 3)
    mc.fcisolver.nroots = 3
    mc.run()
    back = to_ci_vectors(from_pyscf(mc), n_core=n_core, n_active=None if n_core is None else 5 - n_core)
    if n_core == 0:  # as vectors over all orbitals: the same state
        h, eri = integrals(rohf)
        for state in range(3):
            value = fci.direct_spin1.energy(h, eri, back.vectors[state], 5, (3, 2)) + rohf.mol.energy_nuc()
            assert value == pytest.approx(mc.e_tot[state], abs=1e-9)
        return
    assert (back.n_core, back.n_active, back.electrons) == (1, 4, (2, 1))
    for mine, theirs in zip(back.vectors, mc.ci, strict=True):
        assert np.array_equal(mine, np.asarray(theirs))


def test_what_cannot_go_out(rohf: Any) -> None:
    wf = from_pyscf(mcscf.CASCI(rohf, 4, 3).run())
    with pytest.raises(UnsupportedError, match="a core of 2"):
        to_ci_vectors(wf, n_core=2)
    with pytest.raises(UnsupportedError, match="2 active"):
        to_ci_vectors(wf, n_core=1, n_active=2)
    with pytest.raises(UnsupportedError, match="a core of -1"):
        to_ci_vectors(wf, n_core=-1)
    with pytest.raises(UnsupportedError, match="a core of 1 up and 0 down"):
        to_ci_vectors(wf, n_core=(1, 0))
    with pytest.raises(UnsupportedError, match="no expansion"):
        to_ci_vectors(Wavefunction(wf.system))


def test_vectors_that_do_not_fit(rohf: Any) -> None:
    base = from_pyscf(rohf)
    with pytest.raises(ConversionError, match="active electrons"):
        with_ci_vectors(base, np.ones((4, 4)), n_core=1, n_active=4, electrons=(1, 1))
    with pytest.raises(ConversionError, match="another number of electrons"):
        with_ci_vectors(base, np.ones((1, 1)), strings=([0b11], [0b11]), n_core=0, n_active=5, electrons=(3, 2))


@pytest.fixture(scope="module")
def uhf() -> Any:
    return scf.UHF(molecule()).run()


def energy_of_both_spins(total: DeterminantSum, state: int, mf: Any, orbitals: Any) -> float:
    """As `energy`, of orbitals of each spin."""
    n = orbitals[0].shape[1]
    h = np.array([C.T @ mf.get_hcore() @ C for C in orbitals])
    eri = np.array([[ao2mo.kernel(mf.mol, (C, C, E, E), compact=False).reshape((n,) * 4) for E in orbitals]
                    for C in orbitals])  # fmt: skip
    return energy(total, state, h, eri, mf.mol.energy_nuc())


@pytest.mark.parametrize(("electrons", "n_core"), [((2, 1), (1, 1)), ((1, 2), (2, 0)), ((2, 2), (1, 0))])
def test_orbitals_of_each_spin(uhf: Any, electrons: tuple[int, int], n_core: tuple[int, int], tmp_path: Path) -> None:
    mc = mcscf.UCASCI(uhf, 3, electrons, ncore=n_core)
    mc.fcisolver.nroots = 2
    mc.run()
    wf = from_pyscf(mc)
    assert wf.expansion is not None
    assert (wf.expansion.up_set, wf.expansion.down_set) == ("up", "down")
    assert wf.energies is not None
    assert wf.energies.method[0] == "UCASCI" + f"({sum(electrons)},3)"
    assert wf.orbitals["up"].roles is not None
    assert wf.orbitals["down"].roles is not None
    assert (wf.orbitals["up"].roles.count("core"), wf.orbitals["down"].roles.count("core")) == n_core
    total = determinant_sum(wf.expansion, wf.system.n_up, wf.system.n_down)
    for state in range(2):
        assert energy_of_both_spins(total, state, uhf, mc.mo_coeff) == pytest.approx(mc.e_tot[state], abs=1e-7)
    back = to_ci_vectors(wf, n_core=n_core, n_active=3)
    assert (back.n_core, back.electrons) == (n_core, electrons)
    assert all(np.array_equal(mine, theirs) for mine, theirs in zip(back.vectors, mc.ci, strict=True))
    passes(wf, tmp_path)


def passes(wf: Wavefunction, folder: Path) -> None:
    qwfx.save(wf, folder / "a.qwfx")
    report = validate(folder / "a.qwfx")
    assert not report.count(Severity.ERROR) + report.count(Severity.WARNING), report.findings
    assert next(r for r in report.results if r.rule == "witness-configurations").outcome is Outcome.PASSED


@pytest.mark.parametrize("kind", ["rohf", "uhf"])
def test_a_solver_over_a_mean_field(kind: str, rohf: Any, uhf: Any, tmp_path: Path) -> None:
    mf = {"rohf": rohf, "uhf": uhf}[kind]
    solver = fci.FCI(mf)
    total, vector = solver.kernel()
    wf = from_pyscf(mf, ci=solver)
    assert wf.expansion is not None
    assert any("energies of the CI" in note for note in wf.provenance.steps[0]["notes"])
    assert wf.energies is not None
    assert "total" not in wf.energies.quantity
    passes(wf, tmp_path)
    sum_of = determinant_sum(wf.expansion, 3, 2)
    orbitals = mf.mo_coeff if kind == "uhf" else (mf.mo_coeff, mf.mo_coeff)
    assert energy_of_both_spins(sum_of, 0, mf, orbitals) == pytest.approx(total, abs=1e-7)
    one = solver.make_rdm1s(vector, 5, (3, 2))
    mine = [s.occupations for s in wf.orbitals.values()]
    theirs = [np.diag(d) for d in one] if kind == "uhf" else [np.diag(one[0] + one[1])]
    for a, b in zip(mine, theirs, strict=True):
        assert a is not None
        assert np.allclose(a, b, atol=1e-12)


def test_vectors_with_their_energies(rohf: Any, tmp_path: Path) -> None:
    total, vector = selected(rohf)
    wf = from_pyscf(rohf, ci=CIVectors(vector, 0, 5, (3, 2), totals=[total]))
    assert wf.energies is not None
    assert (wf.energies.method[0], float(wf.energies.value[0])) == ("selected CI(5,5)", total)
    passes(wf, tmp_path)
    again = from_pyscf(rohf, ci=CIVectors(np.asarray(vector), 0, 5, (3, 2), vector._strs), method="mine")
    assert wf.expansion is not None
    assert again.expansion is not None
    assert np.array_equal(np.asarray(again.expansion.coefficients), np.asarray(wf.expansion.coefficients))
    mc = mcscf.CASCI(rohf, 4, 3).run()
    whole = from_pyscf(rohf, ci=CIVectors(mc.ci, 1, 4, (2, 1), totals=[mc.e_tot]))
    assert qwfx_energy(whole) == pytest.approx(mc.e_tot, abs=1e-8)
    bare = from_pyscf(rohf.mol, mo_coeff=rohf.mo_coeff, ci=CIVectors(mc.ci, 1, 4, (2, 1), totals=[mc.e_tot]))
    assert qwfx_energy(bare) == pytest.approx(mc.e_tot, abs=1e-8)


def test_solvers_and_vectors_that_cannot_be_taken(rohf: Any) -> None:
    with pytest.raises(ConversionError, match="no vectors"):
        from_pyscf(rohf, ci=fci.FCI(rohf))
    with pytest.raises(ConversionError, match="no orbitals"):
        from_pyscf(rohf.mol, ci=CIVectors(np.ones((10, 10)), 0, 5, (3, 2)))
    with pytest.raises(ConversionError, match="2 energies for 1 states"):
        from_pyscf(rohf, ci=CIVectors(np.ones((10, 10)), 0, 5, (3, 2), totals=[1.0, 2.0]))
    for space in ((0, 6, (3, 2)), (-1, 5, (3, 2)), (0, 5, (6, 2)), (2, 4, (1, 0))):
        with pytest.raises(ConversionError, match="a core of"):
            from_pyscf(rohf, ci=CIVectors(np.ones((10, 10)), *space))
    solver = fci.FCI(rohf)
    solver.kernel()
    solver.norb = 4
    with pytest.raises(ConversionError, match="a CI of 4 orbitals"):
        from_pyscf(rohf, ci=solver)


def test_total_spin_by_operators(rohf: Any) -> None:
    """S^2 = S- S+ + Sz(Sz + 1) on F15's states, of quartets and doublets, against PySCF's."""
    solver = fci.FCI(rohf)
    solver.nroots = 12
    _, vectors = solver.kernel()
    wf = from_pyscf(rohf, ci=solver)
    assert wf.expansion is not None
    total = determinant_sum(wf.expansion, 3, 2)
    found = []
    for state, vector in enumerate(vectors):
        ket: State = {}
        for e, (i, j) in enumerate(zip(total.rows, total.columns, strict=True)):
            ket[(*total.up[i].tolist(), *(total.down[j] + 5).tolist())] = float(total.coefficients[state, e])
        raised: State = {}
        for p in range(5):
            for key, c in create(annihilate(ket, p + 5), p).items():
                raised[key] = raised.get(key, 0.0) + c
        found.append(sum(c * c for c in raised.values()) + 0.5 * 1.5)
        assert found[-1] == pytest.approx(fci.spin_op.spin_square(vector, 5, (3, 2))[0], abs=1e-8)
    assert min(found) == pytest.approx(0.75, abs=1e-5)
    assert max(found) == pytest.approx(3.75, abs=1e-5)
