"""The strings of one spin as excitations from a reference: which rows and columns of the table make each minor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["RankClass", "SpinStrings"]

Ints = NDArray[np.int64]
PIECE = 1 << 16
"""Strings that are looked at together."""
KEPT = 32
"""References other than the usual one whose lists are kept."""


@dataclass(frozen=True)
class RankClass:
    """All strings that differ from the reference in k orbitals."""

    rank: int
    string: NDArray[np.int32]
    """(m) number of the string."""
    holes: NDArray[np.int32]
    """(m, k) which of the reference's orbitals are empty, counted within the reference, ascending."""
    particles: NDArray[np.int32]
    """(m, k) which other orbitals are filled, counted among the used ones, ascending."""
    sign: NDArray[np.float64]
    """(m) ``det Phi[:, string] = sign * det T[holes, particles] * det Phi[:, reference]``."""


class SpinStrings:
    """The distinct strings of one spin, over the orbitals that any of them uses.

    Parameters
    ----------
    occupied : (K, n) orbitals of each string, ascending.
    weight : (K) how much each string matters; the reference is the weightiest.
    """

    def __init__(self, occupied: Ints, weight: NDArray[np.float64]) -> None:
        self.used: Ints = np.unique(occupied)
        self.occupied = np.searchsorted(self.used, occupied).astype(np.int32)
        """(K, n) counted among the used orbitals."""
        self.reference: Ints = self.occupied[int(np.argmax(weight))].astype(np.int64)
        self._known: dict[bytes, list[RankClass]] = {}

    @property
    def n_strings(self) -> int:
        """Number of strings K."""
        return len(self.occupied)

    def classes(self, reference: Ints) -> list[RankClass]:
        """The strings by rank, seen from a set of n used orbitals, which need not be one of the strings."""
        key = reference.tobytes()
        if key not in self._known:
            if len(self._known) > KEPT:  # the oldest but the usual one
                del self._known[next(k for k in self._known if k != self.reference.tobytes())]
            self._known[key] = _classes(self.occupied, reference, len(self.used))
        return self._known[key]


def _classes(occupied: NDArray[np.int32], reference: Ints, n_used: int) -> list[RankClass]:
    n = len(reference)
    in_reference = np.zeros(n_used, dtype=bool)
    in_reference[reference] = True
    parts: dict[int, list[tuple[Ints, Ints, Ints, NDArray[np.float64]]]] = {}
    for start in range(0, len(occupied), PIECE):
        piece = occupied[start : start + PIECE]
        present = np.zeros((len(piece), n_used), dtype=bool)
        present[np.arange(len(piece))[:, None], piece] = True
        empty = ~present[:, reference]  # (m, n)
        new = ~in_reference[piece]  # (m, n)
        rank = new.sum(axis=1)
        # The columns of A^-1 Phi[:, string] that belong to orbitals of the reference are unit vectors, in the same
        # order: what is left is the minor, with the sign of the places of its rows and columns (Laplace).
        position = np.arange(n)
        parity = (empty * position).sum(axis=1) + (new * position).sum(axis=1)
        for k in np.unique(rank).tolist():
            own = np.flatnonzero(rank == k)
            holes = np.nonzero(empty[own])[1].reshape(len(own), k)
            particles = piece[own][new[own]].reshape(len(own), k)
            parts.setdefault(k, []).append((own + start, holes, particles, 1.0 - 2.0 * (parity[own] % 2)))
    classes = []
    for k in sorted(parts):
        string, holes, particles, sign = (np.concatenate(column) for column in zip(*parts[k], strict=True))
        classes.append(RankClass(k, *(np.ascontiguousarray(a, np.int32) for a in (string, holes, particles)), sign))
    return classes
