"""A PySCF calculation, or a molecule with orbitals, as a `Wavefunction`."""

from __future__ import annotations

from typing import Any

import numpy as np

from qwfx.converters.pyscf.ci_vectors import CIVectors, expansion_from_ci, occupations_of, roles_of, vectors_of_solver
from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES, describe_method, reference_details
from qwfx.converters.pyscf.from_active_space import active_space_parts, is_active_space
from qwfx.converters.pyscf.parts import Parts, assemble, per_spin
from qwfx.errors import ConversionError
from qwfx.model import Wavefunction

__all__ = ["from_pyscf"]


def from_pyscf(
    calculation: Any,
    *,
    mo_coeff: Any = None,
    mo_occ: Any = None,
    energies: Any = None,
    method: str | None = None,
    witness: bool = True,
    hamiltonian: bool = False,
    ci: Any = None,
    ci_threshold: float = 0.0,
    used: tuple[dict[str, str], ...] = (),
) -> Wavefunction:
    """The wave function of a PySCF calculation, with a witness evaluated by PySCF.

    Parameters
    ----------
    calculation : a mean-field object after ``kernel()`` (RHF, ROHF, UHF, RKS, ROKS, UKS; density-fitted or scalar
        X2C too), a CASCI or CASSCF object after ``kernel()``, or a built ``Mole``.
    mo_coeff : (F, M) or (2, F, M), orbitals to take instead of the object's; rows in PySCF's order.
    mo_occ, energies : (M) or (2, M), the same for occupations and orbital energies (hartree).
    method : text of the method, where the object does not tell (see `methods`).
    witness : whether to evaluate the witness.
    hamiltonian : whether to add the second-quantised Hamiltonian over these orbitals.
    ci : a CI solver over these orbitals after its ``kernel()``, such as ``pyscf.fci.FCI(mf)``, or `CIVectors`: of full
        or selected CI, with a core, with energies. Expansion and occupations are then those of the vectors.
    ci_threshold : CI coefficients of a smaller magnitude in every state are left out; their weight is stored.
    used : entities for the provenance, such as the file that the object came from.

    Returns
    -------
    Wavefunction with orbital set ``spatial``, or ``up`` and ``down``; without orbitals if a bare molecule is given.
    The expansion of a mean-field calculation is its determinant, that of an active space its CI vectors.

    Raises
    ------
    ConversionError for an object without orbitals or of the wrong shape; UnsupportedError for two-component,
    four-component and periodic calculations, embedding, and Hamiltonians that PySCF's molecule does not define.
    """
    from pyscf.gto.mole import MoleBase

    if isinstance(calculation, MoleBase):
        parts = Parts(calculation, [], method=method)
    elif is_active_space(calculation):
        parts = active_space_parts(calculation, ci_threshold)
    else:
        parts = _mean_field_parts(calculation)
    if not parts.mol._built:
        raise ConversionError(
            "the molecule is not built", where="PySCF object", expected="a built Mole", remedy="call mol.build()"
        )
    parts.method = method or parts.method
    if mo_coeff is not None:
        parts = Parts(parts.mol, per_spin(mo_coeff, 2), method=parts.method)  # nothing else is known of such orbitals
    if ci is not None:
        field = getattr(calculation, "_scf", calculation)
        details = "" if isinstance(calculation, MoleBase) else reference_details(field)
        _take_vectors(parts, ci, ci_threshold)
        parts.method = method or f"{parts.method}{details}"
    if mo_occ is not None:
        parts.occupations = per_spin(mo_occ, 1)
    if energies is not None:
        parts.energies = per_spin(energies, 1)
    if mo_coeff is None and not parts.coefficients and not isinstance(calculation, MoleBase):
        raise ConversionError(
            "the calculation has no orbitals",
            where=f"PySCF object of class {type(calculation).__name__}",
            expected="a converged calculation",
            remedy="run kernel() first",
        )
    wavefunction = assemble(parts, activity="taken from PySCF", witness=witness, used=used)
    if hamiltonian:
        from qwfx.converters.pyscf.hamiltonian import with_hamiltonian

        return with_hamiltonian(wavefunction)
    return wavefunction


def _mean_field_parts(mf: Any) -> Parts:
    method, notes = describe_method(mf)
    coefficients, occupations, energies = (getattr(mf, f"mo_{q}") for q in ORBITAL_QUANTITIES)
    parts = Parts(
        mol=mf.mol,
        coefficients=per_spin(coefficients, 2),
        occupations=per_spin(occupations, 1) or None,
        energies=per_spin(energies, 1) or None,
        method=method,
        totals=[float(mf.e_tot)] if mf.e_tot else [],
        notes=notes,
    )
    if parts.coefficients and not mf.converged:
        parts.notes.append("the self-consistent field is not converged")
    return parts


def _take_vectors(parts: Parts, ci: Any, threshold: float) -> None:
    """Put CI vectors over the orbitals of `parts` in the place of their determinant and its energy."""
    given = ci if isinstance(ci, CIVectors) else vectors_of_solver(ci)
    if not parts.coefficients:
        raise ConversionError(
            "there are no orbitals", where="CI vectors", expected="those that the vectors are over",
            remedy="give the mean-field object, or a Mole with mo_coeff",
        )  # fmt: skip
    n_orbitals = parts.coefficients[0].shape[1]
    if not isinstance(ci, CIVectors) and given.n_active != n_orbitals:
        raise ConversionError(
            f"a CI of {given.n_active} orbitals", where="CI vectors", expected=f"all {n_orbitals} of the calculation",
            remedy="pass CIVectors, which say where the active orbitals are",
        )  # fmt: skip
    apart = len(parts.coefficients) == 2
    parts.expansion = expansion_from_ci(
        given.vectors, n_core=given.n_core, n_active=given.n_active, electrons=given.electrons,
        n_orbitals=(n_orbitals, n_orbitals), sets=("up", "down") if apart else ("spatial", "spatial"),
        strings=given.strings, threshold=threshold,
    )  # fmt: skip
    cores = given.n_core if isinstance(given.n_core, tuple) else (given.n_core, given.n_core)
    parts.electrons = (cores[0] + given.electrons[0], cores[1] + given.electrons[1])
    parts.occupations = occupations_of(parts.expansion, parts.electrons, n_orbitals)
    parts.roles = [roles_of(core, given.n_active, n_orbitals) for core in cores[: len(parts.coefficients)]]
    parts.totals = [float(e) for e in given.totals]
    whole = given.strings is None and not hasattr(given.vectors, "_strs")
    kind = ("UCASCI" if apart else "CASCI") if whole else "selected CI"
    parts.method = f"{kind}({sum(given.electrons)},{given.n_active})"
    states = len(np.asarray(parts.expansion.coefficients))
    if len(parts.totals) not in (0, states):
        raise ConversionError(
            f"{len(parts.totals)} energies for {states} states", where="CI vectors", expected="one for each",
            remedy="give all of them, or none",
        )  # fmt: skip
    if not parts.totals:
        parts.notes.append("the energies of the CI are not known: CIVectors(..., totals=...) takes them")
