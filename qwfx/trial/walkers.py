"""Moves of one electron: ratios of Psi, and updates of rank one when they are accepted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qwfx.errors import EvaluationError
from qwfx.kernels.expansion import Values
from qwfx.kernels.tables import Table, replace_row
from qwfx.trial.values import events_of, warn

if TYPE_CHECKING:
    from qwfx.trial.trial import Trial

__all__ = ["Walkers"]

SMALLEST = 1e-8
"""Ratio of the reference determinant below which a walker is factorised anew: an update would lose its digits."""
LARGEST = 1e6
"""Entry of the table above which it is, too."""


@dataclass(frozen=True, eq=False)
class _Proposal:
    which: int
    places: NDArray[np.float64]
    rows: NDArray[Any]
    """(W, M) orbitals at the places."""
    change: NDArray[np.float64]
    """(W) of J."""


class Walkers:
    """Walkers of a trial function, with what is needed to move their electrons one at a time.

    `ratio` proposes a move, `accept` carries it out for the walkers that it is told. Updates of rank one gather
    rounding errors: `refresh` computes everything anew and says how large they had become.
    """

    def __init__(self, trial: Trial, electrons: NDArray[np.float64]) -> None:
        self.trial = trial
        self.electrons = electrons.copy()
        """(W, N, 3) bohr; changed by accepted moves only."""
        self._rows = np.ascontiguousarray(electrons.transpose(0, 2, 1))  # the same, as the Jastrow factor wants them
        self._proposal: _Proposal | None = None
        self._tables, self._values, self._jastrow = self._anew(self.electrons)
        warn(events_of({"Psi vanishes or is no number": self.log_abs}))

    @property
    def log_abs(self) -> NDArray[np.float64]:
        """(S, W) log|Psi|."""
        return self._values.log_abs + self._jastrow

    @property
    def sign(self) -> NDArray[Any]:
        """(S, W) Psi / |Psi|."""
        return self._values.sign

    def ratio(self, which: int, places: ArrayLike) -> NDArray[Any]:
        """(S, W) Psi with electron `which` of each walker at its place (W, 3), over Psi as it is.

        Raises EvaluationError for an electron that does not exist or places of another shape.
        """
        there = np.ascontiguousarray(places, dtype=np.float64)
        if not 0 <= which < self.trial.n_electrons or there.shape != (len(self.electrons), 3):
            raise EvaluationError(
                f"electron {which} to places of shape {there.shape}",
                where="ratio",
                expected=f"an electron from 0 to {self.trial.n_electrons - 1}, places ({len(self.electrons)}, 3), bohr",
            )
        spin, i = self.trial.spin_of(which)
        rows = np.ascontiguousarray(self.trial.orbitals(there, spin, 0)[0].T)
        gamma = (self._values.gamma_up, self._values.gamma_down)[spin][..., i]
        ratio = np.einsum("wp,swp->sw", rows, gamma)
        change = np.zeros(len(there))
        if not self.trial.jastrow.empty:
            change = self.trial.jastrow.change_in_rows(self._rows, which, there[:, None])[:, 0]
            with np.errstate(over="ignore"):  # infinite is what it then is
                ratio = ratio * np.exp(change)
        self._proposal = _Proposal(which, there, rows, change)
        return np.asarray(ratio)

    def accept(self, accepted: ArrayLike) -> None:
        """Carry out the move that was proposed last, for the walkers where `accepted` (W) is true.

        Raises EvaluationError if no move was proposed since the last one.
        """
        proposal = self._proposal
        if proposal is None:
            raise EvaluationError("no move was proposed", where="accept", expected="a call of ratio before")
        self._proposal = None
        moved = np.flatnonzero(np.broadcast_to(np.asarray(accepted, dtype=bool), len(self.electrons)))
        if not len(moved):
            return
        self.electrons[moved, proposal.which] = proposal.places[moved]
        self._rows[moved, :, proposal.which] = proposal.places[moved]
        self._jastrow[moved] += proposal.change[moved]
        spin, i = self.trial.spin_of(proposal.which)
        table = self._tables[spin]
        before = table.log[moved].copy()
        replace_row(table, moved, i, proposal.rows[moved])
        with np.errstate(all="ignore"):
            sound = np.abs(table.log[moved] - before) < -np.log(SMALLEST)
            if table.table.shape[1] != table.table.shape[2]:  # else it is a unit matrix
                sound &= np.abs(table.table[moved]).max(axis=(1, 2), initial=0.0) < LARGEST
        if not sound.all():
            self._factorise(spin, moved[~sound])
        self._renew(moved)

    def refresh(self) -> float:
        """Compute everything anew; the largest difference of log|Psi| from what updates had made of it."""
        before = self.log_abs
        self._tables, self._values, self._jastrow = self._anew(self.electrons)
        with np.errstate(all="ignore"):
            return float(np.nanmax(np.abs(self.log_abs - before), initial=0.0))

    def _anew(self, electrons: NDArray[np.float64]) -> tuple[tuple[Table, Table], Values, NDArray[np.float64]]:
        up, down = self.trial.tables(electrons)
        value = np.zeros(len(electrons))
        if not self.trial.jastrow.empty:
            value = self.trial.jastrow.evaluate(electrons)[0]
        return (up, down), self.trial.determinants.from_tables(up, down, threads=self.trial.threads), value

    def _factorise(self, spin: int, walkers: NDArray[np.int64]) -> None:
        """Tables of one spin of some walkers from their electrons."""
        made, new = self._tables[spin], self.trial.tables(self.electrons[walkers])[spin]
        made.log[walkers], made.sign[walkers], made.inverse[walkers] = new.log, new.sign, new.inverse
        if made.table.flags.writeable:
            made.table[walkers] = new.table
        for k, w in enumerate(walkers.tolist()):
            reference = new.references[int(new.reference_of[k])]
            known = [n for n, other in enumerate(made.references) if np.array_equal(other, reference)]
            if not known:
                made.references.append(reference)
            made.reference_of[w] = known[0] if known else len(made.references) - 1

    def _renew(self, moved: NDArray[np.int64]) -> None:
        """D and gamma of the walkers that moved."""
        if self.trial.determinants.single:  # gamma is A^-1 itself, which is up to date
            self._values = self.trial.determinants.from_tables(*self._tables, threads=self.trial.threads)
            return
        parts = (_taken(table, moved) for table in self._tables)
        found, values = self.trial.determinants.from_tables(*parts, threads=self.trial.threads), self._values
        gammas = [values.gamma_up, values.gamma_down]
        for spin, new in enumerate((found.gamma_up, found.gamma_down)):
            gammas[spin][:, moved] = new
        for old, fresh in ((values.log_abs, found.log_abs), (values.sign, found.sign)):
            old[:, moved] = fresh
        values.singular[moved] = found.singular
        self._values = Values(values.log_abs, values.sign, gammas[0], gammas[1], values.singular)


def _taken(table: Table, walkers: NDArray[np.int64]) -> Table:
    return Table(
        table.log[walkers], table.sign[walkers], table.inverse[walkers], table.table[walkers], table.references,
        table.reference_of[walkers],
    )  # fmt: skip
