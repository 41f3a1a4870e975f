"""Real files of several programs: counts, reading, orthonormality, witness and energy.

All cases of a folder that QWFX_CORPUS names are tested as well (`pytest -m slow`).
"""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qwfx.converters.molden import converter
from qwfx.converters.pyscf import casci_energy, energy
from qwfx.errors import ConversionError
from qwfx.kernels import evaluate_orbitals, overlap
from qwfx.storage import load, save

CORPUS = Path(__file__).parent / "corpus"
ELECTRONS_UNKNOWN = {
    "F/c_o2_uhf_ccpvtz": "9,7",
    "F/e_ch2_rohf_ccpvdz": "5,3",
    "F/g_n2_casscf66_ccpvdz": "7,7",
    "C/fd_ch2_cas66_631g_sym": "5,3",
}
"""Cases whose occupations do not tell the electrons or the spin, and what to say."""
NOT_THE_STATE = {"F/c_o2_uhf_ccpvtz"}
"""The file has the up orbitals only, so that its energy cannot be had from it."""


def cases(folder: Path) -> list[str]:
    return sorted("/".join(path.parts[-3:-1]) for path in folder.glob("*/*/case.molden"))


def options_of(case: str, expected: dict[str, Any]) -> dict[str, str]:
    options = {"electrons": ELECTRONS_UNKNOWN[case]} if case in ELECTRONS_UNKNOWN else {}
    if expected.get("ecp"):
        options["core-potential"] = ",".join(f"{element}={name}" for element, name in expected["ecp"].items())
    return options


def reading_names(how: Any) -> set[str]:
    if not isinstance(how, dict):
        return {"as-printed"}
    name = "contraction-normalised" if how["renormalise_contraction"] else "as-printed"
    return {name + ("-shared" if "share" in how["cartesian_components"] else "")}


def expected_energy(case: str, expected: dict[str, Any]) -> float | None:
    if case in NOT_THE_STATE:
        return None
    if expected["kind"] == "fcidump":  # the orbitals of the same run are there, with the energy of the mean field
        return expected.get("scf_energy")
    # What the coordinates and coefficients of the file give as they are printed, where that was computed.
    found = expected["energy_recomputed_from_file"]
    return float(found if found is not None else expected["energy"])


def check(folder: Path, case: str, tmp_path: Path) -> None:
    expected = json.loads((folder / case / "expected.json").read_text())
    reading = converter.read(folder / case / "case.molden", options_of(case, expected))
    target = tmp_path / "case.qwfx"
    save(reading.wavefunction, target)
    wavefunction = load(target)
    assert wavefunction.basis is not None
    assert wavefunction.witness is not None
    if expected["kind"] == "molden":
        assert wavefunction.basis.n_functions == expected["n_ao"]
        wanted = expected["n_mo"]
        told = {"up": wanted["a"], "down": wanted.get("b")}
        for name, orbitals in wavefunction.orbitals.items():
            assert orbitals.n_orbitals == told.get(name, wanted["a"])
        charge = float(wavefunction.system.effective_charges.sum()) - wavefunction.system.n_electrons
        assert charge == expected["charge"]
        assert wavefunction.system.n_up - wavefunction.system.n_down == expected["multiplicity"] - 1
        name = next(n for n in reading.notes if n.startswith("reading ")).split()[1]
        assert name in reading_names(expected["how_to_read"])
    s = overlap(wavefunction.basis, wavefunction.system.positions)
    for name, orbitals in wavefunction.orbitals.items():
        rows = np.asarray(orbitals.coefficients)
        residual = np.abs(rows @ s @ rows.T - np.eye(len(rows))).max()
        assert residual < max(1.2 * expected.get("residual_best", 1e-7), 2e-12)
        ours = evaluate_orbitals(
            wavefunction.basis, wavefunction.system.positions, rows, wavefunction.witness.points, derivatives=2
        )
        theirs = wavefunction.witness.orbitals[name]
        for value, told_value in (
            (ours[0], theirs.values),
            (np.moveaxis(ours[1:4], 0, -1), theirs.gradients),
            (ours[4], theirs.laplacians),
        ):
            np.testing.assert_allclose(value, told_value, rtol=1e-10, atol=1e-10 * max(1.0, np.abs(told_value).max()))
    wanted_energy = expected_energy(case, expected)
    if wanted_energy is not None:
        active = expected["method"].startswith("CASSCF")
        found = casci_energy(wavefunction, 6, 6) if active else energy(wavefunction)
        # Density-fitted energies differ from those of the same orbitals without the fitting by 1e-5 to 1e-4.
        within = 1e-4 if "density-fitted" in expected["notes"] and not expected["energy_recomputed_from_file"] else 1e-6
        assert abs(found - wanted_energy) < within


