"""Tier *witness*: what another program says of the orbitals, against our own evaluation of the file."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.reference.determinants import evaluate_determinants
from qwfx.reference.potential import coulomb
from qwfx.rules.algebra_orbitals import BASIS_RULES
from qwfx.rules.diagnosis import explain_mismatch
from qwfx.rules.evaluator import evaluate_orbitals, expansion_of
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, figure

__all__ = ["WITNESS_ERROR", "WITNESS_WARNING"]

ORBITALS: tuple[Purpose, ...] = ("orbitals", "trial")
WITNESS_WARNING = 1e-8
"""Relative to the largest value of the orbital at the points. Two sound programs agree to 1e-12; the rest is digits
lost in writing."""
WITNESS_ERROR = 1e-5
"""More than single precision loses."""
MOLECULE = ("/basis", "/orbitals", "/system/positions")


@rule(
    name="witness-presence",
    tier="witness",
    severity=Severity.NOTE,
    premise=Premise(members=("/basis", "/orbitals")),
    purposes=ORBITALS,
    summary="the file carries witness values, by a program that is independent of qwfx",
)
def witness_presence(file: Inspection) -> Iterator[Remark]:
    if not file.has("/witness"):
        yield Problem(
            "/witness",
            "values of the orbitals by the program that produced them",
            "none",
            "convert anew with a converter that writes them, or let the producer do so: without a witness no reader "
            "can tell that it reads the orbitals as they were meant",
        )
    elif not int(file.attribute("/witness", "independent", 0)):
        yield Problem(
            "/witness@independent",
            "an evaluator that is independent of qwfx",
            f"{file.attribute('/witness', 'evaluator')!r}, which is not",
            "let the producer's own program evaluate the orbitals: code that judges itself proves little",
        )
    else:
        evaluator = file.attribute("/witness", "evaluator", "")
        yield Measured(f"by {evaluator} {file.attribute('/witness', 'evaluator_version', '')}".rstrip())


def compare_set(
    ours: NDArray[Any], values: NDArray[Any], gradients: NDArray[Any], laplacians: NDArray[Any]
) -> dict[str, NDArray[np.float64]]:
    """(M) deviation of each orbital's value, gradient and Laplacian, relative to the largest of them at the points."""
    theirs = {"values": values, "gradients": gradients, "laplacians": laplacians}
    mine = {"values": ours[0], "gradients": np.moveaxis(ours[1:4], 0, -1), "laplacians": ours[4]}
    result = {}
    for word, witness in theirs.items():
        axes = tuple(a for a in range(witness.ndim) if a != 1)
        scale = np.maximum(np.abs(witness).max(axis=axes, initial=0.0), np.abs(mine[word]).max(axis=axes, initial=0.0))
        gap = np.abs(mine[word] - witness).max(axis=axes, initial=0.0)
        # Where a number overflows nothing is known, and that must not pass for agreement.
        sane = np.isfinite(gap) & np.isfinite(scale)
        relative = np.divide(gap, scale, out=np.zeros_like(gap), where=sane & (scale > 0))
        result[word] = np.where(sane, relative, np.inf)
    return result


@rule(
    name="witness-orbitals",
    tier="witness",
    severity=Severity.ERROR,
    premise=Premise(members=(*MOLECULE, "/witness"), absent=("/system/cell",), rules=(*BASIS_RULES, "witness-sets")),
    cost="values and two derivatives of all orbitals at the witness points",
    purposes=ORBITALS,
    summary="orbitals evaluated from the file equal the witness in value, gradient and Laplacian",
)
def witness_orbitals(file: Inspection) -> Iterator[Remark]:
    chosen = [name for name in file.members("/witness/orbitals") if name in file.orbital_sets]
    if not chosen:
        raise PremiseError("the witness holds no orbitals")
    points = file.read("/witness/points").astype(np.float64)
    for name in chosen:
        C = np.asarray(file.read(f"/orbitals/{name}/coefficients"))
        witness = {
            word: np.asarray(file.read(f"/witness/orbitals/{name}/{word}"))
            for word in ("values", "gradients", "laplacians")
        }
        deviation = compare_set(
            evaluate_orbitals(file.basis, file.positions, C, points, progress=file.progress), **witness
        )
        figures = ", ".join(f"{word} {figure(d.max(initial=0.0))}" for word, d in deviation.items())
        yield Measured(f"{name}: largest relative deviation: {figures}; tolerance {WITNESS_WARNING:.0e}")
        yield from _judge(file, name, C, points, witness, deviation)
        yield Covered(f"{name}: all {len(C)} orbitals at {len(points)} points")


def _judge(
    file: Inspection,
    name: str,
    C: NDArray[Any],
    points: NDArray[np.float64],
    witness: dict[str, NDArray[Any]],
    deviation: dict[str, NDArray[np.float64]],
) -> Iterator[Problem]:
    for word, d in deviation.items():
        bad = d > WITNESS_WARNING
        if not bad.any():
            continue
        p = int(np.argmax(d))
        error = float(d[p]) > WITNESS_ERROR
        bad = d > WITNESS_ERROR if error else bad
        why = explain_mismatch(file.basis, file.positions, C, points, witness, word, bad) if error else ""
        yield Problem(
            at(f"/witness/orbitals/{name}/{word}", (0, p)),
            f"{word} of the orbitals of set {name!r}, to {WITNESS_WARNING:.0e} of the orbital's largest",
            f"orbital {p} is off by {figure(d[p])}{'; ' + why if why else ''}",
            "one of the two was written wrongly: compare order, sign and normalisation of the functions with FORMAT.md"
            if error
            else "write witness and coefficients with all their digits",
            None if error else Severity.WARNING,
            int(bad.sum()),
        )
        if word == "values":
            return  # wrong values make the derivatives wrong: one cause, one finding


