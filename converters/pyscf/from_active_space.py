"""Complete-active-space calculations: natural or other active orbitals, and the CI vectors as expansion."""

from __future__ import annotations

from typing import Any

import numpy as np

from qwfx.converters.pyscf.ci_vectors import expansion_from_ci
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
    """Orbitals, occupations and CI vectors of a spin-restricted CASCI or CASSCF object.

    Entries below `threshold` in every state are left out. Raises ConversionError if it has not been run;
    UnsupportedError for orbitals of each spin, for solvers whose states are not CI vectors, and for what
    `describe_method` refuses of the reference.
    """
    from pyscf.mcscf.mc1step import CASSCF

    where = f"PySCF object of class {type(calculation).__name__}"
    describe_method(calculation._scf)
    if calculation.mo_coeff is None or calculation.ci is None:
        raise ConversionError(
            "the calculation has no orbitals or no CI vector", where=where, expected="a run", remedy="call kernel()"
        )
    n_core, n_active = calculation.ncore, calculation.ncas
    electrons = tuple(int(n) for n in calculation.nelecas)
    if np.ndim(n_core):
        raise UnsupportedError(
            "the active space has orbitals of each spin", where=where, expected="spin-restricted orbitals",
            remedy="take orbitals and CI vectors apart: from_pyscf of the reference, then with_ci_vectors",
        )  # fmt: skip
    several = isinstance(calculation.ci, (list, tuple))
    vectors = list(calculation.ci) if several else [calculation.ci]
    if not all(isinstance(vector, np.ndarray) for vector in vectors):
        raise UnsupportedError(
            f"the state is {type(vectors[0]).__name__}, not a CI vector", where=where,
            expected="PySCF's own full or selected CI",
            remedy="pass the determinants as a list; the orbitals alone can be taken with mo_coeff and mo_occ",
        )  # fmt: skip
    coefficients, _, energies = (getattr(calculation, f"mo_{q}", None) for q in ORBITAL_QUANTITIES)
    n_orbitals = int(calculation.mo_coeff.shape[1])
    solver = calculation.fcisolver
    one_state = calculation.ci if not several or hasattr(solver, "weights") else calculation.ci[0]
    density = np.asarray(solver.make_rdm1(one_state, n_active, electrons))  # of the average where there is one
    occupations = np.zeros(n_orbitals)
    occupations[:n_core] = 2.0
    occupations[n_core : n_core + n_active] = np.diag(density)
    name = "CASSCF" if isinstance(calculation, CASSCF) else "CASCI"
    averaged = " state average" if name == "CASSCF" and len(vectors) > 1 else ""
    totals = getattr(calculation, "e_states", None) if len(vectors) > 1 else None
    parts = Parts(
        mol=calculation.mol,
        coefficients=per_spin(coefficients, 2),
        occupations=[occupations],
        energies=per_spin(energies, 1) or None,
        method=f"{name}({sum(electrons)},{n_active}){averaged}{reference_details(calculation._scf)}",
        totals=[float(e) for e in np.atleast_1d(calculation.e_tot if totals is None else totals)],
        roles=("core",) * n_core + ("active",) * n_active + ("virtual",) * (n_orbitals - n_core - n_active),
        electrons=(n_core + electrons[0], n_core + electrons[1]),
        expansion=expansion_from_ci(
            vectors, n_core=n_core, n_active=n_active, electrons=(electrons[0], electrons[1]),
            n_orbitals=(n_orbitals, n_orbitals), threshold=threshold,
        ),
    )
    if np.abs(density - np.diag(np.diag(density))).max(initial=0.0) > NATURAL_WITHIN:
        parts.notes.append("the active orbitals are not natural orbitals: each occupation is an expectation value")
    if not np.all(calculation.converged):
        parts.notes.append("the calculation is not converged")
    return parts
