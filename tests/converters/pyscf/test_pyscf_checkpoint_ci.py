"""CI vectors of checkpoints, which PySCF writes where ``chk_ci`` is set."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from operators import energy
from pyscf import ao2mo, fci, gto, mcscf, scf

from qwfx.converters.pyscf import converter, from_pyscf
from qwfx.errors import ConversionError
from qwfx.reference.determinants import determinant_sum


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


def test_states_of_several_spins_in_a_checkpoint(tmp_path: Path) -> None:
    mol = gto.M(atom="H 0 0 0; H 0 0 1.5; H 0 .3 3; H 0 .1 4.5", basis="sto-3g", verbose=0)
    solvers = [fci.direct_spin1.FCI(mol), fci.direct_spin1.FCI(mol)]
    solvers[1].spin = 2
    mc = mcscf.state_average_mix(mcscf.CASSCF(scf.RHF(mol).run(), 3, 2), solvers, [0.5, 0.5])
    mc.verbose, mc.chk_ci, mc.chkfile = 0, True, str(tmp_path / "a.chk")
    mc.kernel()
    reading = converter.read(tmp_path / "a.chk", {"part": "mcscf"})
    assert reading.wavefunction.expansion is None
    assert any("several spins" in note for note in reading.notes)
    with pytest.raises(ConversionError, match="CI vector of 3 elements"):
        from_pyscf(mc)


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