OPERATIONS = 2e10
"""Floating-point operations that the comparison of configurations may take; the rest is left out and said."""


@rule(
    name="witness-configurations",
    tier="witness",
    severity=Severity.ERROR,
    premise=Premise(
        members=(*MOLECULE, "/expansion", "/witness/configurations"),
        absent=("/system/cell",),
        rules=(*BASIS_RULES, "string-electrons", "string-range", "row-offsets", "column-order"),
    ),
    cost="all determinants at each configuration, within a limit",
    purposes=("trial",),
    summary="D evaluated from the file equals the witness in logarithm, sign, gradient and Laplacian",
)
def witness_configurations(file: Inspection) -> Iterator[Remark]:
    group = "/witness/configurations"
    positions = file.read(f"{group}/positions").astype(np.float64)
    entries = file.shape("/expansion/columns")[0]
    if entries > MANY_ENTRIES:
        raise PremiseError(f"{entries} entries; whole configurations are evaluated for up to {MANY_ENTRIES}")
    total = expansion_of(file)
    affordable = min(len(positions), int(OPERATIONS / max(total.cost, 1.0)))
    if not affordable:
        raise PremiseError(f"{len(total.up)} up and {len(total.down)} down strings are too many to evaluate here")
    n_up = file.integer("/system", "n_up")
    theirs = {word: np.asarray(file.read(f"{group}/{word}")) for word in ("log_abs", "sign", "gradients", "laplacian")}
    worst = dict.fromkeys(theirs, (0.0, 0, 0))
    sets = [
        np.asarray(file.read(f"/orbitals/{file.attribute('/expansion', f'{s}_set')}/coefficients"))
        for s in ("up", "down")
    ]
    for m in range(affordable):
        phi_up = evaluate_orbitals(file.basis, file.positions, sets[0], positions[m, :n_up])
        phi_down = evaluate_orbitals(file.basis, file.positions, sets[1], positions[m, n_up:])
        mine = evaluate_determinants(total, phi_up, phi_down)
        for word, value in theirs.items():
            ours = getattr(mine, word)
            for state in range(len(ours)):
                scale = 1.0 if word == "sign" else max(1.0, float(np.abs(value[state, m]).max(initial=0.0)))
                gap = float(np.abs(ours[state] - value[state, m]).max(initial=0.0)) / scale
                if not gap <= worst[word][0]:  # true for NaN as well
                    worst[word] = (gap, state, m)
    worst.update(_energies(file, positions))
    yield Measured(f"largest deviation: {', '.join(f'{w} {figure(d[0])}' for w, d in worst.items())}")
    # The first that is off stands for what follows from it: a wrong D has wrong derivatives.
    off = next((word for word, (gap, _, _) in worst.items() if not gap <= WITNESS_WARNING), None)
    if off is not None:
        gap, state, m = worst[off]
        error = not gap <= WITNESS_ERROR
        yield Problem(
            at(f"{group}/{off}", (state, m)),
            f"{off} of D as evaluated from orbitals and expansion, to {WITNESS_WARNING:.0e}",
            f"configuration {m}, state {state} is off by {figure(gap)}",
            "compare the order of electrons, orbitals and strings, and the factor of D, with FORMAT.md"
            if error
            else "write witness and coefficients with all their digits",
            None if error else Severity.WARNING,
        )
    left_out = [word for word in ("potential", "local_energy") if file.has(f"{group}/{word}") and word not in worst]
    beyond = f"; {' and '.join(left_out)} not evaluated" if left_out else ""
    yield Covered(f"D at {affordable} of {len(positions)} configurations{beyond}")


def _energies(file: Inspection, positions: NDArray[np.float64]) -> dict[str, tuple[float, int, int]]:
    """Worst deviation of the potential, where it is Coulomb's alone, and of the local energy, where Psi is D."""
    group = "/witness/configurations"
    result: dict[str, tuple[float, int, int]] = {}
    if file.has("/jastrow"):
        return result
    if file.has(f"{group}/potential") and not file.has("/potentials"):
        ours = coulomb(positions, file.positions, file.read("/system/effective_charges"))
        result["potential"] = _worst(file.read(f"{group}/potential"), ours)
    if file.has(f"{group}/potential") and file.has(f"{group}/local_energy"):
        ours = file.read(f"{group}/potential") - 0.5 * file.read(f"{group}/laplacian")
        result["local_energy"] = _worst(file.read(f"{group}/local_energy"), ours)
    return result


def _worst(theirs: NDArray[Any], ours: NDArray[Any]) -> tuple[float, int, int]:
    gap = np.nan_to_num(np.abs(theirs - ours) / np.maximum(1.0, np.abs(theirs)), nan=np.inf)
    if not gap.size:
        return 0.0, 0, 0
    state, m = (int(i) for i in np.unravel_index(int(gap.argmax()), gap.shape))
    return float(gap[state, m]), state, m


MANY_ENTRIES = 1 << 22