@pytest.mark.parametrize("case", cases(CORPUS))
def test_case(case: str, tmp_path: Path) -> None:
    check(CORPUS, case, tmp_path)


@pytest.mark.slow
def test_all_cases_of_the_folder_that_the_user_names(tmp_path: Path) -> None:
    if "QWFX_CORPUS" not in os.environ:
        pytest.skip("QWFX_CORPUS does not name a folder of cases")
    folder = Path(os.environ["QWFX_CORPUS"])
    found = cases(folder)
    assert found
    for case in found:
        if json.loads((folder / case / "expected.json").read_text())["method"] in ("CASCI",):
            continue  # the Hamiltonian is what these are about
        check(folder, case, tmp_path)


@pytest.mark.parametrize("case", ["F/c_o2_uhf_ccpvtz", "F/e_ch2_rohf_ccpvdz", "F/g_n2_casscf66_ccpvdz"])
def test_electrons_that_the_file_does_not_tell_are_asked_for(case: str) -> None:
    with pytest.raises(ConversionError, match="--set electrons=UP,DOWN") as caught:
        converter.read(CORPUS / case / "case.molden", {})
    assert "case.molden:" in caught.value.where


def test_occupations_written_as_square_roots_are_mended() -> None:
    reading = converter.read(CORPUS / "F/g_n2_casscf66_ccpvdz/case.molden", {"electrons": "7,7"})
    occupations = reading.wavefunction.orbitals["spatial"].occupations
    assert occupations is not None
    assert abs(occupations.sum() - 14.0) < 1e-4
    assert any("square root" in note for note in reading.notes)


def test_same_orbitals_of_both_spins_become_one_set() -> None:
    reading = converter.read(CORPUS / "A/e_ch2_rohf_ccpvdz/case.molden", {})
    orbitals = reading.wavefunction.orbitals
    assert list(orbitals) == ["spatial"]
    assert sorted(np.asarray(orbitals["spatial"].occupations)) == [0.0] * 19 + [1.0] * 2 + [2.0] * 3
    assert any("same" in note for note in reading.notes)
    assert reading.wavefunction.expansion is not None


def test_core_of_a_line_with_the_nuclear_charge_follows_from_the_electrons() -> None:
    reading = converter.read(CORPUS / "C/f_hi_rhf_stuttgart_ecp/case.molden", {})
    system = reading.wavefunction.system
    assert system.effective_charges.tolist() == [7.0, 1.0]
    assert system.atomic_numbers.tolist() == [53, 1]
    assert any("46 electrons of I" in note for note in reading.notes)


def test_another_core_potential_than_the_charges_have_is_refused() -> None:
    with pytest.raises(ConversionError, match="replaces 46 electrons"):
        converter.read(CORPUS / "A/f_hi_rhf_def2svp_ecp/case.molden", {"core-potential": "I=stuttgart"})


def test_ghost_keeps_its_functions() -> None:
    system = converter.read(CORPUS / "A/o_h2o_ghost_rhf_ccpvdz/case.molden", {}).wavefunction.system
    assert system.effective_charges.tolist() == [8.0, 1.0, 1.0, 0.0]
    assert system.atomic_numbers.tolist() == [8, 1, 1, 7]
