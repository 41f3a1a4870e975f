"""Positions of two-electron integrals in the packed vectors, by the formulas of FORMAT.md (Hamiltonian)."""

from __future__ import annotations

from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["pack", "packed_length", "position", "split_triangle", "unpack"]


def triangle(p: int, q: int) -> int:
    """Position of the pair {p, q} in a lower triangle: ``p (p+1)/2 + q`` for p >= q."""
    high, low = max(p, q), min(p, q)
    return high * (high + 1) // 2 + low


def split_triangle(position: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """The pairs (high, low) at positions of a lower triangle."""
    high = ((np.sqrt(8.0 * position + 1.0) - 1.0) / 2.0).astype(np.int64)
    # The square root is rounded, and off by one near perfect squares of big numbers.
    high += (high + 1) * (high + 2) // 2 <= position
    high -= high * (high + 1) // 2 > position
    return high, position - high * (high + 1) // 2


def position(packing: str, n: int, p: int, q: int, r: int, s: int, like_spins: bool = True) -> int:
    """Where ``(pq|rs)`` over n orbitals stands.

    ``eightfold``: real orbitals, like spins. ``fourfold``: real, unlike spins. ``pairs``: complex; then ``(pq|rs)``
    and ``(rs|pq)`` share a place for like spins.
    """
    if packing == "eightfold":
        return triangle(triangle(p, q), triangle(r, s))
    if packing == "fourfold":
        return triangle(p, q) * (n * (n + 1) // 2) + triangle(r, s)
    first, second = p * n + q, r * n + s
    return triangle(first, second) if like_spins else first * n * n + second


def packed_length(packing: str, n: int, like_spins: bool = True) -> int:
    """Number of integrals in the packed vector."""
    pairs = n * n if packing == "pairs" else n * (n + 1) // 2
    return pairs * (pairs + 1) // 2 if packing == "eightfold" or (packing == "pairs" and like_spins) else pairs * pairs


def unpack(values: NDArray[Any], packing: str, n: int, like_spins: bool = True) -> NDArray[Any]:
    """The packed vector as ``(n, n, n, n)``, ``(pq|rs)`` at [p, q, r, s]."""
    full = np.empty((n, n, n, n), dtype=np.asarray(values).dtype)
    for p, q, r, s in product(range(n), repeat=4):
        full[p, q, r, s] = values[position(packing, n, p, q, r, s, like_spins)]
    return full


def pack(full: NDArray[Any], packing: str, like_spins: bool = True) -> NDArray[Any]:
    """The packed vector of integrals ``(n, n, n, n)`` that have the symmetry of the packing."""
    n = len(full)
    values = np.empty(packed_length(packing, n, like_spins), dtype=full.dtype)
    for p, q, r, s in product(range(n), repeat=4):
        values[position(packing, n, p, q, r, s, like_spins)] = full[p, q, r, s]
    return values
