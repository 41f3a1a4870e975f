"""One determinant from occupations, as the 1x1 expansion of FORMAT.md."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Expansion, OrbitalSet

__all__ = ["bit_string", "single_determinant"]

INTEGER_WITHIN = 1e-8  # electrons; integer occupations are exact where programs print them


def single_determinant(orbitals: dict[str, OrbitalSet], n_up: int, n_down: int) -> Expansion | None:
    """The 1x1 expansion of integer occupations; None if they are absent, fractional or of another count."""
    up_name, down_name = ("spatial", "spatial") if "spatial" in orbitals else ("up", "down")
    up, down = orbitals[up_name].occupations, orbitals[down_name].occupations
    if up is None or down is None:
        return None
    rounded = np.rint(up), np.rint(down)
    if max(np.abs(up - rounded[0]).max(initial=0), np.abs(down - rounded[1]).max(initial=0)) > INTEGER_WITHIN:
        return None
    if up_name == down_name:
        occupied = np.flatnonzero(rounded[0] >= 1), np.flatnonzero(rounded[0] >= 2)
    else:
        occupied = np.flatnonzero(rounded[0] >= 1), np.flatnonzero(rounded[1] >= 1)
    if (len(occupied[0]), len(occupied[1])) != (n_up, n_down):
        return None
    return Expansion(
        up_set=up_name,
        down_set=down_name,
        up_strings=bit_string(occupied[0], len(up)),
        down_strings=bit_string(occupied[1], len(down)),
        row_start=np.array([0, 1], dtype=np.int64),
        columns=np.zeros(1, dtype=np.int64),
        coefficients=np.ones((1, 1)),
    )


def bit_string(occupied: NDArray[np.int64], n_orbitals: int) -> NDArray[np.uint64]:
    """(1, W) occupation bit string."""
    words = np.zeros(max(1, -(-n_orbitals // 64)), dtype=np.uint64)
    for p in occupied:
        words[p // 64] |= np.uint64(1 << (int(p) % 64))
    return words[np.newaxis]
