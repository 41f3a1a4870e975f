"""Tier *consistency*: reference energies, Jastrow terms, witness and provenance as far as no formula is needed."""

from __future__ import annotations

import json
from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.rules.consistency_system import MANY_ATOMS
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Remark, rule
from qwfx.rules.wording import at, every, figure, listed

__all__: list[str] = []


@rule(
    name="energies-table",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/energies", "/system/labels"), rules=("finite-numbers",)),
    summary="states count from 0, uncertainties are not negative, and no number is given twice with two values",
)
def energies_table(file: Inspection) -> Iterator[Remark]:
    state, value = file.read("/energies/state"), file.read("/energies/value")
    uncertainty = file.read("/energies/uncertainty")
    for i in np.flatnonzero(state < 0):
        yield Problem(at("/energies/state", i), "0 or more", str(state[i]), "count states from 0")
    for i in np.flatnonzero(uncertainty < 0):
        yield Problem(
            at("/energies/uncertainty", i),
            "one standard error, 0 for a deterministic number",
            f"{uncertainty[i]:g}",
            "write the standard error",
        )
    known: dict[tuple[int, str, str], int] = {}
    keys = zip(state.tolist(), file.strings("/energies/method"), file.strings("/energies/quantity"), strict=True)
    for row, key in enumerate(keys):
        first = known.setdefault(key, row)
        slack = 1e-8 + 5 * float(abs(uncertainty[row]) + abs(uncertainty[first]))
        if abs(value[row] - value[first]) > slack:
            yield Problem(
                at("/energies/value", row),
                f"{value[first]:.8f}, as in row {first} for the same state, method and quantity",
                f"{value[row]:.8f}",
                "keep one of the rows, or name the methods apart",
                Severity.WARNING,
            )
        elif key[2] == "total" and value[row] > 0 and file.shape("/system/labels")[0]:
            yield Problem(
                at("/energies/value", row),
                "a total energy below 0 hartree, that of all particles apart",
                f"{value[row]:.8f}",
                "check the unit and what the number is",
                Severity.WARNING,
            )
    yield Covered(every(len(value), "row"))


@rule(
    name="nuclear-repulsion",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(
        members=("/energies", "/system/positions", "/system/effective_charges"),
        absent=("/system/cell",),
        rules=("finite-numbers", "coincident-nuclei", "energies-table"),
    ),
    cost="all pairs of atoms",
    summary="a stored nuclear repulsion is that of the stored charges and positions",
)
def nuclear_repulsion(file: Inspection) -> Iterator[Remark]:
    rows = [i for i, word in enumerate(file.strings("/energies/quantity")) if word == "nuclear-repulsion"]
    if not rows:
        raise PremiseError("no row of /energies has the quantity nuclear-repulsion")
    positions, charges = file.positions, file.read("/system/effective_charges").astype(np.float64)
    if len(charges) > MANY_ATOMS:
        raise PremiseError(f"{len(charges)} atoms; pairs of atoms are looked at for up to {MANY_ATOMS}")
    i, j = np.triu_indices(len(charges), 1)
    i, j = i[charges[i] * charges[j] > 0], j[charges[i] * charges[j] > 0]
    ours = float(np.sum(charges[i] * charges[j] / np.linalg.norm(positions[i] - positions[j], axis=1)))
    for row in rows:
        stored = float(file.read("/energies/value")[row])
        yield Measured(f"deviation {figure(stored - ours)} hartree")
        if abs(stored - ours) > REPULSION_SLACK * max(1.0, abs(ours)):
            ratio = stored / ours if ours else 0.0
            hint = {
                1.890: " (the positions are too long by 1.8897, angstrom taken twice)",
                0.529: " (the positions are too short by 0.5292: angstrom written as bohr)",
            }
            why = next((text for factor, text in hint.items() if abs(ratio - factor) < 2e-3), "")
            yield Problem(
                at("/energies/value", row),
                f"{ours:.8f} hartree, from charges and positions",
                f"{stored:.8f}{why}",
                "correct positions, charges or the stored number",
            )


REPULSION_SLACK = 1e-6
"""Relative; positions printed with seven decimals give 1e-7."""


@rule(
    name="witness-sets",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/witness/orbitals", "/orbitals")),
    purposes=("orbitals", "trial"),
    summary="the witness speaks of orbital sets that are in the file, and of each of them",
)
def witness_sets(file: Inspection) -> Iterator[Remark]:
    spoken_of = file.members("/witness/orbitals")
    for name in spoken_of:
        if name not in file.orbital_sets:
            yield Problem(
                f"/witness/orbitals/{name}",
                f"the name of an orbital set: {listed(file.orbital_sets)}",
                repr(name),
                "name the witness as the set, or remove it",
            )
    for name in file.orbital_sets:
        if name not in spoken_of:
            yield Problem(
                "/witness/orbitals",
                f"values of set {name!r}",
                "none",
                "have the producer's program evaluate the orbitals of this set too",
                Severity.WARNING,
            )
    yield Covered(f"sets {listed(spoken_of)}")


@rule(
    name="witness-points",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/witness/points", "/system/positions"), rules=("finite-numbers",)),
    purposes=("orbitals", "trial"),
    summary="no witness point stands on a nucleus, and no two are the same",
)
def witness_points(file: Inspection) -> Iterator[Remark]:
    """On a nucleus the Laplacian of a Slater function does not exist, and that of a Gaussian says little."""
    points, positions = file.read("/witness/points").astype(np.float64), file.positions
    for k, point in enumerate(points):
        if len(positions) and np.linalg.norm(positions - point, axis=1).min() < ON_A_NUCLEUS:
            yield Problem(
                at("/witness/points", k),
                "a point off the nuclei",
                "it stands on one",
                "choose points near nuclei, not on them",
            )
    if len(np.unique(points, axis=0)) < len(points):
        yield Problem(
            "/witness/points",
            "points that differ",
            f"{len(points) - len(np.unique(points, axis=0))} are repeated",
            "remove them: a point that is given twice proves nothing more",
        )
    yield Covered(every(len(points), "point"))


ON_A_NUCLEUS = 1e-6  # bohr


@rule(
    name="provenance-steps",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/provenance/steps",)),
    summary="provenance is a JSON array of steps, each with activity, agent and time",
)
def provenance_steps(file: Inspection) -> Iterator[Remark]:
    member, expected = "/provenance/steps", "a JSON array of objects, oldest step first"
    text = str(np.asarray(file.read(member)).item())
    try:
        steps = json.loads(text)
    except ValueError as fault:
        yield Problem(member, expected, f"text that is not JSON: {fault}", "write it with a JSON library")
        return
    if not isinstance(steps, list) or not all(isinstance(step, dict) for step in steps):
        yield Problem(member, expected, f"JSON of another kind ({type(steps).__name__})", "write an array of objects")
        return
    from jsonschema import Draft202012Validator

    from qwfx.schema_check import load_schema

    for error in Draft202012Validator(load_schema("provenance")).iter_errors(steps):
        place = ", ".join(f"{key}" for key in list(error.absolute_path)[1:])
        yield Problem(
            at(member, error.absolute_path[0]),
            "activity, agent and time (ISO 8601, UTC), with used and generated as lists of entities",
            f"{place + ': ' if place else ''}{error.message[:200]}",
            "see FORMAT.md, provenance",
        )
    yield Covered(every(len(steps), "step"))
