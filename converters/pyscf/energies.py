"""Energies recomputed by PySCF from what a file holds: mean-field, active-space and full configuration interaction."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.methods import MeanField, parse_active_space
from qwfx.converters.pyscf.to_mean_field import bare_mean_field, choose_sets, stored_total, to_mean_field
from qwfx.converters.pyscf.to_mole import translate
from qwfx.errors import ConversionError, EvaluationError
from qwfx.model import Wavefunction

__all__ = ["casci_energy", "energy", "need_potentials"]

SAME_ORBITALS_WITHIN = 1e-8


def energy(wavefunction: Wavefunction, method: str | None = None) -> float:
    """Total energy (hartree) of the stored orbitals and occupations, by PySCF; no orbital is changed.

    Parameters
    ----------
    wavefunction : with orbitals; see `choose_sets`.
    method : text of the method (see `methods`), or ``CASSCF(electrons, orbitals)``; by default that of the stored
        total energy, else Hartree-Fock.

    Raises
    ------
    EvaluationError if atoms lack core electrons but have no core potential; others as `to_mean_field`.
    """
    total = stored_total(wavefunction)
    active = parse_active_space(method or (total[0] if total else ""))
    if active:
        return casci_energy(wavefunction, active.orbitals, active.electrons)
    need_potentials(wavefunction)
    mf = to_mean_field(wavefunction, method)
    return float(np.real(mf.energy_tot(dm=mf.make_rdm1())))


def casci_energy(wavefunction: Wavefunction, n_active_orbitals: int, n_active_electrons: int) -> float:
    """Total energy (hartree) of the full CI of the active electrons in the active orbitals, by PySCF.

    The doubly occupied core and the active orbitals are those of the highest occupations, so the order of the set does
    not matter: a complete-active-space calculation leaves integer occupations outside its active space. The spin is
    taken to be that of the lowest multiplicity that the electron counts allow.

    Raises
    ------
    ConversionError if the orbitals differ for up and down, if there are no occupations, or if the electrons outside the
    active space are not whole pairs; EvaluationError and UnsupportedError as `energy`.
    """
    from pyscf import fci, mcscf

    need_potentials(wavefunction)
    coefficients, occupations = _natural_orbitals(wavefunction)
    system = wavefunction.system
    n_core, odd = divmod(system.n_electrons - n_active_electrons, 2)
    if odd or n_core < 0 or n_core + n_active_orbitals > len(occupations):
        raise ConversionError(
            f"{system.n_electrons} electrons in {len(occupations)} orbitals do not leave {n_active_electrons} electrons"
            f" in {n_active_orbitals} orbitals over a closed core",
            where="active space",
            expected="an even number of electrons outside it",
            remedy="check the active space",
        )
    order = np.argsort(-occupations, kind="stable")
    mf = bare_mean_field(translate(wavefunction).mole, MeanField("RO"))
    difference = system.n_up - system.n_down
    n_up = (n_active_electrons + difference) // 2
    solver = mcscf.CASCI(mf, n_active_orbitals, (n_up, n_active_electrons - n_up), ncore=n_core)
    solver.verbose = 0
    spin = difference / 2
    fci.addons.fix_spin_(solver.fcisolver, ss=spin * (spin + 1))
    solver.fcisolver.conv_tol = 1e-12
    return float(solver.kernel(coefficients[:, order])[0])


def _natural_orbitals(wavefunction: Wavefunction) -> tuple[NDArray[Any], NDArray[np.float64]]:
    chosen = choose_sets(wavefunction)
    rows = [np.asarray(s.coefficients) for s in chosen.sets]
    if any(s.occupations is None for s in chosen.sets):
        raise ConversionError(
            "the orbitals have no occupations",
            where=f"orbital set {chosen.names[0]}",
            expected="occupations, which tell core and active orbitals apart",
            remedy="use a file of natural orbitals with their occupations",
        )
    if len(rows) == 2 and (rows[0].shape != rows[1].shape or np.abs(rows[0] - rows[1]).max() > SAME_ORBITALS_WITHIN):
        raise ConversionError(
            "up and down orbitals differ",
            where="active space",
            expected="one set of orbitals for both spins",
            remedy="use the natural orbitals of a spin-restricted calculation",
        )
    total = np.sum(chosen.occupations, axis=0) if len(rows) == 2 else chosen.occupations[0]
    return translate(wavefunction).coefficients(rows[0]), np.asarray(total)


def need_potentials(wavefunction: Wavefunction) -> None:
    missing = translate(wavefunction).missing_potentials
    if missing:
        atoms = ", ".join(f"{a} ({wavefunction.system.labels[a]})" for a in missing)
        raise EvaluationError(
            f"atoms {atoms} lack core electrons, but the file has no core potential for them",
            where="potentials",
            expected="a core potential for each of these atoms",
            remedy="convert again with the core potential that the calculation used",
        )
