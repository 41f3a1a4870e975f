"""From the flat vector to the members of a Hamiltonian."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.fcidump.fill import SMALL, Filled
from qwfx.converters.fcidump.store import Places
from qwfx.kernels.packing import indices, positions
from qwfx.model import TwoBody

__all__ = ["one_body", "orbital_energies", "two_body"]


def one_body(filled: Filled, places: Places) -> dict[str, NDArray[Any]]:
    """Spin -> (n, n) Hermitian matrix."""
    n, begin = places.n, int(places.offsets[1])
    size = n * (n + 1) // 2
    rows, columns = np.tril_indices(n)
    matrices = {}
    for number, spin in enumerate(places.spins):
        triangle = filled.part(begin + number * size, begin + (number + 1) * size)
        matrix = np.zeros((n, n), dtype=triangle.dtype)
        matrix[columns, rows] = np.conj(triangle)
        matrix[rows, columns] = triangle
        matrices[spin] = matrix
    return matrices


def orbital_energies(filled: Filled, places: Places) -> tuple[dict[str, NDArray[np.float64]], list[str]]:
    """Spin -> (n), empty unless the file has the energy of every orbital; and what was left out."""
    wanted = places.n * len(places.spins)
    if not filled.n_energies:
        return {}, []
    if not filled.any_energy:
        return {}, ["the orbital energies are all zero: left out"]
    if filled.n_energies < wanted:
        return {}, [f"only {filled.n_energies} of {wanted} orbital energies: left out"]
    return {
        spin: np.array(filled.part(1 + number * places.n, 1 + (number + 1) * places.n).real)
        for number, spin in enumerate(places.spins)
    }, []


def two_body(filled: Filled, places: Places) -> tuple[dict[str, TwoBody], list[str]]:
    """Spin pair -> packed integrals, in full or sparse, whichever takes less memory; and what was chosen."""
    tables, notes = {}, []
    begin = int(places.offsets[2])
    for pair, length in zip(places.pairs, places.lengths, strict=True):
        index, values = _stored(filled, begin, length)
        begin += length
        packing, like = places.packing(pair)
        if packing == "pairs":
            index, values = _with_conjugates(index, values, places.n, like)
        if index is None and length > SMALL and 2 * np.count_nonzero(values) < length:
            index = np.flatnonzero(values)
            values = values[index]
        tables[pair] = TwoBody(values, None if index is None else index.view(np.uint64))
        if index is not None:
            share = len(index) / length
            notes.append(f"two-electron integrals ({pair}) stored sparsely: {len(index)} of {length} ({share:.1%})")
    return tables, notes


def _stored(filled: Filled, begin: int, length: int) -> tuple[NDArray[np.int64] | None, NDArray[Any]]:
    if filled.index is None:
        return None, filled.values[begin : begin + length]
    first, last = np.searchsorted(filled.index, [begin, begin + length])
    index, values = filled.index[first:last] - begin, filled.values[first:last]
    keep = values != 0
    return (index, values) if keep.all() else (index[keep], values[keep])


def _with_conjugates(
    index: NDArray[np.int64] | None, values: NDArray[Any], n: int, like: bool
) -> tuple[NDArray[np.int64] | None, NDArray[Any]]:
    """Of (pq|rs) and (qp|sr) = (pq|rs)* the file's flat vector has one; here both."""
    own = np.flatnonzero(values) if index is None else index
    number = values[own] if index is None else values
    p, q, r, s = indices("pairs", n, own, like).T
    partner = positions("pairs", n, np.stack([q, p, s, r], axis=1), like)
    other = partner != own
    if index is None:
        values[partner[other]] = np.conj(number[other])
        return None, values
    index = np.concatenate([own, partner[other]])
    order = np.argsort(index, kind="stable")
    return index[order], np.concatenate([number, np.conj(number[other])])[order]
