"""From a Molden file to a model."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime, timezone
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx._version import __version__
from qwfx.converters.determinant import single_determinant
from qwfx.converters.molden.charges import atomic_numbers, cores_of_options, effective_charges
from qwfx.converters.molden.electrons import OrbitalGroup, count_electrons, group_orbitals
from qwfx.converters.molden.functions import in_our_order
from qwfx.converters.molden.readings import Choice, choose
from qwfx.converters.molden.sections import Molden, parse
from qwfx.converters.molden.witness import slater_orbitals, witness_orbitals
from qwfx.converters.plugin import Progress, Reading
from qwfx.converters.witness import witness_points
from qwfx.elements import SYMBOLS
from qwfx.model import OrbitalSet, Provenance, Spin, System, Wavefunction, Witness

__all__ = ["read"]

SPINS: dict[str, Spin] = {"spatial": "both", "up": "up", "down": "down"}


def read(path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
    """Read `path`. Raises FileError, ConversionError, UnsupportedError."""
    if progress:
        progress("reading Molden sections (the parser is compiled on first use)", 0.0)
    molden = parse(path)
    positions = np.array([atom.position for atom in molden.atoms])
    groups, notes = group_orbitals(molden)
    electrons = count_electrons(molden, groups, sum(a.charge for a in molden.atoms), options.get("electrons"))
    groups = electrons.groups
    notes += electrons.notes
    numbers = atomic_numbers(molden)
    potentials, cores, core_notes = cores_of_options(molden, numbers, options)
    effective, charge_notes = effective_charges(molden, numbers, cores, electrons.n_up + electrons.n_down)
    notes += core_notes + charge_notes
    labels = tuple(_label(atom.label) for atom in molden.atoms)
    system = System(electrons.n_up, electrons.n_down, labels, numbers, effective, positions)
    reduced = [labels[i] for i in np.flatnonzero((effective < numbers) & (effective > 0))]
    if reduced and potentials is None:
        notes.append(
            f"the file has no core potential for {', '.join(reduced[:6])}: only the orbitals are good "
            "without; add it from PySCF's library with --set core-potential=ELEMENT=NAME, several separated by commas"
        )
    if progress:
        progress("trying readings", 0.4)
    sets, choice = _functions(molden, positions, groups, options)
    notes.append(choice.note)
    notes += molden.remarks
    if molden.skipped:
        notes.append("sections that were not used: " + ", ".join(molden.skipped))
    orbitals = {g.name: _orbital_set(molden, g, matrix) for g, matrix in zip(groups, sets, strict=True)}
    expansion = single_determinant(orbitals, electrons.n_up, electrons.n_down)
    if expansion is None:
        notes.append("the occupations are not those of one determinant: no expansion is written")
    if progress:
        progress("witness", 0.7)
    step = {
        "activity": "read from a Molden file",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": path.name, "sha256": molden.sha256}],
        "generated": [],
        "notes": list(notes),
    }
    wavefunction = Wavefunction(
        system,
        potentials=potentials,
        basis=choice.basis,
        orbitals=orbitals,
        expansion=expansion,
        witness=_witness(molden, positions, groups, choice),
        provenance=Provenance((step,)),
    )
    return Reading(wavefunction, tuple(notes))


def _label(label: str) -> str:
    """A bare symbol in the usual case, anything else as it is."""
    return label.capitalize() if label.capitalize() in SYMBOLS[1:] else label


def _functions(
    molden: Molden, positions: NDArray[np.float64], groups: list[OrbitalGroup], options: Mapping[str, str]
) -> tuple[list[NDArray[np.float64]], Choice]:
    """The orbitals of each group over the basis of the chosen reading."""
    sets = [in_our_order(molden, group.rows) for group in groups]
    choice = choose(molden, positions, sets, options.get("reading"), options.get("signs"))
    if not np.all(choice.factors == 1.0):
        for matrix in sets:
            matrix *= choice.factors
    return sets, choice


def _orbital_set(molden: Molden, group: OrbitalGroup, matrix: NDArray[np.float64]) -> OrbitalSet:
    def column(values: list[Any]) -> list[Any]:
        return [values[int(r)] for r in group.rows]

    energies, symmetries = column(molden.orbitals.energies), column(molden.orbitals.symmetries)
    # Programs write zeros, or the occupations, where they have no energies.
    without = not group.has_energies or None in energies or not any(energies)
    without = without or energies == column(molden.orbitals.occupations)
    return OrbitalSet(
        SPINS[group.name],
        matrix,
        energies=None if without else np.array(energies, dtype=np.float64),
        occupations=group.occupations,
        irreps=None if any(s is None for s in symmetries) else tuple(symmetries),
    )


def _witness(
    molden: Molden, positions: NDArray[np.float64], groups: list[OrbitalGroup], choice: Choice
) -> Witness:
    points = witness_points(positions)
    if molden.slater:
        normalised = choice.reading.normalised
        told = {group.name: slater_orbitals(molden, normalised, group.rows, points) for group in groups}
        # These formulas are qwfx's own, if of another room than the evaluator's.
        return Witness("qwfx.converters.molden.witness", __version__, False, points, told)
    import pyscf

    told = {group.name: witness_orbitals(molden, choice.reading, group.rows, points) for group in groups}
    return Witness("pyscf", str(pyscf.__version__), True, points, told)
