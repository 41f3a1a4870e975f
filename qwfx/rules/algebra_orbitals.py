"""Tier *algebra*: orbitals against our own overlap integrals."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every, figure, first_true

__all__ = ["BASIS_RULES", "ORTHONORMAL_ERROR", "ORTHONORMAL_WARNING"]

ORBITALS: tuple[Purpose, ...] = ("orbitals", "trial")
BASIS_RULES = (
    "finite-numbers",
    "atom-indices",
    "angular-momenta",
    "primitive-offsets",
    "positive-exponents",
    "function-count",
)
"""What must hold before functions can be evaluated."""

ORTHONORMAL_WARNING = 1e-5
"""Orbitals printed with eight digits have a residual of about 1e-8 times a few; with five decimals, up to 1e-5."""
ORTHONORMAL_ERROR = 1e-3
"""No printing gives this; a wrong normalisation or order of functions gives 1e-2 to 1."""


@rule(
    name="orthonormality",
    tier="algebra",
    severity=Severity.ERROR,
    premise=Premise(members=("/basis", "/orbitals", "/system/positions"), absent=("/system/cell",), rules=BASIS_RULES),
    cost="overlap integrals, and M F^2 operations a set",
    purposes=ORBITALS,
    summary="the orbitals of each set are orthonormal: C S C+ = 1",
)
def orthonormality(file: Inspection) -> Iterator[Remark]:
    S = file.overlap
    for name in file.orbital_sets:
        member = f"/orbitals/{name}/coefficients"
        C = np.asarray(file.read(member))
        product = C.conj() @ S @ C.T
        product[np.diag_indices(len(C))] -= 1
        residual = np.nan_to_num(np.abs(product), nan=np.inf, posinf=np.inf)
        worst = float(residual.max(initial=0.0))
        yield Measured(f"{name}: largest deviation {figure(worst)}, tolerance {ORTHONORMAL_WARNING:.0e}")
        if worst > ORTHONORMAL_WARNING:
            where = tuple(int(i) for i in np.unravel_index(int(residual.argmax()), residual.shape))
            error = worst > ORTHONORMAL_ERROR
            yield Problem(
                at(member, where[0]),
                f"C S C+ = 1 to {ORTHONORMAL_WARNING:.0e}",
                f"deviation {figure(worst)} between orbitals {where[0]} and {where[1]}{_pattern(file, C, residual)}",
                "check normalisation and order of the functions against FORMAT.md; if orbitals that are not "
                "orthonormal are meant, skip this rule"
                if error
                else "write the coefficients with all their digits",
                None if error else Severity.WARNING,
                int(np.count_nonzero(np.triu(residual > ORTHONORMAL_WARNING))),
            )
        yield Covered(f"{name}: all {len(C)} x {len(C)} products")


def _pattern(file: Inspection, C: NDArray[Any], residual: NDArray[np.float64]) -> str:
    """What the deviations have in common, where that is cheap to see."""
    bad = np.flatnonzero(residual.max(axis=1) > ORTHONORMAL_WARNING)
    off = residual - np.diag(np.diag(residual))
    if off.max(initial=0.0) <= ORTHONORMAL_WARNING:
        return "; the orbitals are orthogonal but not normalised"
    basis = file.basis
    angular = np.repeat(basis.shell_l, basis.shell_size)
    sound = np.setdiff1d(np.arange(len(C)), bad)
    weight = {int(ell): np.abs(np.asarray(C)[:, angular == ell]).max(axis=1) for ell in np.unique(angular)}
    for ell, largest in weight.items():
        if ell >= 2 and len(sound) and (largest[bad] > 1e-6).all() and (largest[sound] < 1e-6).all():
            return f"; the orbitals concerned are just those with functions of l = {ell}"
    return ""


EIGENVALUES_UP_TO = 3000
"""Functions up to which the eigenvalues of the overlap matrix are computed (some ten seconds)."""
NEARLY_DEPENDENT = 1e-7


@rule(
    name="linear-dependence",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(
        members=("/basis", "/system/positions"),
        absent=("/system/cell",),
        rules=tuple(r for r in BASIS_RULES if r != "function-count"),
    ),
    cost="overlap integrals and their eigenvalues, F^3",
    purposes=ORBITALS,
    summary="the functions of the basis are linearly independent",
)
def linear_dependence(file: Inspection) -> Iterator[Remark]:
    S = file.overlap
    if not len(S):
        raise PremiseError("the basis has no functions")
    if len(S) > EIGENVALUES_UP_TO:
        raise PremiseError(f"{len(S)} functions; eigenvalues are computed for up to {EIGENVALUES_UP_TO}")
    norm = np.diag(S)
    if not (norm > 0).all():
        mask = ~(norm > 0)
        yield Problem(
            "/basis",
            "functions with a positive norm",
            f"function {first_true(mask)[0]} has {norm[mask][0]:g}",
            "remove functions that vanish",
            count=int(mask.sum()),
        )
        return
    # Scaled to unit diagonal, so that the figure does not depend on how the functions are normalised.
    scaled = S / np.sqrt(np.outer(norm, norm))
    smallest = float(np.linalg.eigvalsh(scaled)[0])
    yield Measured(
        f"smallest eigenvalue of the scaled overlap {smallest:.2e}"
        if smallest > 1e-12
        else "smallest eigenvalue of the scaled overlap below 1e-12"
    )
    if smallest < NEARLY_DEPENDENT:
        singular = smallest < 1e-12
        yield Problem(
            "/basis",
            f"a smallest eigenvalue above {NEARLY_DEPENDENT:.0e}",
            f"{'below 1e-12' if singular else f'{smallest:.2e}'}, with {len(S)} functions",
            "orbital coefficients lose digits by cancellation: remove diffuse or duplicate functions",
            None if singular else Severity.NOTE,
        )
    yield Covered(every(len(S), "function"))
