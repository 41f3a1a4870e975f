"""FCIDUMP files of independent programs: counts, and the full-CI energy of what was read."""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qwfx.converters.fcidump import converter
from qwfx.converters.pyscf import fci_energy
from qwfx.model import Hamiltonian

CORPUS = Path(__file__).parent / "corpus"
CASES = sorted(path.parent for path in CORPUS.glob("*/expected.json"))
WHOLE = sorted(Path(os.environ.get("QWFX_CORPUS", "/nonexistent")).rglob("*.fcidump"))
BASELINE = CORPUS / "z_z01_baseline_amp_end"
SLOW = {"i_fd_h2o_rhf_631g_c1"}  # 1.7 million determinants without symmetry


def check(folder: Path) -> None:
    expected: dict[str, Any] = json.loads((folder / "expected.json").read_text("utf-8"))
    path = folder / "case.fcidump"
    assert converter.recognises(path, path.read_bytes()[:65536])
    wavefunction = converter.read(path, {}).wavefunction
    h, system = wavefunction.hamiltonian, wavefunction.system
    assert h is not None
    n = expected.get("norb_spatial") or expected.get("norb") or expected["norb_in_header"]
    assert h.n_orbitals == n
    assert system.n_electrons == expected["nelec"]
    assert system.n_up - system.n_down + 1 == expected["multiplicity"]
    assert h.spin_resolved == ("spin_layout" in expected)
    big = h.n_orbitals > 8 and not h.spin_resolved and h.orbital_symmetry is not None and h.orbital_symmetry.any()
    energy = fci_energy(wavefunction, symmetry=h.state_symmetry if big else None)
    printed = len(repr(expected["energy"]).partition(".")[2])
    assert energy == pytest.approx(expected["energy"], abs=max(1e-6 if printed > 6 else 0, 0.5 * 10.0**-printed))
    written = expected.get("orbsym")
    if written and h.orbital_symmetry is not None and not h.spin_resolved:
        assert (np.asarray(h.orbital_symmetry) + 1).tolist() == written


@pytest.mark.parametrize("folder", [c for c in CASES if c.name not in SLOW], ids=lambda c: c.name)
def test_energy(folder: Path) -> None:
    check(folder)


@pytest.mark.slow
@pytest.mark.parametrize("folder", [c for c in CASES if c.name in SLOW], ids=lambda c: c.name)
def test_energy_of_big_spaces(folder: Path) -> None:
    check(folder)


@pytest.mark.slow
@pytest.mark.skipif(not WHOLE, reason="QWFX_CORPUS does not name a folder with FCIDUMP files")
@pytest.mark.parametrize("path", WHOLE, ids=lambda p: p.parent.name)
def test_energy_of_the_whole_corpus(path: Path) -> None:
    check(path.parent)


def hamiltonian(folder: Path) -> Hamiltonian:
    h = converter.read(folder / "case.fcidump", {}).wavefunction.hamiltonian
    assert h is not None
    return h


SPELLINGS = [c for c in CASES if c.name.startswith("z_z") and "uhf" not in c.name]


@pytest.mark.parametrize("folder", SPELLINGS, ids=lambda c: c.name)
def test_spellings_of_one_hamiltonian(folder: Path) -> None:
    one, other = hamiltonian(BASELINE), hamiltonian(folder)
    assert one.core_energy == pytest.approx(other.core_energy, abs=1e-12)
    np.testing.assert_allclose(other.one_body["both"], one.one_body["both"], rtol=0, atol=1e-14)
    np.testing.assert_allclose(other.two_body["both"].values, one.two_body["both"].values, rtol=0, atol=1e-14)
    assert other.state_symmetry == 0
    assert np.asarray(other.orbital_symmetry).tolist() == [0, 1, 2, 4, 5, 6]


def test_orbital_energies() -> None:
    energies = hamiltonian(CORPUS / "z_z11_orbital_energy_lines").orbital_energies["both"]
    np.testing.assert_array_equal(energies, -1.5 + 0.25 * np.arange(6))
    zeros = converter.read(CORPUS / "c_fd_n2_cas66_ccpvdz_c1" / "case.fcidump", {})
    assert "the orbital energies are all zero: left out" in zeros.notes
    assert zeros.wavefunction.hamiltonian is not None
    assert not zeros.wavefunction.hamiltonian.orbital_energies


def test_some_orbital_energies(tmp_path: Path) -> None:
    text = (CORPUS / "z_z11_orbital_energy_lines" / "case.fcidump").read_text("ascii")
    path = tmp_path / "x.fcidump"
    path.write_text("".join(line for line in text.splitlines(keepends=True) if "   3   0   0   0" not in line))
    reading = converter.read(path, {})
    assert "only 5 of 6 orbital energies: left out" in reading.notes
    assert reading.wavefunction.hamiltonian is not None
    assert not reading.wavefunction.hamiltonian.orbital_energies


def test_notes_and_provenance() -> None:
    reading = converter.read(CORPUS / "f_fd_n2_cas66_ccpvdz" / "case.fcidump", {})
    text = " | ".join(reading.notes)
    assert "no MS2" in text
    assert "TREL=.FALSE." in text
    assert "309 records repeat" in text
    (step,) = reading.wavefunction.provenance.steps
    assert step["used"][0]["entity"] == "case.fcidump"
    assert len(step["used"][0]["sha256"]) == 64
    assert list(step["notes"]) == list(reading.notes)


def test_complex_records_without_imaginary_parts() -> None:
    reading = converter.read(CORPUS / "z_z18_complex_zero_imag" / "case.fcidump", {})
    assert any("imaginary parts are all zero: stored as real" in note for note in reading.notes)
    h = reading.wavefunction.hamiltonian
    assert h is not None
    assert not h.complex_orbitals
