"""From a Molden file to a model."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime, timezone
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx._version import __version__
from qwfx.converters.determinant import single_determinant
from qwfx.converters.molden.electrons import OrbitalGroup, charges, count_electrons, group_orbitals
from qwfx.converters.molden.functions import in_our_order
from qwfx.converters.molden.readings import Choice, choose
from qwfx.converters.molden.sections import Molden, parse
from qwfx.converters.molden.witness import slater_orbitals, witness_orbitals
from qwfx.converters.plugin import Progress, Reading
from qwfx.converters.witness import witness_points
from qwfx.errors import ConversionError
from qwfx.model import OrbitalSet, Potentials, Provenance, Spin, System, Wavefunction, Witness

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
    notes += electrons.notes
    n = electrons.n_up + electrons.n_down
    numbers, effective, charge_notes = charges(molden, n, _core_option(options.get("core-electrons")))
    notes += charge_notes
    labels = tuple(atom.label for atom in molden.atoms)
    potentials, effective = _potentials(options.get("core-potential"), labels, numbers, effective, notes)
    if progress:
        progress("trying readings", 0.4)
    sets, choice = _functions(molden, positions, groups, options)
    notes.append(choice.note)
    if molden.skipped:
        notes.append("sections that were not used: " + ", ".join(molden.skipped))
    orbitals = {g.name: _orbital_set(molden, g, matrix) for g, matrix in zip(groups, sets, strict=True)}
    if progress:
        progress("witness", 0.7)
    witness = _witness(molden, positions, groups, choice)
    step = {
        "activity": "read from a Molden file",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": path.name, "sha256": hashlib.sha256(path.read_bytes()).hexdigest()}],
        "notes": list(notes),
    }
    found = Wavefunction(
        System(electrons.n_up, electrons.n_down, labels, numbers, effective, positions),
        potentials=potentials,
        basis=choice.basis,
        orbitals=orbitals,
        witness=witness,
        provenance=Provenance((step,)),
    )
    expansion = single_determinant(orbitals, electrons.n_up, electrons.n_down)
    if expansion is None:
        notes.append("the occupations are not those of one determinant: no expansion is written")
    return Reading(replace(found, expansion=expansion), tuple(notes))


def _core_option(text: str | None) -> dict[str, int]:
    """``I=46,Br=28`` as a mapping."""
    if not text:
        return {}
    found = {}
    for part in text.split(","):
        key, equals, value = part.partition("=")
        if not equals or not value.strip().isdecimal():
            raise ConversionError(
                f"{text!r}",
                where="--set core-electrons",
                expected="ELEMENT=NUMBER, such as I=46, more of them separated by commas",
                remedy="correct the option",
            )
        found[key.strip()] = int(value)
    return found


def _potentials(
    text: str | None, labels: tuple[str, ...], numbers: NDArray[np.int32], effective: NDArray[np.float64],
    notes: list[str],
) -> tuple[Potentials | None, NDArray[np.float64]]:  # fmt: skip
    """Core potentials from PySCF's library, since a Molden file carries none."""
    if not text:
        reduced = [labels[i] for i in np.flatnonzero((effective < numbers) & (effective > 0))]
        if reduced:
            notes.append(
                f"the file has no core potential for {', '.join(reduced[:6])}: add it from PySCF's library with "
                "--set core-potential=ELEMENT=NAME"
            )
        return None, effective
    from qwfx.converters.pyscf import potentials_from_library

    names = {}
    for part in text.split(","):
        key, equals, value = part.partition("=")
        if not equals or not value:
            raise ConversionError(
                f"{text!r}",
                where="--set core-potential",
                expected="ELEMENT=NAME, such as I=stuttgart, more of them separated by commas",
                remedy="correct the option",
            )
        names[key.strip()] = value.strip()
    ghosts = effective == 0
    potentials, core = potentials_from_library(names, labels, np.where(ghosts, 0, numbers).tolist())
    wrong = [i for i in np.flatnonzero(core > 0) if effective[i] < numbers[i] and effective[i] != numbers[i] - core[i]]
    if wrong:
        i = int(wrong[0])
        raise ConversionError(
            f"the potential {text} replaces {core[i]} electrons of {labels[i]}",
            where="--set core-potential",
            expected=f"{numbers[i] - effective[i]:g}, as the charges and electrons of the file have it",
            remedy="name the potential that the calculation used",
        )
    return potentials, np.where(core > 0, numbers - core, effective).astype(np.float64)


def _functions(
    molden: Molden, positions: NDArray[np.float64], groups: list[OrbitalGroup], options: Mapping[str, str]
) -> tuple[list[NDArray[np.float64]], Choice]:
    """The orbitals of each group over the basis of the chosen reading."""
    sets = [in_our_order(molden, molden.orbitals.coefficients[group.rows]) for group in groups]
    choice = choose(molden, positions, sets, options.get("reading"), options.get("signs"))
    if not np.all(choice.factors == 1.0):
        for matrix in sets:
            matrix *= choice.factors
    return sets, choice


def _orbital_set(molden: Molden, group: OrbitalGroup, matrix: NDArray[np.float64]) -> OrbitalSet:
    def column(values: list[Any]) -> list[Any]:
        return [values[int(r)] for r in group.rows]

    energies, symmetries = column(molden.orbitals.energies), column(molden.orbitals.symmetries)
    occupations = group.occupations
    if occupations is not None and not occupations.any():
        occupations = None  # all zero means that the program did not write them
    return OrbitalSet(
        SPINS[group.name],
        matrix,
        energies=None if any(e is None for e in energies) else np.array(energies, dtype=np.float64),
        occupations=occupations,
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
