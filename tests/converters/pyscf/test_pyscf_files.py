"""Through the file: a checkpoint becomes a .qwfx file, and PySCF computes the same energies from it."""

from __future__ import annotations

import numpy as np
import pytest
from pyscf_cases import orbital_energies

from qwfx.conversion import convert
from qwfx.converters.pyscf import energy, fci_energy, from_pyscf
from qwfx.storage import load, save

KINDS = ["rhf", "rhf-cartesian", "rohf", "uhf", "rks", "roks", "uks", "core-potential", "ghost"]


@pytest.mark.parametrize("name", KINDS)
def test_energy_from_the_file_is_that_of_the_calculation(name, calculation, tmp_path):
    mf = calculation(name)
    path = tmp_path / "a.qwfx"
    save(from_pyscf(mf), path)
    stored = load(path)
    assert stored.energies.value[0] == mf.e_tot
    assert energy(stored) == pytest.approx(mf.e_tot, abs=1e-9)


def test_checkpoint_to_file_and_back(calculation, tmp_path):
    from pyscf.scf import chkfile

    mf = calculation("anion-no-down")
    source = tmp_path / "a.chk"
    chkfile.dump_scf(mf.mol, str(source), mf.e_tot, orbital_energies(mf), mf.mo_coeff, mf.mo_occ)
    done = convert(source, tmp_path / "a.qwfx", options={"hamiltonian": "yes"})
    assert (done.source_format, done.target_format) == ("pyscf", "qwfx")
    stored = load(tmp_path / "a.qwfx")
    # One electron: full CI and Hartree-Fock are the same.
    assert fci_energy(stored) == pytest.approx(mf.e_tot, abs=1e-9)
    back = convert(tmp_path / "a.qwfx", tmp_path / "b.chk")
    assert "not carried: the Hamiltonian" in back.writing_notes
    content = chkfile.load(str(tmp_path / "b.chk"), "scf")
    np.testing.assert_allclose(content["mo_coeff"], mf.mo_coeff, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(content["mo_occ"], mf.mo_occ)


def test_complex_orbitals_and_several_states_survive_the_file(calculation, tmp_path):
    from pyscf import mcscf

    mf = calculation("rhf")
    phases = np.exp(1j * np.linspace(0, 2, mf.mo_coeff.shape[1]))
    save(from_pyscf(mf, mo_coeff=mf.mo_coeff * phases, mo_occ=mf.mo_occ), tmp_path / "complex.qwfx")
    assert energy(load(tmp_path / "complex.qwfx")) == pytest.approx(mf.e_tot, abs=1e-9)

    cas = mcscf.CASCI(mf, 4, 4)
    cas.verbose = 0
    cas.fcisolver.nroots = 2
    cas.kernel()
    save(from_pyscf(cas), tmp_path / "states.qwfx")
    stored = load(tmp_path / "states.qwfx")
    assert np.asarray(stored.expansion.coefficients).shape[0] == 2
    assert energy(stored) == pytest.approx(cas.e_tot[0], abs=1e-8)
