"""Tier *algebra*: the total spin of each state of the expansion."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.reference.determinants import DeterminantSum
from qwfx.rules.evaluator import expansion_of
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every

__all__ = ["spin_square"]

TRIAL: tuple[Purpose, ...] = ("trial",)
MANY_ENTRIES = 300_000
"""Above, the determinants that S+ makes take more memory and time than a check should."""
SPIN_SLACK = 0.01


def spin_square(total: DeterminantSum, n_orbitals: int) -> NDArray[np.float64]:
    """(states) <S^2> over one set of orbitals for both spins: S^2 = S- S+ + S_z (S_z + 1), and <S- S+> = |S+ Psi|^2.

    S+ = sum_q q_up+ q_down takes an electron of each orbital that only a down electron is in to the up ones. Textbook
    (Szabo and Ostlund 1989, section 2.5).
    """
    n_up, n_down = total.up.shape[1], total.down.shape[1]
    s_z = (n_up - n_down) / 2
    norm = (np.abs(total.coefficients) ** 2).sum(axis=1)
    in_up = np.zeros((len(total.up), n_orbitals), dtype=bool)
    in_up[np.arange(len(total.up))[:, None], total.up] = True
    keys, values = [], []
    for place in range(n_down):  # the electron that is taken stands at this place of its string
        q = total.down[total.columns, place]
        free = np.flatnonzero(~in_up[total.rows, q])
        rows, columns, q = total.rows[free], total.columns[free], q[free]
        # q_up+ passes the operators below it, q_down `place` of its own.
        below = (total.up[rows] < q[:, None]).sum(axis=1)
        sign = 1.0 - 2.0 * ((below + place) % 2)
        up = np.sort(np.concatenate([total.up[rows], q[:, None]], axis=1), axis=1)
        down = np.delete(total.down, place, axis=1)[columns]
        keys.append(np.concatenate([up, down], axis=1))
        values.append(total.coefficients[:, free] * sign)
    raised = np.zeros(len(norm))
    if keys and sum(map(len, keys)):
        rows_of = np.concatenate(keys)
        value: NDArray[Any] = np.concatenate(values, axis=1)
        order = np.lexsort(rows_of.T)
        new = np.ones(len(order), dtype=bool)
        new[1:] = (rows_of[order][1:] != rows_of[order][:-1]).any(axis=1)
        sums = np.add.reduceat(value[:, order], np.flatnonzero(new), axis=1)
        raised = (np.abs(sums) ** 2).sum(axis=1)
    return np.asarray(raised / norm + s_z * (s_z + 1))


@rule(
    name="total-spin",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(
        members=("/expansion", "/orbitals", "/system"),
        rules=(
            "finite-numbers", "named-sets", "string-electrons", "string-order", "string-range", "row-offsets",
            "column-order", "expansion-norm",
        ),
    ),
    cost="all determinants that differ from those of the expansion by one spin",
    purposes=TRIAL,
    summary="each state of the expansion is an eigenstate of the total spin",
)  # fmt: skip
def total_spin(file: Inspection) -> Iterator[Remark]:
    sets = [file.attribute("/expansion", f"{spin}_set") for spin in ("up", "down")]
    if sets[0] != sets[1]:
        raise PremiseError("up and down electrons have orbitals of their own, of which no total spin follows")
    entries = file.shape("/expansion/columns")[0]
    if entries > MANY_ENTRIES:
        raise PremiseError(f"{entries} entries; the spin is computed for up to {MANY_ENTRIES}")
    total = expansion_of(file)
    s_z = abs(total.up.shape[1] - total.down.shape[1]) / 2
    found = spin_square(total, file.shape(f"/orbitals/{sets[0]}/coefficients")[0])
    for state, square in enumerate(found.tolist()):
        spin = (math.sqrt(1 + 4 * max(square, 0.0)) - 1) / 2
        nearest = max(round(spin - s_z), 0) + s_z
        yield Measured(f"state {state}: <S^2> = {square:.6f}, S = {spin:.4f}")
        if abs(square - nearest * (nearest + 1)) > SPIN_SLACK:
            yield Problem(
                at("/expansion/coefficients", state),
                f"<S^2> of an eigenstate, such as {nearest * (nearest + 1):g} of S = {nearest:g}",
                f"{square:.4f}",
                "check the signs of the coefficients: programs order operators in other ways, see F15; or keep more "
                "of the determinants that belong together",
            )
        elif nearest > s_z + 0.5:
            yield Problem(
                at("/expansion/coefficients", state),
                f"S = {s_z:g}, as n_up - n_down = {2 * s_z:g} suggests",
                f"S = {nearest:g}",
                "nothing, if this component of the multiplet is meant",
                Severity.NOTE,
            )
    yield Covered(every(len(found), "state"))
