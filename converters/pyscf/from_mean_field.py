"""A PySCF calculation, or a molecule with orbitals, as a `Wavefunction`."""

from __future__ import annotations

from typing import Any

from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES, describe_method
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
