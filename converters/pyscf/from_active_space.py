"""Complete-active-space calculations: natural or other active orbitals, and the CI vectors as expansion."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES, describe_method, reference_details
from qwfx.converters.pyscf.parts import Parts, bit_string, per_spin
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.model import Expansion

__all__ = ["active_space_parts", "full_expansion", "is_active_space"]

NATURAL_WITHIN = 1e-6  # electrons, off the diagonal of the density matrix


def is_active_space(calculation: Any) -> bool:
    """Whether the object is PySCF's CASCI or CASSCF of whatever kind."""
    from pyscf.mcscf.casci import CASBase

    return isinstance(calculation, CASBase)


def active_space_parts(calculation: Any) -> Parts:
    """Orbitals, occupations and CI vectors of a spin-restricted CASCI or CASSCF object.

    Raises ConversionError if it has not been run; UnsupportedError for other CI solvers than full CI, whose vectors are
    not over all strings, and for what `describe_method` refuses of the reference.
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
    vectors = _vectors(calculation, electrons, where)
    coefficients, _, energies = (getattr(calculation, f"mo_{q}", None) for q in ORBITAL_QUANTITIES)
    n_orbitals = int(calculation.mo_coeff.shape[1])
    solver = calculation.fcisolver
    one_state = calculation.ci if len(vectors) == 1 or hasattr(solver, "weights") else calculation.ci[0]
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
        expansion=full_expansion(vectors, n_core, n_active, electrons, n_orbitals),
    )
    if np.abs(density - np.diag(np.diag(density))).max(initial=0.0) > NATURAL_WITHIN:
        parts.notes.append("the active orbitals are not natural orbitals: each occupation is an expectation value")
    if not np.all(calculation.converged):
        parts.notes.append("the calculation is not converged")
    return parts


def _vectors(calculation: Any, electrons: tuple[int, ...], where: str) -> NDArray[Any]:
    """(states, up strings, down strings)."""
    from pyscf.fci import cistring

    shape = tuple(int(cistring.num_strings(calculation.ncas, n)) for n in electrons)
    several = isinstance(calculation.ci, (list, tuple))
    try:
        vectors = np.array([np.asarray(v) for v in (calculation.ci if several else [calculation.ci])])
        # PySCF's solvers of chosen determinants mark their vectors with the strings that they chose
        chosen = any(hasattr(v, "_strs") for v in (calculation.ci if several else [calculation.ci]))
        if chosen or vectors[0].size != shape[0] * shape[1] or np.ndim(calculation.ncore):
            raise ValueError
        return vectors.reshape(len(vectors), *shape)
    except (ValueError, TypeError) as error:
        raise UnsupportedError(
            "the CI vector is not that of a spin-restricted full CI in the active space",
            where=where,
            expected=f"an array of {shape[0]} up by {shape[1]} down strings",
            remedy="use PySCF's own full-CI solver; its orbitals alone can be taken with mo_coeff and mo_occ",
        ) from error


def full_expansion(
    vectors: NDArray[Any], n_core: int, n_active: int, electrons: tuple[int, ...], n_orbitals: int
) -> Expansion:
    """CI vectors (states, up, down) over all active strings as sparse matrix; entries that are zero in all states go.

    PySCF's strings ascend as integers, and a doubly occupied core below them keeps that order. The sign of a string's
    operators reversed is the same for all strings, so coefficients carry over as they are.
    """
    from pyscf.fci import cistring

    strings = []
    for n in electrons:
        active = cistring.make_strings(range(n_active), n)
        occupied = [[p for p in range(n_active) if int(s) >> p & 1] for s in active]
        core = list(range(n_core))
        rows = [bit_string(np.array(core + [n_core + p for p in o], dtype=np.int64), n_orbitals) for o in occupied]
        strings.append(np.concatenate(rows))
    present = np.any(vectors != 0, axis=0)
    used_up, used_down = present.any(axis=1), present.any(axis=0)
    present = present[used_up][:, used_down]
    _, columns = np.nonzero(present)
    return Expansion(
        up_set="spatial",
        down_set="spatial",
        up_strings=strings[0][used_up],
        down_strings=strings[1][used_down],
        row_start=np.concatenate([[0], np.cumsum(present.sum(axis=1))]).astype(np.int64),
        columns=columns.astype(np.int64),
        coefficients=vectors[:, used_up][:, :, used_down][:, present],
    )
