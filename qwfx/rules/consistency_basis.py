"""Tier *consistency*: shells, primitives, and numbers that are numbers."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Premise, Problem, Remark, rule
from qwfx.rules.wording import at, every, first_true

__all__: list[str] = []

EVALUATED_L = 6
"""Largest angular momentum of the evaluator."""
LARGEST_POWER = 40
"""More than any table has; far beyond it r^n overflows."""


@rule(
    name="finite-numbers",
    tier="consistency",
    severity=Severity.ERROR,
    cost="one pass over all real and complex data sets",
    summary="no data set holds NaN or an infinity",
)
def finite_numbers(file: Inspection) -> Iterator[Remark]:
    looked = 0
    for path, entry in file.datasets():
        if not str(entry.get("dtype", "")).startswith(("float", "complex")) or path.startswith("/extensions/"):
            continue
        looked += 1
        bad, first = 0, ""
        for origin, block in file.pieces(path):
            mask = ~np.isfinite(block)
            here = int(np.count_nonzero(mask))
            if here and not bad:
                index = first_true(mask)
                first = at(path, tuple(o + k for o, k in zip(origin, index, strict=True)) or None)
                value = block[index]
            bad += here
        if bad:
            yield Problem(
                first, "a finite number", str(value), "compute it anew: something before went wrong", count=bad
            )
    yield Covered(f"every element of {looked} data sets")


@rule(
    name="atom-indices",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/system/labels",), any_of=("/basis/shell_center", "/potentials/center")),
    summary="shells and potential terms sit on atoms that exist",
)
def atom_indices(file: Inspection) -> Iterator[Remark]:
    n_atoms = file.shape("/system/labels")[0]
    for member in ("/basis/shell_center", "/potentials/center"):
        if not file.usable(member):
            continue
        index = file.read(member)
        outside = (index < 0) | (index >= n_atoms)
        if outside.any():
            i = int(np.argmax(outside))
            yield Problem(
                at(member, i),
                f"0 to {n_atoms - 1}: there are {n_atoms} atoms, counted from 0",
                str(index[i]),
                "count atoms from 0",
                count=int(outside.sum()),
            )
        yield Covered(every(len(index), f"element of {member}"))


@rule(
    name="angular-momenta",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/basis",)),
    summary="angular momenta are 0 or more, kinds of shell are 0 or 1, powers of r are 0 or more",
)
def angular_momenta(file: Inspection) -> Iterator[Remark]:
    angular = file.read("/basis/shell_l")
    for i in np.flatnonzero(angular < 0):
        yield Problem(
            at("/basis/shell_l", i), "an angular momentum, 0 or more", str(angular[i]), "0 is s, 1 is p, 2 is d"
        )
    for i in np.flatnonzero(angular > EVALUATED_L):
        yield Problem(
            at("/basis/shell_l", i),
            f"0 to {EVALUATED_L}",
            str(angular[i]),
            "the file is in order, but qwfx does not evaluate such functions",
            Severity.NOTE,
        )
    kind = file.read("/basis/shell_monomial")
    for i in np.flatnonzero((kind != 0) & (kind != 1)):
        yield Problem(at("/basis/shell_monomial", i), "0 (solid) or 1 (monomial)", str(kind[i]), "write 0 or 1")
    if file.has("/basis/powers"):
        powers = file.read("/basis/powers")
        for i in np.flatnonzero((powers < 0) | (powers > LARGEST_POWER)):
            yield Problem(
                at("/basis/powers", i),
                f"a power of r, 0 to {LARGEST_POWER}",
                str(powers[i]),
                "r^l belongs to the angular part: powers count what is beyond it",
            )
    yield Covered(every(len(angular), "shell"))


@rule(
    name="primitive-offsets",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/basis",)),
    summary="primitive_start begins with 0, ends with the number of primitives and gives each shell a primitive",
)
def primitive_offsets(file: Inspection) -> Iterator[Remark]:
    start = file.read("/basis/primitive_start").astype(np.int64)
    n_primitives = file.shape("/basis/exponents")[0]
    remedy = "shell s owns the primitives primitive_start[s] up to, not including, primitive_start[s+1]"
    if len(start) and start[0] != 0:
        yield Problem(at("/basis/primitive_start", 0), "0", str(start[0]), remedy)
    if len(start) and start[-1] != n_primitives:
        yield Problem(
            at("/basis/primitive_start", len(start) - 1),
            f"{n_primitives}, the number of primitives",
            str(start[-1]),
            remedy,
        )
    for i in np.flatnonzero(np.diff(start) <= 0):
        yield Problem(
            at("/basis/primitive_start", i + 1),
            f"more than {start[i]}, the offset before it",
            str(start[i + 1]),
            remedy,
        )
    yield Covered(every(len(start), "offset"))


@rule(
    name="positive-exponents",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/basis/exponents",), rules=("finite-numbers",)),
    summary="exponents of the basis are positive",
)
def positive_exponents(file: Inspection) -> Iterator[Remark]:
    exponents = file.read("/basis/exponents")
    for i in np.flatnonzero(exponents <= 0):
        yield Problem(
            at("/basis/exponents", i),
            "a positive exponent: the function must decay",
            f"{exponents[i]:g}",
            "correct the exponent",
        )
    yield Covered(every(len(exponents), "primitive"))


@rule(
    name="empty-contractions",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/basis",), rules=("primitive-offsets", "finite-numbers")),
    summary="no shell is zero everywhere",
)
def empty_contractions(file: Inspection) -> Iterator[Remark]:
    start = file.read("/basis/primitive_start").astype(np.int64)
    if len(start) < 2:
        return
    largest = np.maximum.reduceat(np.abs(file.read("/basis/coefficients")), start[:-1])
    for s in np.flatnonzero(largest == 0):
        yield Problem(
            at("/basis/coefficients", start[s]),
            "a coefficient other than 0 in each shell",
            f"shell {s} has none, so its functions vanish",
            "remove the shell, or write its coefficients",
        )
    yield Covered(every(len(largest), "shell"))


@rule(
    name="function-count",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/basis", "/orbitals"), rules=("angular-momenta",)),
    summary="orbital coefficients have one column per function of the basis",
)
def function_count(file: Inspection) -> Iterator[Remark]:
    angular = file.read("/basis/shell_l").astype(np.int64)
    monomial = file.read("/basis/shell_monomial").astype(bool)
    solid, cartesian = 2 * angular + 1, (angular + 1) * (angular + 2) // 2
    n_functions = int(np.where(monomial, cartesian, solid).sum())
    other = {int(solid.sum()): "solid", int(cartesian.sum()): "monomial"}
    for name in file.orbital_sets:
        member = f"/orbitals/{name}/coefficients"
        if not file.usable(member):
            continue
        columns = file.shape(member)[1]
        if columns != n_functions:
            hint = f", the number if all shells were {other[columns]}" if columns in other else ""
            swapped = ", while the first axis fits: (M, F) is asked for" if file.shape(member)[0] == n_functions else ""
            yield Problem(
                member,
                f"{n_functions} columns, one per function of the basis",
                f"{columns}{hint}{swapped}",
                "write (orbitals, functions), with the functions that the shells define",
            )
    yield Covered(every(len(file.orbital_sets), "orbital set"))
