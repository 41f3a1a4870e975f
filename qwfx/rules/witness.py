"""Tier *witness*: what another program says of the orbitals, against our own evaluation of the file."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.rules.algebra_orbitals import BASIS_RULES
from qwfx.rules.diagnosis import explain_mismatch
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
            "convert anew from the source with qwfx, or let the producer write them: without a witness no reader "
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


def _evaluate(file: Inspection, C: NDArray[Any], points: NDArray[np.float64]) -> NDArray[Any]:
    from qwfx.kernels import evaluate_orbitals

    return np.asarray(evaluate_orbitals(file.basis, file.positions, C, points, derivatives=2))


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
        result[word] = np.divide(gap, scale, out=np.zeros_like(gap), where=scale > 0)
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
        deviation = compare_set(_evaluate(file, C, points), **witness)
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
