"""What an evaluation gives, and what is said when it gives no number."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["Event", "TrialValues", "TrialWarning", "events_of", "warn"]


class TrialWarning(RuntimeWarning):
    """Psi or its local energy is no finite number for some walkers; the message names them."""


@dataclass(frozen=True)
class Event:
    """A walker where something is not finite."""

    walker: int
    state: int
    what: str


@dataclass(frozen=True, eq=False)
class TrialValues:
    """Psi and what acts on it, of W walkers, N electrons and S states; hartree atomic units (FORMAT.md, F12 to F29).

    Numbers of which an event speaks are not finite, or have no meaning.
    """

    log_abs: NDArray[np.float64]
    """(S, W) natural logarithm of |Psi|; -inf where Psi vanishes."""
    sign: NDArray[Any]
    """(S, W) Psi / |Psi|: +1 or -1, or a phase factor where D is complex."""
    gradients: NDArray[Any]
    """(S, W, N, 3) (grad_i Psi) / Psi, bohr^-1."""
    laplacians: NDArray[Any]
    """(S, W, N) (laplacian_i Psi) / Psi, bohr^-2."""
    potential: NDArray[Any]
    """(S, W) (V Psi) / Psi, hartree, core potentials and repulsion of the nuclei included."""
    events: tuple[Event, ...] = ()

    @property
    def kinetic(self) -> NDArray[Any]:
        """(S, W) kinetic energy: -1/2 sum_i (laplacian_i Psi) / Psi, hartree."""
        return np.asarray(-0.5 * self.laplacians.sum(axis=-1))

    @property
    def local_energy(self) -> NDArray[Any]:
        """(S, W) (H Psi) / Psi, hartree."""
        return np.asarray(self.kinetic + self.potential)


def events_of(parts: dict[str, NDArray[Any]]) -> tuple[Event, ...]:
    """An event for each walker and state where a part, (S, W), is not finite: the first part that is not."""
    events: dict[tuple[int, int], str] = {}
    for what, values in parts.items():
        for state, walker in np.argwhere(~np.isfinite(values)).tolist():
            events.setdefault((walker, state), what)
    return tuple(Event(walker, state, what) for (walker, state), what in sorted(events.items()))


def warn(events: tuple[Event, ...], stacklevel: int = 3) -> None:
    """One warning for all events, with the first walkers by number."""
    if not events:
        return
    walkers = sorted({event.walker for event in events})
    some = ", ".join(str(w) for w in walkers[:8]) + (", ..." if len(walkers) > 8 else "")
    reasons = "; ".join(sorted({event.what for event in events}))
    warnings.warn(f"walkers {some} ({len(walkers)} of them): {reasons}", TrialWarning, stacklevel=stacklevel)
