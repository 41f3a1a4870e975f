"""Checkpoint files: read, written, and refused when they are damaged."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from pyscf_cases import METHYLENE, WATER, molecule, orbital_energies

from qwfx.converters.plugin import Converter
from qwfx.converters.pyscf import converter, energy, from_pyscf
from qwfx.errors import ConversionError, FileError, QwfxError, UnsupportedError
from qwfx.model import Energies


def dump(mf, path):
    from pyscf.scf import chkfile

    chkfile.dump_scf(mf.mol, str(path), mf.e_tot, orbital_energies(mf), mf.mo_coeff, mf.mo_occ)
    return path


def same_orbitals(a, b):
    assert set(a.orbitals) == set(b.orbitals)
    for name, orbitals in a.orbitals.items():
        np.testing.assert_allclose(orbitals.coefficients, b.orbitals[name].coefficients, rtol=0, atol=1e-12)
        np.testing.assert_array_equal(orbitals.occupations, b.orbitals[name].occupations)
        np.testing.assert_allclose(orbitals.energies, b.orbitals[name].energies, rtol=0, atol=1e-12)
        assert orbitals.irreps == b.orbitals[name].irreps


def test_it_is_a_converter(calculation, tmp_path):
    assert isinstance(converter, Converter)
    path = dump(calculation("rhf"), tmp_path / "a.chk")
    assert converter.recognises(path, path.read_bytes()[:65536])
    assert not converter.recognises(path, b"[Molden Format]\n")


@pytest.mark.parametrize(
    ("name", "method"),
    [
        ("rhf", "RHF"),
        ("rhf-cartesian", "RHF"),
        ("rohf", "ROHF"),
        ("uhf", "UHF"),
        ("core-potential", "RHF"),
        ("ghost", "RHF"),
        ("symmetry", "RHF"),
        ("anion-no-down", "UHF"),
    ],
)
def test_hartree_fock_is_told_by_its_energy_and_survives_the_way_there_and_back(name, method, calculation, tmp_path):
    mf = calculation(name)
    reading = converter.read(dump(mf, tmp_path / "a.chk"), {})
    wavefunction = reading.wavefunction
    assert wavefunction.energies.method[0] == method
    assert any(f"is that of {method} to" in note for note in reading.notes)
    same_orbitals(wavefunction, from_pyscf(mf))
    assert wavefunction.witness.independent
    (step,) = wavefunction.provenance.steps
    assert step["used"][0]["entity"] == "a.chk"
    assert len(step["used"][0]["sha256"]) == 64

    converter.write(wavefunction, tmp_path / "b.chk", {})
    again = converter.read(tmp_path / "b.chk", {}).wavefunction
    assert energy(again) == pytest.approx(mf.e_tot, abs=1e-9)
    same_orbitals(again, wavefunction)


def test_written_checkpoint_serves_pyscf(calculation, tmp_path):
    from pyscf import scf
    from pyscf.scf import chkfile

    mf = calculation("uhf")
    path = tmp_path / "b.chk"
    notes = converter.write(from_pyscf(mf), path, {}).notes
    assert notes == ("not carried: the witness",)
    mol, content = chkfile.load_scf(str(path))
    assert content["e_tot"] == mf.e_tot
    fresh = scf.UHF(mol)
    fresh._chkfile.close()
    fresh.update(str(path))
    assert fresh.energy_tot(fresh.make_rdm1()) == pytest.approx(mf.e_tot, abs=1e-9)
    start = scf.UHF(mf.mol)  # another basis object: PySCF projects
    start._chkfile.close()
    start.chkfile = str(path)
    assert start.energy_tot(start.get_init_guess(key="chk")) == pytest.approx(mf.e_tot, abs=1e-6)


def test_kohn_sham_needs_its_name(calculation, tmp_path):
    mf = calculation("rks")
    path = dump(mf, tmp_path / "a.chk")
    reading = converter.read(path, {})
    assert reading.wavefunction.energies.method[0] == "SCF (method not in the checkpoint)"
    assert any("name the method with --set method=" in note for note in reading.notes)
    with pytest.raises(UnsupportedError, match="no mean-field method"):
        energy(reading.wavefunction)
    named = converter.read(path, {"method": "RKS/b3lyp (grid level 1)"}).wavefunction
    assert energy(named) == pytest.approx(mf.e_tot, abs=1e-9)
    with pytest.raises(UnsupportedError, match="'b3lyp' is not known"):
        converter.read(path, {"method": "b3lyp"})
    notes = converter.write(reading.wavefunction, tmp_path / "b.chk", {}).notes
    assert any("is that of SCF (method not in the checkpoint)" in note for note in notes)


def test_integrals_on_request(calculation, tmp_path):
    path = dump(calculation("anion-no-down"), tmp_path / "a.chk")
    assert converter.read(path, {}).wavefunction.hamiltonian is None
    assert converter.read(path, {"hamiltonian": "yes"}).wavefunction.hamiltonian.n_orbitals == 5


@pytest.fixture(scope="module")
def active_space(tmp_path_factory):
    from pyscf import mcscf, scf
    from pyscf.lib import chkfile

    path = tmp_path_factory.mktemp("cas") / "cas.chk"
    mf = scf.RHF(molecule(atom=WATER, basis="6-31g"))
    mf._chkfile.close()
    mf.chkfile = str(path)
    mf.kernel()
    cas = mcscf.CASSCF(mf, 4, 4)
    cas.verbose = 0
    cas.kernel()
    content = chkfile.load(str(path), "mcscf")
    return mf, cas, path, content


def test_active_space_orbitals_come_with_their_occupations(active_space, tmp_path):
    mf, cas, path, _ = active_space
    reading = converter.read(path, {})
    wavefunction = reading.wavefunction
    orbitals = wavefunction.orbitals["spatial"]
    assert wavefunction.energies.method[0] == "CASSCF(4,4)"
    assert orbitals.roles[2:8] == ("core", *["active"] * 4, "virtual")
    assert orbitals.occupations.sum() == pytest.approx(10, abs=1e-8)
    assert any("--set part=scf" in note for note in reading.notes)
    assert any("are not natural orbitals" in note for note in reading.notes)
    assert energy(wavefunction) == pytest.approx(cas.e_tot, abs=1e-8)
    mean_field = converter.read(path, {"part": "scf"}).wavefunction
    assert mean_field.energies.method[0] == "RHF"
    assert energy(mean_field) == pytest.approx(mf.e_tot, abs=1e-9)
    notes = converter.write(wavefunction, tmp_path / "b.chk", {}).notes
    assert any("orbital energies" in note for note in notes) == (orbitals.energies is None)


def test_natural_orbitals_are_made_where_the_checkpoint_has_a_density_matrix(active_space, tmp_path):
    from pyscf.lib import chkfile

    mf, cas, _, content = active_space
    density = np.asarray(content["casdm1"])
    # Any rotation among the active orbitals describes the same state; the density matrix turns with them.
    rotation, _ = np.linalg.qr(np.random.default_rng(4).normal(size=(4, 4)))
    path = tmp_path / "c.chk"
    chkfile.save_mol(mf.mol, str(path))
    coefficients = np.array(content["mo_coeff"])
    coefficients[:, 3:7] = coefficients[:, 3:7] @ rotation
    turned = {k: v for k, v in content.items() if k in ("e_tot", "ncore", "ncas", "nelecas")}
    turned |= {"mo_coeff": coefficients, "casdm1": rotation.T @ density @ rotation}
    chkfile.save(str(path), "mcscf", turned)
    reading = converter.read(path, {})
    found = reading.wavefunction.orbitals["spatial"].occupations
    assert any("turned into natural orbitals" in note for note in reading.notes)
    np.testing.assert_allclose(found[3:7], np.linalg.eigvalsh(density)[::-1], rtol=0, atol=1e-10)
    assert energy(reading.wavefunction) == pytest.approx(cas.e_tot, abs=1e-8)


# --- damage --------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    """Path, molecule text and results of a small checkpoint."""
    from pyscf import scf
    from pyscf.lib import chkfile

    mf = scf.RHF(molecule(atom=WATER, basis="sto-3g", ecp={"O": "ccecp"}))
    mf._chkfile.close()
    mf.chkfile = None
    mf.kernel()
    path = dump(mf, tmp_path_factory.mktemp("good") / "good.chk")
    return path, json.loads(chkfile.load(str(path), "mol")), chkfile.load(str(path), "scf")


def remade(path, mol, content):
    from pyscf.lib import chkfile

    if mol is not None:
        chkfile.save(str(path), "mol", mol if isinstance(mol, str) else json.dumps(mol))
    if content is not None:
        chkfile.save(str(path), "scf", content)
    return path


def row(table, index, column, value):
    changed = [list(r) for r in table]
    changed[index][column] = value
    return changed


MOLECULE_DAMAGE = {
    "text": (lambda m: "{'atom': 'H'}", "cannot be read"),
    "a list": (lambda m: "[1, 2]", "lacks its tables"),
    "no shells": (lambda m: {k: v for k, v in m.items() if k != "_bas"}, "lacks its tables"),
    "exponents outside": (lambda m: {**m, "_bas": row(m["_bas"], 0, 5, 10**8)}, "exponents lie outside"),
    "exponents before": (lambda m: {**m, "_bas": row(m["_bas"], 0, 5, -4)}, "exponents lie outside"),
    "many primitives": (lambda m: {**m, "_bas": row(m["_bas"], 0, 2, 10**6)}, "lie outside"),
    "no primitives": (lambda m: {**m, "_bas": row(m["_bas"], 0, 2, 0)}, "without primitives"),
    "l of 90": (lambda m: {**m, "_bas": row(m["_bas"], 0, 1, 90)}, "l outside 0 to 12"),
    "atom 7": (lambda m: {**m, "_bas": row(m["_bas"], 0, 0, 7)}, "on an atom that does not exist"),
    "position": (lambda m: {**m, "_atm": row(m["_atm"], 0, 1, 10**7)}, "position lies outside"),
    "potential atom": (lambda m: {**m, "_ecpbas": row(m["_ecpbas"], 0, 0, 9)}, "core potential on an atom"),
    "potential terms": (lambda m: {**m, "_ecpbas": row(m["_ecpbas"], 0, 6, 10**7)}, "terms lie outside"),
    "fewer atoms": (lambda m: {**m, "_atm": m["_atm"][:-1]}, "another number of atoms"),
    "ragged": (lambda m: {**m, "_bas": [[1, 2], [3]]}, "damaged"),
    "huge integer": (lambda m: {**m, "_bas": row(m["_bas"], 0, 5, 10**30)}, "damaged"),
    "words": (lambda m: {**m, "_env": ["a"] * len(m["_env"])}, "damaged"),
    "not finite": (lambda m: {**m, "_env": [float("nan")] * len(m["_env"])}, "not finite"),
    "spin": (lambda m: {**m, "spin": 3}, "damaged"),
    "element": (lambda m: {**m, "_atom": [["Qq", [0, 0, i]] for i in range(3)]}, "damaged"),
}


@pytest.mark.parametrize("kind", MOLECULE_DAMAGE)
def test_damaged_molecules_are_refused(kind, good, tmp_path):
    _, mol, content = good
    change, message = MOLECULE_DAMAGE[kind]
    path = remade(tmp_path / "bad.chk", change(mol), content)
    with pytest.raises(ConversionError, match=message) as caught:
        converter.read(path, {})
    assert str(path) in caught.value.where
    assert caught.value.remedy


def test_python_text_in_a_molecule_is_not_run(good, tmp_path):
    _, mol, content = good
    trap = tmp_path / "trap"
    text = f"__import__('pathlib').Path({str(trap)!r}).touch() or []"
    for key in ("atom", "basis", "ecp", "pseudo"):
        path = remade(tmp_path / f"{key}.chk", {**mol, key: text}, content)
        converter.read(path, {})
    old_style = remade(tmp_path / "old.chk", text, content)
    with pytest.raises(ConversionError, match="cannot be read"):
        converter.read(old_style, {})
    assert not trap.exists()


CONTENT_DAMAGE = {
    "no coefficients": (lambda c: {k: v for k, v in c.items() if k != "mo_coeff"}, "no 'mo_coeff'"),
    "no occupations": (lambda c: {k: v for k, v in c.items() if k != "mo_occ"}, "no 'mo_occ'"),
    "other basis": (lambda c: {**c, "mo_coeff": c["mo_coeff"][:-1]}, "coefficients each"),
    "rank": (lambda c: {**c, "mo_coeff": c["mo_coeff"][0]}, "shape"),
    "not finite": (lambda c: {**c, "mo_coeff": c["mo_coeff"] * np.nan}, "not all finite"),
    "text": (lambda c: {**c, "mo_coeff": "none"}, "shape"),
    "group": (lambda c: {**c, "mo_coeff": {"x": 1.0}}, "shape"),
    "occupations": (lambda c: {**c, "mo_occ": c["mo_occ"][:3]}, "occupations have the shapes"),
}


@pytest.mark.parametrize("kind", CONTENT_DAMAGE)
def test_damaged_results_are_refused(kind, good, tmp_path):
    _, mol, content = good
    change, message = CONTENT_DAMAGE[kind]
    path = remade(tmp_path / "bad.chk", mol, change(content))
    with pytest.raises(ConversionError, match=message) as caught:
        converter.read(path, {})
    assert str(path) in caught.value.where


def test_files_that_are_no_checkpoints_are_refused(good, tmp_path):
    _, mol, content = good
    with pytest.raises(ConversionError, match="no molecule under 'mol'"):
        converter.read(remade(tmp_path / "a.chk", None, content), {})
    with pytest.raises(ConversionError, match="no results under 'scf'"):
        converter.read(remade(tmp_path / "b.chk", mol, None), {})
    with pytest.raises(FileError, match="not a file"):
        converter.read(tmp_path / "absent.chk", {})
    (tmp_path / "text.chk").write_text("hello")
    with pytest.raises(ConversionError, match="cannot be read"):
        converter.read(tmp_path / "text.chk", {})


def test_spinors_and_cells_are_refused(good, tmp_path):
    _, mol, content = good
    doubled = np.kron(np.eye(2), content["mo_coeff"])
    spinors = remade(tmp_path / "a.chk", mol, {**content, "mo_coeff": doubled, "mo_occ": np.ones(len(doubled))})
    with pytest.raises(UnsupportedError, match="mix spin up and spin down"):
        converter.read(spinors, {})
    with pytest.raises(UnsupportedError, match="periodic"):
        converter.read(remade(tmp_path / "b.chk", {**mol, "a": np.eye(3).tolist()}, content), {})


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_flipped_and_missing_bytes_never_give_a_traceback(good, tmp_path_factory, data):
    original = good[0].read_bytes()
    damaged = bytearray(original[: data.draw(st.integers(1, len(original)))])
    for _ in range(data.draw(st.integers(0, 8))):
        damaged[data.draw(st.integers(0, len(damaged) - 1))] = data.draw(st.integers(0, 255))
    path = tmp_path_factory.getbasetemp() / "flipped.chk"
    path.write_bytes(bytes(damaged))
    try:
        converter.read(path, {})
    except QwfxError as error:
        assert error.found  # noqa: PT017 - either outcome is right, a traceback is not


# --- writing -------------------------------------------------------------------------------------------------------


def test_what_a_checkpoint_cannot_hold_is_said(calculation, tmp_path):
    wavefunction = from_pyscf(calculation("anion-no-down"), hamiltonian=True)
    bare = {name: replace(s, energies=None) for name, s in wavefunction.orbitals.items()}
    correlated = Energies(
        np.zeros(1, np.int32), ("CCSD(T)",), np.array([-0.49]), np.zeros(1), ("total",)
    )
    notes = converter.write(
        replace(wavefunction, orbitals=bare, energies=correlated), tmp_path / "a.chk", {}
    ).notes
    text = " ".join(notes)
    for word in ("Hamiltonian", "witness", "orbital energies", "-0.4900000000 hartree, is that of CCSD(T)"):
        assert word in text
    notes = converter.write(replace(wavefunction, energies=None), tmp_path / "a.chk", {}).notes
    assert any("not a number" in note for note in notes)
    assert converter.read(tmp_path / "a.chk", {}).wavefunction.energies.quantity == ("nuclear-repulsion",)


@pytest.mark.parametrize(
    ("atoms", "group"),
    [("N 0 0 0; N 0 0 2.1", True), ("N 0 0 0; N 0 0 2.1", "D2h"), ("N 0 0 0; N 0 0 2.1", "C2v"), (METHYLENE, "Cs")],
)
def test_irreps_survive_although_a_model_has_no_group(atoms, group, tmp_path):
    from pyscf import scf

    mf = scf.RHF(molecule(atom=atoms, basis="sto-3g", symmetry=group))
    mf._chkfile.close()
    mf.chkfile = None
    mf.kernel()
    wavefunction = from_pyscf(mf)
    notes = converter.write(wavefunction, tmp_path / "a.chk", {}).notes
    assert not any("irreps" in note for note in notes)
    again = converter.read(tmp_path / "a.chk", {}).wavefunction
    assert again.orbitals["spatial"].irreps == wavefunction.orbitals["spatial"].irreps
    assert len(set(again.orbitals["spatial"].irreps)) > 1
    swapped = replace(wavefunction.orbitals["spatial"], irreps=wavefunction.orbitals["spatial"].irreps[::-1])
    notes = converter.write(replace(wavefunction, orbitals={"spatial": swapped}), tmp_path / "a.chk", {}).notes
    assert any("irreps" in note for note in notes)
    assert converter.read(tmp_path / "a.chk", {}).wavefunction.orbitals["spatial"].irreps is None


def test_a_file_is_replaced_whole_or_not_at_all(calculation, tmp_path, monkeypatch):
    from pyscf.scf import chkfile

    path = tmp_path / "a.chk"
    path.write_bytes(b"the old file")

    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(chkfile, "dump_scf", fail)
    with pytest.raises(FileError, match="No space left"):
        converter.write(from_pyscf(calculation("rhf"), witness=False), path, {})
    assert path.read_bytes() == b"the old file"
    assert [p.name for p in tmp_path.iterdir()] == ["a.chk"]
    monkeypatch.undo()
    with pytest.raises(FileError, match="cannot be written"):
        converter.write(from_pyscf(calculation("rhf"), witness=False), tmp_path / "none" / "a.chk", {})
