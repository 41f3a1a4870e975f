"""Positions of two-electron integrals in the packed vectors, many at once; see `qwfx.reference.packing`."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.reference.packing import packed_length, split_triangle

__all__ = ["dense", "indices", "pack", "positions", "unpack"]

Ints = NDArray[np.int64]


def _triangle(p: Ints, q: Ints) -> Ints:
    high, low = np.maximum(p, q), np.minimum(p, q)
    return np.asarray(high * (high + 1) // 2 + low)


def positions(packing: str, n: int, index: NDArray[Any], like_spins: bool = True) -> Ints:
    """Positions of the integrals whose indices are the rows of `index` (m, 4), from 0."""
    p, q, r, s = np.asarray(index, dtype=np.int64).T
    if packing == "eightfold":
        return _triangle(_triangle(p, q), _triangle(r, s))
    if packing == "fourfold":
        return np.asarray(_triangle(p, q) * (n * (n + 1) // 2) + _triangle(r, s))
    first, second = p * n + q, r * n + s
    return _triangle(first, second) if like_spins else np.asarray(first * n * n + second)


def indices(packing: str, n: int, position: NDArray[Any], like_spins: bool = True) -> Ints:
    """(m, 4) indices from 0 of the integrals at these positions: p >= q and r >= s for real orbitals."""
    place = np.asarray(position, dtype=np.int64)
    pairs = n * n if packing == "pairs" else n * (n + 1) // 2
    if packing == "eightfold" or (packing == "pairs" and like_spins):
        first, second = split_triangle(place)
    else:
        first, second = np.divmod(place, max(pairs, 1))
    if packing == "pairs":
        return np.stack([*np.divmod(first, n), *np.divmod(second, n)], axis=1)
    return np.stack([*split_triangle(first), *split_triangle(second)], axis=1)


def dense(values: Any, index: Any, packing: str, n: int, like_spins: bool = True) -> NDArray[Any]:
    """The packed vector in full: what `index` (or None) leaves out is zero."""
    stored = np.asarray(values)
    if index is None:
        return stored
    full = np.zeros(packed_length(packing, n, like_spins), dtype=stored.dtype)
    full[np.asarray(index).astype(np.int64)] = stored
    return full


def unpack(values: Any, packing: str, n: int, like_spins: bool = True) -> NDArray[Any]:
    """The packed vector as ``(n, n, n, n)``, ``(pq|rs)`` at [p, q, r, s]."""
    orbital = np.arange(n)
    pair = orbital[:, None] * n + orbital if packing == "pairs" else _triangle(orbital[:, None], orbital[None, :])
    flat = pair.reshape(-1)
    if packing == "eightfold" or (packing == "pairs" and like_spins):
        place = _triangle(flat[:, None], flat[None, :])
    else:
        place = flat[:, None] * (n * n if packing == "pairs" else n * (n + 1) // 2) + flat
    return np.asarray(values)[place].reshape(n, n, n, n)


def pack(full: NDArray[Any], packing: str, like_spins: bool = True) -> NDArray[Any]:
    """The packed vector of integrals ``(n, n, n, n)`` that have the symmetry of the packing.

    Of elements that share a place the one whose indices `indices` returns is taken.
    """
    n = len(full)
    p, q = (x.ravel() for x in np.indices((n, n))) if packing == "pairs" else np.tril_indices(n)
    square = full[p, q][:, p, q]
    if packing == "eightfold" or (packing == "pairs" and like_spins):
        return np.asarray(square[np.tril_indices(len(square))])
    return np.ascontiguousarray(square).reshape(-1)
