"""Models through Molden files and back; what PySCF's own reader makes of the files; what cannot be written."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from molden_cases import CORPUS, WATER
from pyscf import gto
from pyscf.tools import molden

from qwfx.converters.molden import converter
from qwfx.converters.pyscf import energy, from_pyscf
from qwfx.errors import FileError, UnsupportedError
from qwfx.kernels import evaluate_orbitals
from qwfx.model import Basis, Cell, OrbitalSet, System, Wavefunction

POINTS = np.random.default_rng(7).normal(size=(40, 3))


def values(wavefunction: Wavefunction) -> np.ndarray:
    assert wavefunction.basis is not None
    parts = [
        evaluate_orbitals(
            wavefunction.basis, wavefunction.system.positions, np.asarray(s.coefficients), POINTS, derivatives=2
        )
        for s in wavefunction.orbitals.values()
    ]
    return np.concatenate(parts, axis=2)


def there_and_back(wavefunction: Wavefunction, tmp_path: Path) -> Wavefunction:
    path = tmp_path / "written.molden"
    converter.write(wavefunction, path, {})
    return converter.read(path, {}).wavefunction


@pytest.mark.parametrize(
    "case",
    [
        "A/b_h2o_rhf_631gs_cart", "A/f_hi_rhf_def2svp_ecp", "A/g_n2_casscf66_ccpvdz", "A/l_h2o_rhf_ccpvtz_cart",
        "A/o_h2o_ghost_rhf_ccpvdz", "A/s_h2o_uhf_cation_631gs_sym", "C/f_hi_rhf_stuttgart_ecp",
        "F/a_h2o_rhf_ccpvdz", "F/m_ohm_rhf_ccpv5z_hfunc",
    ],
)  # fmt: skip
def test_real_files_through_the_writer(case: str, tmp_path: Path) -> None:
    one = converter.read(CORPUS / case / "case.molden", {}).wavefunction
    path = tmp_path / "written.molden"
    converter.write(one, path, {})
    reading = converter.read(path, {})
    other = reading.wavefunction
    a, b = values(one), values(other)
    np.testing.assert_allclose(b, a, rtol=0, atol=1e-12 * np.abs(a).max(axis=(1, 2), keepdims=True).max())
    assert any(note.startswith("reading as-printed ") for note in reading.notes)
    assert other.system.labels == one.system.labels
    for name in ("atomic_numbers", "effective_charges", "positions"):
        np.testing.assert_array_equal(getattr(other.system, name), getattr(one.system, name))
    assert (other.system.n_up, other.system.n_down) == (one.system.n_up, one.system.n_down)
    assert list(other.orbitals) == list(one.orbitals)
    for name, was in one.orbitals.items():
        now = other.orbitals[name]
        assert now.irreps == was.irreps
        for member in ("energies", "occupations"):
            if getattr(was, member) is None:
                assert getattr(now, member) is None
            else:
                np.testing.assert_array_equal(getattr(now, member), getattr(was, member))


@pytest.mark.parametrize("cart", [False, True])
def test_pyscf_reads_what_is_written(cart: bool, tmp_path: Path) -> None:
    mf = gto.M(atom="O 0.1 0 0; H 0 1 1; H 1 -1 0.2", basis="cc-pvtz", cart=cart, verbose=0).RHF().run()
    path = tmp_path / "written.molden"
    converter.write(from_pyscf(mf), path, {})
    mol, energies, orbitals, occupations, _, _ = molden.load(str(path))
    fock = mf.mo_coeff.T @ mf.get_fock() @ mf.mo_coeff
    np.testing.assert_allclose(energies, np.diag(fock), rtol=0, atol=1e-6)  # as far as the field is converged
    np.testing.assert_array_equal(occupations, mf.mo_occ)
    theirs = mol.eval_gto("GTOval", POINTS) @ orbitals
    np.testing.assert_allclose(theirs, mf.mol.eval_gto("GTOval", POINTS) @ mf.mo_coeff, atol=1e-11)


def test_energy_after_the_journey(tmp_path: Path) -> None:
    mf = gto.M(atom="O 0 0 0; O 0 0 1.2", basis="6-31g*", spin=2, verbose=0).UHF().run()
    back = there_and_back(from_pyscf(mf), tmp_path)
    assert abs(energy(back) - mf.e_tot) < 1e-9
    assert (back.system.n_up, back.system.n_down) == (9, 7)


def wavefunction_of(basis: Basis, positions: Any, rows: Any, labels: tuple[str, ...] = ()) -> Wavefunction:
    n = len(positions)
    ones = np.ones(n, dtype=np.int32)
    system = System(1, 0, labels or ("H",) * n, ones, ones.astype(float), np.asarray(positions, dtype=float))
    occupations = np.zeros(len(rows))
    occupations[0] = 1.0
    return Wavefunction(
        system, basis=basis, orbitals={"spatial": OrbitalSet("both", np.asarray(rows), occupations=occupations)}
    )


def orthonormal(wavefunction: Wavefunction, n_orbitals: int) -> Wavefunction:
    from qwfx.kernels import overlap

    assert wavefunction.basis is not None
    s = overlap(wavefunction.basis, wavefunction.system.positions)
    values, vectors = np.linalg.eigh(s)
    rows = (vectors / np.sqrt(values)).T[-n_orbitals:]
    occupations = np.zeros(n_orbitals)
    occupations[0] = 1.0
    return replace(wavefunction, orbitals={"spatial": OrbitalSet("both", rows, occupations=occupations)})


def gaussian(l: list[int], monomial: list[int], center: list[int]) -> Basis:
    n = len(l)
    rng = np.random.default_rng(2)
    return Basis(
        "gaussian", np.array(center, dtype=np.int32), np.array(l, dtype=np.int32), np.array(monomial, dtype=np.int8),
        2 * np.arange(n + 1), rng.uniform(0.3, 2.0, 2 * n), rng.uniform(0.2, 0.8, 2 * n),
    )  # fmt: skip


def test_shells_in_any_order_and_of_both_kinds(tmp_path: Path) -> None:
    """Shells not sorted by atom; spherical d beside Cartesian f; unnormalised contractions."""
    positions = [[0.1, 0.2, 0.3], [1.0, -0.5, 1.5]]
    basis = gaussian([3, 0, 2, 1, 0, 3, 4], [1, 0, 0, 1, 1, 1, 0], [1, 0, 1, 0, 1, 0, 0])
    one = orthonormal(wavefunction_of(basis, positions, np.zeros((1, basis.n_functions))), 12)
    other = there_and_back(one, tmp_path)
    a = values(one)
    np.testing.assert_allclose(values(other), a, rtol=0, atol=1e-12 * np.abs(a).max())


@pytest.mark.parametrize("monomial", [0, 1])
def test_slater_functions(monomial: int, tmp_path: Path) -> None:
    """Contractions and solid shells are spread over lines of [STO]."""
    center = np.array([0, 0, 1, 0], dtype=np.int32)
    basis = Basis(
        "slater", center, np.array([0, 1, 0, 2], dtype=np.int32), np.array([monomial] * 4, dtype=np.int8),
        np.array([0, 2, 3, 4, 5]), np.array([2.1, 1.1, 1.3, 1.0, 1.7]), np.array([0.9, 0.4, 0.8, 0.6, 0.7]),
        np.array([0, 1, 0, 0, 0], dtype=np.int32),
    )  # fmt: skip
    positions = [[0.1, 0.2, 0.3], [0.4, -0.5, 1.5]]
    one = orthonormal(wavefunction_of(basis, positions, np.zeros((1, basis.n_functions))), 5)
    other = there_and_back(one, tmp_path)
    assert other.basis is not None
    assert other.basis.radial == "slater"
    a = values(one)
    np.testing.assert_allclose(values(other), a, rtol=0, atol=1e-12 * np.abs(a).max())


def test_labels_that_readers_would_misunderstand_are_replaced(tmp_path: Path) -> None:
    basis = gaussian([0, 0], [0, 0], [0, 1])
    one = orthonormal(wavefunction_of(basis, [[0, 0, 0], [0, 0, 1.5]], np.zeros((1, 2)), ("He1", "left end")), 2)
    assert there_and_back(one, tmp_path).system.labels == ("H1", "H2")


def test_nothing_is_left_of_a_failure(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    wavefunction = converter.read(WATER, {}).wavefunction
    path = tmp_path / "old.molden"
    path.write_text("old")

    def fail(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", fail)
    with pytest.raises(FileError, match="No space left"):
        converter.write(wavefunction, path, {})
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_what_is_not_carried_is_said(tmp_path: Path) -> None:
    wavefunction = converter.read(WATER, {}).wavefunction
    notes = converter.write(wavefunction, tmp_path / "case.molden", {}).notes
    assert any("the witness" in note for note in notes)


def complex_orbitals(w: Wavefunction) -> Wavefunction:
    return replace(w, orbitals={"spatial": replace(w.orbitals["spatial"], coefficients=np.ones((1, 24)) * 1j)})


def powers(w: Wavefunction) -> Wavefunction:
    assert w.basis is not None
    return replace(w, basis=replace(w.basis, powers=np.ones(len(w.basis.exponents), dtype=np.int32)))


def high(w: Wavefunction) -> Wavefunction:
    basis = gaussian([6], [0], [0])
    return replace(w, basis=basis, orbitals={"spatial": OrbitalSet("both", np.eye(13))})


def two_kinds(w: Wavefunction) -> Wavefunction:
    basis = gaussian([2, 2], [0, 1], [0, 0])
    return replace(w, basis=basis, orbitals={"spatial": OrbitalSet("both", np.eye(11))})


def high_beside_cartesian(w: Wavefunction) -> Wavefunction:
    basis = gaussian([2, 5], [1, 0], [0, 0])
    return replace(w, basis=basis, orbitals={"spatial": OrbitalSet("both", np.eye(17))})


UNSUPPORTED = {
    "complex": complex_orbitals,
    "powers of r": powers,
    "l = 6": high,
    "partly solid, partly monomial": two_kinds,
    "beyond g": high_beside_cartesian,
    "no orbitals": lambda w: replace(w, orbitals={}),
    "periodic": lambda w: replace(w, system=replace(w.system, cell=Cell(np.eye(3), np.zeros((1, 3))))),
    "effective charge 7.5": lambda w: replace(
        w, system=replace(w.system, effective_charges=np.array([7.5, 1.0, 1.0]))
    ),
    "orbital sets": lambda w: replace(w, orbitals={"a": w.orbitals["spatial"], "b": w.orbitals["spatial"]}),
}  # fmt: skip


@pytest.mark.parametrize("said", UNSUPPORTED)
def test_what_cannot_be_written_is_refused(said: str, tmp_path: Path) -> None:
    wavefunction = UNSUPPORTED[said](converter.read(WATER, {}).wavefunction)
    path = tmp_path / "case.molden"
    with pytest.raises(UnsupportedError, match=said):
        converter.write(wavefunction, path, {})
    assert not path.exists()


@pytest.mark.parametrize("spin", [0, 1])
def test_occupations_are_those_of_the_determinant_where_there_are_none(spin: int, tmp_path: Path) -> None:
    """Else the file could not be read back: nothing would tell its electrons."""
    from pyscf import scf

    mol = gto.M(atom="O 0 0 0; H 0.2 0.3 0.9", basis="sto-3g", spin=1, verbose=0)
    whole = from_pyscf((scf.UHF if spin else scf.ROHF)(mol).run())
    bare = replace(whole, orbitals={name: replace(s, occupations=None) for name, s in whole.orbitals.items()})
    back = there_and_back(bare, tmp_path)
    for name, s in whole.orbitals.items():
        assert np.array_equal(np.asarray(back.orbitals[name].occupations), np.asarray(s.occupations))
    assert (back.system.n_up, back.system.n_down) == (5, 4)
