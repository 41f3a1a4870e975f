"""The trial function ``Psi = D exp(J)`` of a file: values, derivatives, local energies, moves of one electron."""

from __future__ import annotations

from qwfx.trial.starting import starting_jastrow
from qwfx.trial.trial import Trial
from qwfx.trial.values import Event, TrialValues, TrialWarning
from qwfx.trial.walkers import Walkers

__all__ = ["Event", "Trial", "TrialValues", "TrialWarning", "Walkers", "starting_jastrow"]
