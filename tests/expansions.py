"""Random expansions for the tests."""

from __future__ import annotations

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Expansion

__all__ = ["bits", "random_expansion"]


def bits(occupied: NDArray[np.int64], n_orbitals: int) -> NDArray[np.uint64]:
    """(K, W) words of strings (K, n)."""
    words = np.zeros((len(occupied), max(1, -(-n_orbitals // 64))), dtype=np.uint64)
    for k, orbitals in enumerate(occupied):
        for p in orbitals:
            words[k, p // 64] |= np.uint64(1 << (int(p) % 64))
    return words


def random_expansion(
    rng: np.random.Generator, n: tuple[int, int], n_orbitals: int, n_entries: int, states: int = 1,
    is_complex: bool = False,
) -> Expansion:  # fmt: skip
    """Entries chosen at random among the pairs of some strings of each spin; every string is used."""
    strings = []
    for electrons in n:
        want = max(1, int(np.sqrt(n_entries)) + 1)
        if n_orbitals <= 12:
            every = list(combinations(range(n_orbitals), electrons))
            chosen = [every[k] for k in rng.permutation(len(every))[:want]]
        else:
            chosen = [tuple(np.sort(rng.permutation(n_orbitals)[:electrons]).tolist()) for _ in range(want)]
        ordered = sorted(set(chosen), key=lambda string: sum(1 << p for p in string))
        strings.append(np.array(ordered, dtype=np.int64).reshape(len(ordered), electrons))
    up, down = strings
    present = rng.random((len(up), len(down))) < n_entries / (len(up) * len(down))
    present[np.arange(len(up)), rng.integers(len(down), size=len(up))] = True
    present[rng.integers(len(up), size=len(down)), np.arange(len(down))] = True
    c = rng.normal(size=(states, int(present.sum())))
    if is_complex:
        c = c + 1j * rng.normal(size=c.shape)
    return Expansion(
        "spatial", "spatial", bits(up, n_orbitals), bits(down, n_orbitals),
        np.concatenate([[0], np.cumsum(present.sum(axis=1))]).astype(np.int64), np.nonzero(present)[1], c,
    )  # fmt: skip
