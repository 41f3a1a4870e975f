"""Energies of expansions by creation and annihilation operators, one at a time."""

from __future__ import annotations

import numpy as np

from qwfx.reference.determinants import DeterminantSum

__all__ = ["State", "annihilate", "create", "energy"]

State = dict[tuple[int, ...], float]
"""Occupied spin orbitals, ascending (orbital p up is p, down p + n), and the coefficient: operators in this order."""


def annihilate(state: State, q: int) -> State:
    return {occupied[:k] + occupied[k + 1 :]: c * (-1) ** k for occupied, c in state.items()
            for k in [occupied.index(q) if q in occupied else -1] if k >= 0}  # fmt: skip


def create(state: State, p: int) -> State:
    return {tuple(sorted((*occupied, p))): c * (-1) ** sum(q < p for q in occupied)
            for occupied, c in state.items() if p not in occupied}  # fmt: skip


def energy(total: DeterminantSum, state: int, h: np.ndarray, eri: np.ndarray, core: float) -> float:
    """<s|H|s>/<s|s> with H of FORMAT.md, Hamiltonian, applied one operator at a time to F15's states.

    h (n, n) or (spin, n, n), eri (n, n, n, n) or (spin, spin, n, n, n, n).
    """
    n = h.shape[-1]
    h, eri = np.broadcast_to(h, (2, n, n)), np.broadcast_to(eri, (2, 2, n, n, n, n))
    ket: State = {}
    for e, (i, j) in enumerate(zip(total.rows, total.columns, strict=True)):
        ket[(*total.up[i].tolist(), *(total.down[j] + n).tolist())] = float(total.coefficients[state, e])
    value = core * sum(c * c for c in ket.values())

    def overlap(other: State) -> float:
        return sum(c * ket.get(occupied, 0.0) for occupied, c in other.items())

    for s, p, q in np.ndindex(2, n, n):
        value += h[s, p, q] * overlap(create(annihilate(ket, q + s * n), p + s * n))
    for s, t, p, q, r, u in np.ndindex(2, 2, n, n, n, n):
        if abs(eri[s, t, p, q, r, u]) > 1e-12:
            moved = annihilate(annihilate(ket, q + s * n), u + t * n)
            value += 0.5 * eri[s, t, p, q, r, u] * overlap(create(create(moved, r + t * n), p + s * n))
    return value / sum(c * c for c in ket.values())
