"""CI vectors in and out: phases against a Hamiltonian made operator by operator, and against PySCF's energies."""

from __future__ import annotations

from itertools import product
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from pyscf import ao2mo, fci, gto, mcscf, scf

from qwfx.converters.pyscf import converter, expansion_from_ci, from_pyscf, to_ci_vectors, with_ci_vectors
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.model import Expansion, Wavefunction
from qwfx.reference.determinants import DeterminantSum, determinant_sum

State = dict[tuple[int, ...], float]
"""Occupied spin orbitals, ascending (orbital p up is p, down p + n), and the coefficient: operators in this order."""


def annihilate(state: State, q: int) -> State:
    return {occupied[:k] + occupied[k + 1 :]: c * (-1) ** k for occupied, c in state.items()
            for k in [occupied.index(q) if q in occupied else -1] if k >= 0}  # fmt: skip


def create(state: State, p: int) -> State:
    return {tuple(sorted((*occupied, p))): c * (-1) ** sum(q < p for q in occupied)
            for occupied, c in state.items() if p not in occupied}  # fmt: skip


def energy(total: DeterminantSum, state: int, h: np.ndarray, eri: np.ndarray, core: float) -> float:
    """<s|H|s>/<s|s> with H of FORMAT.md, Hamiltonian, applied one operator at a time to F15's states."""
    n = len(h)
    ket: State = {}
    for e, (i, j) in enumerate(zip(total.rows, total.columns, strict=True)):
        ket[(*total.up[i].tolist(), *(total.down[j] + n).tolist())] = float(total.coefficients[state, e])
    value = core * sum(c * c for c in ket.values())

    def overlap(other: State) -> float:
        return sum(c * ket.get(occupied, 0.0) for occupied, c in other.items())

    for p, q in product(range(n), repeat=2):
        for spin in (0, n):
            value += h[p, q] * overlap(create(annihilate(ket, q + spin), p + spin))
    for p, q, r, s in product(range(n), repeat=4):
        if abs(eri[p, q, r, s]) > 1e-12:
            for one, two in product((0, n), repeat=2):
                moved = annihilate(annihilate(ket, q + one), s + two)
                value += 0.5 * eri[p, q, r, s] * overlap(create(create(moved, r + two), p + one))
    return value / sum(c * c for c in ket.values())


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
    with pytest.raises(UnsupportedError, match="no expansion"):
        to_ci_vectors(Wavefunction(wf.system))


def test_vectors_that_do_not_fit(rohf: Any) -> None:
    base = from_pyscf(rohf)
    with pytest.raises(ConversionError, match="active electrons"):
        with_ci_vectors(base, np.ones((4, 4)), n_core=1, n_active=4, electrons=(1, 1))
    with pytest.raises(ConversionError, match="another number of electrons"):
        with_ci_vectors(base, np.ones((1, 1)), strings=([0b11], [0b11]), n_core=0, n_active=5, electrons=(3, 2))


def test_orbitals_of_each_spin() -> None:
    uhf = scf.UHF(molecule()).run()
    with pytest.raises(UnsupportedError, match="orbitals of each spin"):
        from_pyscf(mcscf.UCASCI(uhf, 3, 3).run())


@pytest.fixture(scope="module")
def checkpoints(tmp_path_factory: pytest.TempPathFactory) -> tuple[Any, Any, Any]:
    """A CASSCF calculation, and one of two states, whose checkpoints hold their vectors."""
    folder = tmp_path_factory.mktemp("ci")
    mf = scf.RHF(gto.M(atom="Li 0 0 0; H 0 0 1.6", basis="6-31g", verbose=0)).run()
    one = mcscf.CASSCF(mf, 4, 2)
    two = mcscf.CASSCF(mf, 4, 2).state_average_([0.6, 0.4])
    for name, mc in (("one", one), ("two", two)):
        mc.verbose, mc.chk_ci, mc.chkfile = 0, True, str(folder / f"{name}.chk")
        mc.kernel()
    return folder, one, two


def test_vectors_of_a_checkpoint(checkpoints: Any) -> None:
    folder, one, two = checkpoints
    for name, mc in (("one", one), ("two", two)):
        reading = converter.read(folder / f"{name}.chk", {"part": "mcscf"})
        wf = reading.wavefunction
        assert wf.expansion is not None, reading.notes
        h = np.asarray(mc.mo_coeff).T @ mc._scf.get_hcore() @ mc.mo_coeff
        eri = ao2mo.restore(1, ao2mo.kernel(mc.mol, mc.mo_coeff), len(h))
        total = determinant_sum(wf.expansion, 2, 2)
        energies = np.atleast_1d(mc.e_tot if name == "one" else mc.e_states)
        for state, value in enumerate(energies):
            assert energy(total, state, h, eri, mc.mol.energy_nuc()) == pytest.approx(value, abs=1e-7)
        assert wf.witness is not None
        assert wf.witness.configurations is not None


def test_a_threshold_for_a_checkpoint(checkpoints: Any) -> None:
    folder, *_ = checkpoints
    whole = converter.read(folder / "one.chk", {"part": "mcscf"}).wavefunction.expansion
    part = converter.read(folder / "one.chk", {"part": "mcscf", "ci-threshold": "0.05"}).wavefunction.expansion
    assert whole is not None
    assert part is not None
    assert len(np.asarray(part.columns)) < len(np.asarray(whole.columns))
    for text in ("much", "-1", "2", "nan"):
        with pytest.raises(ConversionError, match="ci-threshold"):
            converter.read(folder / "one.chk", {"part": "mcscf", "ci-threshold": text})


def test_vectors_that_are_not_those_of_the_orbitals(checkpoints: Any, tmp_path: Path) -> None:
    folder, *_ = checkpoints
    for name, change in (("one", lambda ci: ci[::-1]), ("two", lambda ci: ci[:, ::-1]), ("one", lambda ci: ci[:1])):
        path = tmp_path / "x.chk"
        path.write_bytes((folder / f"{name}.chk").read_bytes())
        with h5py.File(path, "r+") as file:
            ci = file["mcscf/ci"][()]
            del file["mcscf/ci"]
            file["mcscf/ci"] = change(ci)
        reading = converter.read(path, {"part": "mcscf"})
        assert reading.wavefunction.expansion is None
        assert any("not used" in note for note in reading.notes)
