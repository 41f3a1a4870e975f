"""The parts of a PySCF calculation, checked and put together as a `Wavefunction`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime, timezone
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx._version import __version__
from qwfx.converters.configurations import configurations_by_sum
from qwfx.converters.determinant import bit_string, single_determinant
from qwfx.converters.pyscf.from_mole import basis_of, check_molecule, function_order, potentials_of, system_of
from qwfx.converters.witness import orbitals_by_pyscf, witness_points
from qwfx.errors import ConversionError
from qwfx.model import Energies, Expansion, OrbitalSet, Provenance, Spin, System, Wavefunction, Witness

__all__ = ["Parts", "assemble", "bit_string", "energies_table", "per_spin", "provenance_step", "single_determinant"]


@dataclass
class Parts:
    """What a calculation consists of, in PySCF's order and shapes, before it becomes a model."""

    mol: Any
    coefficients: list[NDArray[Any]]
    """One array (F, M), or two (up, down)."""
    occupations: list[NDArray[np.float64]] | None = None
    energies: list[NDArray[np.float64]] | None = None
    method: str | None = None
    totals: list[float] = field(default_factory=list)
    """Total energy of each state, hartree."""
    roles: list[tuple[str, ...]] | None = None
    """For each set."""
    electrons: tuple[int, int] | None = None
    """Up and down, where the state has another spin than the molecule."""
    expansion: Expansion | None = None
    """Of an active space; the determinant of integer occupations is made here."""
    notes: list[str] = field(default_factory=list)

    @property
    def sets(self) -> list[tuple[str, Spin]]:
        """Name and spin of each orbital set."""
        return [("spatial", "both")] if len(self.coefficients) == 1 else [("up", "up"), ("down", "down")]


def per_spin(values: Any, rank: int) -> list[NDArray[Any]]:
    """A list of one array (spin-restricted) or of two (up, down); empty if there is nothing."""
    if values is None:
        return []
    if isinstance(values, (tuple, list)) or np.ndim(values) == rank + 1:
        arrays = [np.array(v) for v in values]
        if len(arrays) == 2 and all(a.ndim == rank and a.dtype.kind in "fciu" for a in arrays):
            return arrays
    elif np.ndim(values) == rank and np.array(values).dtype.kind in "fciu":
        return [np.array(values)]
    raise ConversionError(
        f"an array of orbitals has the shape {np.shape(values)}",
        where="PySCF object",
        expected="one array of rank "
        f"{rank} for spin-restricted orbitals or two of them, for up and down",
        remedy="check the orbitals, their occupations and their energies",
    )


def assemble(
    parts: Parts, *, activity: str, witness: bool, used: tuple[dict[str, str], ...] = ()
) -> Wavefunction:
    """Put the model together. Raises ConversionError for shapes that disagree, UnsupportedError as `check_molecule`."""
    check_molecule(parts.mol)
    _check_shapes(parts)
    potentials, potential_notes = potentials_of(parts.mol)
    parts.notes += potential_notes
    system = system_of(parts.mol)
    if parts.electrons is not None:
        system = replace(system, n_up=parts.electrons[0], n_down=parts.electrons[1])
    order = function_order(parts.mol)
    orbitals = {}
    for index, (name, spin) in enumerate(parts.sets if parts.coefficients else []):
        coefficients = parts.coefficients[index]
        orbitals[name] = OrbitalSet(
            spin=spin,
            coefficients=np.ascontiguousarray(coefficients[order].T),
            energies=_real(parts.energies, index),
            occupations=_real(parts.occupations, index),
            roles=None if parts.roles is None else parts.roles[index],
            irreps=_irreps(parts, coefficients),
        )
    expansion = parts.expansion
    if orbitals and expansion is None:
        expansion = single_determinant(orbitals, system.n_up, system.n_down)
    if orbitals and expansion is None and parts.occupations is not None:
        parts.notes.append("the occupations are not those of a single determinant, so no expansion is written")
    proof = _witness(parts, system, expansion, potentials is None) if witness and orbitals else None
    return Wavefunction(
        system=system,
        potentials=potentials,
        basis=basis_of(parts.mol),
        orbitals=orbitals,
        expansion=expansion,
        energies=energies_table(parts.method, parts.totals, float(parts.mol.energy_nuc())),
        witness=proof,
        provenance=Provenance(steps=(provenance_step(activity, used, parts.notes),)),
    )


