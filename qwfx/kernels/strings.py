"""The strings of one spin as excitations from a reference: which rows and columns of the table make each minor."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.reference.determinants import occupied
from qwfx.reference.strings import popcount

__all__ = ["RankClass", "SpinStrings"]

Ints = NDArray[np.int64]
PIECE = 1 << 12
"""Strings that are looked at together."""
KEPT = 32
"""References other than the usual one whose lists are kept."""


@dataclass(frozen=True)
class RankClass:
    """All strings that differ from the reference in k orbitals."""

    rank: int
    string: NDArray[np.int32]
    """(m) number of the string."""
    holes: NDArray[np.int16]
    """(m, k) which of the reference's orbitals are empty, counted within the reference, ascending."""
    particles: NDArray[np.int16]
    """(m, k) which other orbitals are filled, counted among the used ones, ascending."""
    sign: NDArray[np.int8]
    """(m) ``det Phi[:, string] = sign * det T[holes, particles] * det Phi[:, reference]``."""


class SpinStrings:
    """The distinct strings of one spin, over the orbitals that any of them uses.

    Parameters
    ----------
    words : (K, words) of each string (FORMAT.md, F13), each with n bits.
    weight : (K) how much each string matters; the reference is the weightiest.
    """

    def __init__(self, words: NDArray[np.uint64], n: int, weight: NDArray[np.float64]) -> None:
        any_of = np.bitwise_or.reduce(words, axis=0)[None]
        self.used: Ints = occupied(any_of, int(popcount(any_of)[0]))[0]
        self.occupied = np.empty((len(words), n), np.min_scalar_type(len(self.used)))
        """(K, n) counted among the used orbitals."""
        for start in range(0, len(words), PIECE):
            piece = occupied(words[start : start + PIECE], n)
            self.occupied[start : start + PIECE] = np.searchsorted(self.used, piece)
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


def _classes(occupied: NDArray[Any], reference: Ints, n_used: int) -> list[RankClass]:
    n = len(reference)
    in_reference = np.zeros(n_used, dtype=bool)
    in_reference[reference] = True
    parts: dict[int, list[tuple[NDArray[Any], ...]]] = {}
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
            parts.setdefault(k, []).append((
                (own + start).astype(np.int32),
                np.nonzero(empty[own])[1].reshape(len(own), k).astype(np.int16),
                piece[own][new[own]].reshape(len(own), k).astype(np.int16),
                (1 - 2 * (parity[own] % 2)).astype(np.int8),
            ))  # fmt: skip
    return [RankClass(k, *(np.concatenate(column) for column in zip(*parts[k], strict=True))) for k in sorted(parts)]
