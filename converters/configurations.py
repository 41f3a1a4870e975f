"""D at whole configurations of electrons for the witness: the source's orbitals, LAPACK, and an explicit sum.

No code of qwfx's evaluators takes part: every determinant is factorised on its own, and its derivatives come from its
inverse, not from a table or from rows put in their place.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Expansion, System, WitnessConfigurations

__all__ = ["MANY_ENTRIES", "configurations_by_sum", "electrons_at_atoms"]

N_CONFIGURATIONS = 8
MANY_ENTRIES = 20_000
OPERATIONS = 2e10
"""Above, there are no configurations in the witness, and a note says so."""
SEED = 20_260_401

Orbitals = Callable[[str, NDArray[np.float64]], NDArray[Any]]
"""(5, n, M) value, gradient and Laplacian of the orbitals of a set at points (n, 3), by the source's own program."""


def electrons_at_atoms(system: System, n: int = N_CONFIGURATIONS, seed: int = SEED) -> NDArray[np.float64]:
    """(n, N, 3) electrons scattered about the atoms by their charges, off every symmetry plane."""
    rng = np.random.default_rng(seed)
    charges = np.maximum(np.asarray(system.effective_charges, dtype=np.float64), 0.0)
    share = charges / charges.sum() if charges.sum() > 0 else np.full(len(charges), 1 / len(charges))
    host = rng.choice(len(share), size=(n, system.n_electrons), p=share)
    return np.asarray(system.positions)[host] + rng.normal(scale=0.9, size=(n, system.n_electrons, 3))


def configurations_by_sum(
    system: System, expansion: Expansion, orbitals: Orbitals, *, with_energies: bool
) -> WitnessConfigurations | None:
    """D, its gradients and Laplacian at `N_CONFIGURATIONS` configurations; None if that takes too long.

    Parameters
    ----------
    orbitals : evaluates a set, see `Orbitals`.
    with_energies : whether potential and local energy are Coulomb's alone, and can be given: no core potentials.
    """
    n_up, n_down = system.n_up, system.n_down
    offsets, columns = np.asarray(expansion.row_start), np.asarray(expansion.columns)
    coefficients = np.asarray(expansion.coefficients)
    n_entries = coefficients.shape[1]
    sides = [(expansion.up_set, np.asarray(expansion.up_strings), n_up),
             (expansion.down_set, np.asarray(expansion.down_strings), n_down)]  # fmt: skip
    cost = N_CONFIGURATIONS * sum(len(strings) * 4.0 * n**3 for _, strings, n in sides)
    if n_entries > MANY_ENTRIES or cost > OPERATIONS or not n_up + n_down:
        return None
    rows = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    occupied = [_occupied(strings, n) for _, strings, n in sides]
    positions = electrons_at_atoms(system)
    found = []
    for electrons in positions:
        parts = []
        for (name, _, n), own, places in zip(sides, occupied, (electrons[:n_up], electrons[n_up:]), strict=True):
            parts.append(_strings(orbitals(name, places) if n else np.zeros((5, 0, 0)), own))
        found.append(_sum(coefficients, rows, columns, parts[0], parts[1]))
    log_abs, sign, gradients, laplacian = (np.stack(part, axis=1) for part in zip(*found, strict=True))
    if not np.isfinite(log_abs).all():  # a configuration where D vanishes proves nothing
        return None
    potential = energy = None
    if with_energies:
        potential = np.repeat(_coulomb(system, positions)[None], len(coefficients), axis=0)
        energy = potential - 0.5 * laplacian
    return WitnessConfigurations(positions, log_abs, sign, gradients, laplacian, potential, energy)


def _occupied(strings: NDArray[np.uint64], n: int) -> NDArray[np.int64]:
    """(K, n) orbitals of each string, from the bits one by one."""
    rows = []
    for words in strings.tolist():
        bits = sum(word << (64 * k) for k, word in enumerate(words))
        rows.append([p for p in range(bits.bit_length()) if bits >> p & 1])
    return np.array(rows, dtype=np.int64).reshape(len(rows), n)


def _strings(phi: NDArray[Any], occupied: NDArray[np.int64]) -> tuple[NDArray[Any], NDArray[Any], float]:
    """(K) determinants over exp(shift), (K, n, 4) their logarithmic derivatives for each electron, and the shift."""
    n = phi.shape[1]
    if not n:
        return np.ones(len(occupied)), np.zeros((len(occupied), 0, 4)), 0.0
    determinants, ratios = [], []
    for orbitals in occupied:
        a = phi[:, :, orbitals]  # (5, electron, orbital)
        sign, log = np.linalg.slogdet(a[0])
        inverse = np.linalg.inv(a[0])
        determinants.append((sign, log))
        ratios.append(np.einsum("kip,pi->ik", a[1:], inverse))
    shift = max(float(log) for _, log in determinants)
    return np.array([s * np.exp(log - shift) for s, log in determinants]), np.array(ratios), shift


def _sum(
    coefficients: NDArray[Any], rows: NDArray[np.int64], columns: NDArray[np.int64],
    up: tuple[NDArray[Any], NDArray[Any], float], down: tuple[NDArray[Any], NDArray[Any], float],
) -> tuple[NDArray[Any], ...]:  # fmt: skip
    """log|D|, sign, gradients (S, N, 3) of log D, Laplacian (S) of D over D."""
    terms = coefficients * up[0][rows] * down[0][columns]  # (S, E)
    total = terms.sum(axis=1)
    derivatives = [
        np.einsum("se,eik->sik", terms, side[1][index], optimize=True) / total[:, None, None]
        for side, index in ((up, rows), (down, columns))
    ]
    every = np.concatenate(derivatives, axis=1)
    size = np.abs(total)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.log(size) + up[2] + down[2], total / size, every[:, :, :3], every[:, :, 3].sum(axis=1)


def _coulomb(system: System, positions: NDArray[np.float64]) -> NDArray[np.float64]:
    """(m) Coulomb energy of electrons and nuclei, pair by pair."""
    charges, nuclei = np.asarray(system.effective_charges), np.asarray(system.positions)
    total = []
    for electrons in positions:
        bodies = np.concatenate([electrons, nuclei[charges > 0]])
        q = np.concatenate([-np.ones(len(electrons)), charges[charges > 0]])
        energy = 0.0
        for k in range(1, len(q)):
            energy += float((q[k] * q[:k] / np.linalg.norm(bodies[:k] - bodies[k], axis=1)).sum())
        total.append(energy)
    return np.array(total)
