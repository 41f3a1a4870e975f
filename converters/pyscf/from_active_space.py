"""Complete-active-space calculations: natural or other active orbitals, and the CI vectors as expansion."""

from __future__ import annotations

from typing import Any

import numpy as np

from qwfx.converters.pyscf.ci_vectors import expansion_from_ci, roles_of
from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES, describe_method, reference_details
from qwfx.converters.pyscf.parts import Parts, per_spin
from qwfx.errors import ConversionError, UnsupportedError

__all__ = ["active_space_parts", "is_active_space"]

NATURAL_WITHIN = 1e-6  # electrons, off the diagonal of the density matrix


def is_active_space(calculation: Any) -> bool:
    """Whether the object is PySCF's CASCI or CASSCF of whatever kind."""
    from pyscf.mcscf.casci import CASBase

    return isinstance(calculation, CASBase)


def active_space_parts(calculation: Any, threshold: float = 0.0) -> Parts:
    """Orbitals, occupations and CI vectors of a CASCI or CASSCF object, of orbitals of each spin too.

    Entries below `threshold` in every state are left out. Raises ConversionError if it has not been run;
    UnsupportedError for solvers whose states are not CI vectors, and for what `describe_method` refuses of
    the reference.
    """
    from pyscf.mcscf.mc1step import CASSCF
    from pyscf.mcscf.umc1step import UCASSCF

    where = f"PySCF object of class {type(calculation).__name__}"
    describe_method(calculation._scf)
    if calculation.mo_coeff is None or calculation.ci is None:
        raise ConversionError(
            "the calculation has no orbitals or no CI vector", where=where, expected="a run", remedy="call kernel()"
        )
    n_active = int(calculation.ncas)
    electrons = tuple(int(n) for n in calculation.nelecas)
    apart = np.ndim(calculation.ncore) > 0
    cores = tuple(int(n) for n in np.broadcast_to(np.asarray(calculation.ncore), 2))
    several = isinstance(calculation.ci, (list, tuple))
    vectors = list(calculation.ci) if several else [calculation.ci]
    if not all(isinstance(vector, np.ndarray) for vector in vectors):
        raise UnsupportedError(
            f"the state is {type(vectors[0]).__name__}, not a CI vector", where=where,
            expected="PySCF's own full or selected CI",
            remedy="pass the determinants as a list; the orbitals alone can be taken with mo_coeff and mo_occ",
        )  # fmt: skip
    coefficients, _, energies = (getattr(calculation, f"mo_{q}", None) for q in ORBITAL_QUANTITIES)
    orbitals = per_spin(coefficients, 2)
    n_orbitals = orbitals[0].shape[1]
    solver = calculation.fcisolver
    one_state = calculation.ci if not several or hasattr(solver, "weights") else calculation.ci[0]
    of_spins = np.asarray(solver.make_rdm1s(one_state, n_active, electrons))  # of the average where there is one
    densities = list(of_spins) if apart else [of_spins.sum(axis=0)]
    occupations = []
    for density, n_core in zip(densities, cores, strict=False):
        occupations.append(np.zeros(n_orbitals))
        occupations[-1][:n_core] = 1.0 if apart else 2.0
        occupations[-1][n_core : n_core + n_active] = np.diag(density)
    name = ("U" if apart else "") + ("CASSCF" if isinstance(calculation, (CASSCF, UCASSCF)) else "CASCI")
    averaged = " state average" if name.endswith("SCF") and len(vectors) > 1 else ""
    totals = getattr(calculation, "e_states", None) if len(vectors) > 1 else None
    parts = Parts(
        mol=calculation.mol,
        coefficients=orbitals,
        occupations=occupations,
        energies=per_spin(energies, 1) or None,
        method=f"{name}({sum(electrons)},{n_active}){averaged}{reference_details(calculation._scf)}",
        totals=[float(e) for e in np.atleast_1d(calculation.e_tot if totals is None else totals)],
        roles=[roles_of(n_core, n_active, n_orbitals) for n_core, _ in zip(cores, orbitals, strict=False)],
        electrons=(cores[0] + electrons[0], cores[1] + electrons[1]),
        expansion=expansion_from_ci(
            vectors, n_core=(cores[0], cores[1]), n_active=n_active, electrons=(electrons[0], electrons[1]),
            n_orbitals=(n_orbitals, n_orbitals), sets=("up", "down") if apart else ("spatial", "spatial"),
            threshold=threshold,
        ),
    )
    if any(np.abs(own - np.diag(np.diag(own))).max(initial=0.0) > NATURAL_WITHIN for own in densities):
        parts.notes.append("the active orbitals are not natural orbitals: each occupation is an expectation value")
    converged = getattr(calculation, "converged", None)
    if not np.all(getattr(solver, "converged", True) if converged is None else converged):
        parts.notes.append("the calculation is not converged")
    return parts