def provenance_step(
    activity: str, used: tuple[dict[str, str], ...], notes: list[str]
) -> dict[str, Any]:
    """One step in the terms of W3C PROV."""
    import pyscf

    return {
        "activity": activity,
        "agent": f"qwfx {__version__}, PySCF {pyscf.__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": list(used),
        "generated": [],
        "notes": list(notes),
    }


def energies_table(method: str | None, totals: Sequence[float], repulsion: float) -> Energies:
    """The total energy of each state and the repulsion of the nuclei (hartree)."""
    rows = [(state, method or "unknown", total, "total") for state, total in enumerate(totals)]
    rows.append((0, "point charges", repulsion, "nuclear-repulsion"))
    states, methods, values, quantities = zip(*rows, strict=True)
    return Energies(
        state=np.array(states, dtype=np.int32),
        method=methods,
        value=np.array(values, dtype=np.float64),
        uncertainty=np.zeros(len(rows)),
        quantity=quantities,
    )


def _real(values: list[NDArray[Any]] | None, index: int) -> NDArray[np.float64] | None:
    return None if values is None else np.asarray(values[index], dtype=np.float64)


def _check_shapes(parts: Parts) -> None:
    n_functions = parts.mol.nao_nr()
    for index, coefficients in enumerate(parts.coefficients):
        n_orbitals = coefficients.shape[1]
        problem = ""
        if coefficients.shape[0] != n_functions:
            problem = f"the orbitals have {coefficients.shape[0]} coefficients each"
        elif not np.isfinite(coefficients).all():
            problem = "the orbital coefficients are not all finite"
        for word, values in (("occupations", parts.occupations), ("energies", parts.energies)):
            if values is not None and (
                len(values) != len(parts.coefficients) or values[index].shape != (n_orbitals,)
            ):
                problem = f"the orbital {word} have the shapes {[v.shape for v in values]}"
        if problem:
            raise ConversionError(
                problem,
                where="PySCF object",
                expected=f"{n_functions} functions and {n_orbitals} orbitals for each of "
                f"{len(parts.coefficients)} spin(s), finite numbers",
                remedy="check that the orbitals belong to this molecule, and the setting of mol.cart",
            )


def _irreps(parts: Parts, coefficients: NDArray[Any]) -> tuple[str, ...] | None:
    """Irrep of each orbital in PySCF's spelling where the molecule has symmetry switched on."""
    mol = parts.mol
    if not mol.symmetry or mol.symm_orb is None:
        return None
    from pyscf import symm

    try:
        labels = symm.label_orb_symm(mol, mol.irrep_name, mol.symm_orb, coefficients, tol=1e-6)
    except ValueError:  # what PySCF raises for orbitals that mix representations
        parts.notes.append(f"the orbitals do not have the symmetry {mol.groupname}, so no irreps are written")
        return None
    return tuple(str(label) for label in labels)


def _witness(parts: Parts, system: System, expansion: Expansion | None, coulomb_alone: bool) -> Witness:
    import pyscf

    places = {name: index for index, (name, _) in enumerate(parts.sets)}

    def orbitals(name: str, points: NDArray[np.float64]) -> NDArray[Any]:
        seen = orbitals_by_pyscf(parts.mol, parts.coefficients[places[name]], points)
        return np.concatenate([seen.values[None], np.moveaxis(seen.gradients, -1, 0), seen.laplacians[None]])

    configurations = None
    if expansion is not None:
        configurations, why = configurations_by_sum(system, expansion, orbitals, with_energies=coulomb_alone)
        if configurations is None:
            parts.notes.append(f"no witness at whole configurations of electrons: {why}")
    points = witness_points(parts.mol.atom_coords())
    return Witness(
        evaluator="pyscf",
        evaluator_version=pyscf.__version__,
        independent=True,
        points=points,
        orbitals={
            name: orbitals_by_pyscf(parts.mol, coefficients, points)
            for (name, _), coefficients in zip(parts.sets, parts.coefficients, strict=True)
        },
        configurations=configurations,
    )
