"""D at whole configurations of electrons for the witness: the source's orbitals, LAPACK, and an explicit sum.

No code of qwfx's evaluators takes part: every determinant is factorised on its own, and its derivatives come from its
adjugate, not from a table or from rows put in their place.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Expansion, System, WitnessConfigurations

__all__ = ["MANY_ENTRIES", "configurations_by_sum", "electrons_at_atoms"]

N_CONFIGURATIONS = 8
ATTEMPTS = 32
"""Configurations that are tried: those where D vanishes, or is lost in rounding, prove nothing."""
SOUND = 1e-6
"""Least |D| over what the terms, and the factors of each determinant, amount to: digits that are lost."""
MANY_ENTRIES = 200_000
OPERATIONS = 2e10
"""Above, there are no configurations in the witness, and a note says so."""
BLOCK = 1 << 22
"""Elements of the matrices that are factorised together."""
WIDEST = 1.2
"""Bohr: spread of an electron about its nucleus; the narrowest is that of the innermost shell, 1/Z."""
SEED = 20_260_401

Orbitals = Callable[[str, NDArray[np.float64]], NDArray[Any]]
"""(5, n, M) value, gradient and Laplacian of the orbitals of a set at points (n, 3), by the source's own program."""


def electrons_at_atoms(system: System, n: int = N_CONFIGURATIONS, seed: int = SEED) -> NDArray[np.float64]:
    """(n, N, 3) electrons scattered about the atoms by their charges, in all shells, off every symmetry plane."""
    rng = np.random.default_rng(seed)
    charges = np.maximum(np.asarray(system.effective_charges, dtype=np.float64), 0.0)
    share = charges / charges.sum() if charges.sum() > 0 else np.full(len(charges), 1 / len(charges))
    host = np.empty((n, system.n_electrons), dtype=np.int64)
    for first, last in ((0, system.n_up), (system.n_up, system.n_electrons)):
        if first < last:  # evenly over the charges: D is well away from zero where each atom has its electrons
            even = (np.arange(last - first) + rng.random((n, 1))) / (last - first)
            host[:, first:last] = np.searchsorted(np.cumsum(share)[:-1], even, side="right")
    narrowest = np.minimum(1.0 / np.maximum(charges, 1.0), WIDEST)[host]
    spread = narrowest * (WIDEST / narrowest) ** rng.random(host.shape)
    return np.asarray(system.positions)[host] + spread[:, :, None] * rng.normal(size=(*host.shape, 3))


def configurations_by_sum(
    system: System, expansion: Expansion, orbitals: Orbitals, *, with_energies: bool
) -> tuple[WitnessConfigurations | None, str]:
    """D, its gradients and Laplacian at `N_CONFIGURATIONS` configurations, or None and the reason.

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
    cost = N_CONFIGURATIONS * sum(len(strings) * 30.0 * n**3 for _, strings, n in sides)
    if not n_up + n_down:
        return None, "there are no electrons"
    if n_entries > MANY_ENTRIES or cost > OPERATIONS:
        return None, f"the expansion is too long for it: {n_entries} determinants"
    rows = np.repeat(np.arange(len(offsets) - 1), np.diff(offsets))
    occupied = [_occupied(strings, n) for _, strings, n in sides]
    places, found = [], []
    for electrons in electrons_at_atoms(system, ATTEMPTS):
        parts = []
        for (name, _, n), own, seats in zip(sides, occupied, (electrons[:n_up], electrons[n_up:]), strict=True):
            parts.append(_strings(orbitals(name, seats) if n else np.zeros((5, 0, 0)), own))
        values = _sum(coefficients, rows, columns, parts[0], parts[1])
        if values is not None:
            places.append(electrons)
            found.append(values)
        if len(found) == N_CONFIGURATIONS:
            break
    if not found:
        return None, f"D vanished to rounding at all of {ATTEMPTS} configurations"
    positions = np.array(places)
    log_abs, sign, gradients, laplacian = (np.stack(part, axis=1) for part in zip(*found, strict=True))
    potential = energy = None
    if with_energies:
        potential = np.repeat(_coulomb(system, positions)[None], len(coefficients), axis=0)
        energy = potential - 0.5 * laplacian
    return WitnessConfigurations(positions, log_abs, sign, gradients, laplacian, potential, energy), ""


def _occupied(strings: NDArray[np.uint64], n: int) -> NDArray[np.int64]:
    """(K, n) orbitals of each string, from the bits one by one."""
    rows = []
    for words in strings.tolist():
        bits = sum(word << (64 * k) for k, word in enumerate(words))
        rows.append([p for p in range(bits.bit_length()) if bits >> p & 1])
    return np.array(rows, dtype=np.int64).reshape(len(rows), n)


@dataclass(frozen=True)
class _Strings:
    """The determinants of the strings of one spin, all over exp(shift)."""

    values: NDArray[Any]
    """(K)."""
    derivatives: NDArray[Any]
    """(K, n, 4) with respect to each electron: x, y, z, Laplacian."""
    sizes: NDArray[np.float64]
    """(K) what rounding is in proportion to."""
    shift: float


def _strings(phi: NDArray[Any], occupied: NDArray[np.int64]) -> _Strings:
    """The determinants of each string from orbitals (5, n, M).

    With A = U S V+ the derivative of det A along a change dA is tr(adj(A) dA),
    adj(A) = det(U) det(V+) V diag(products of the other singular values) U+, which holds for singular A too. Rows and
    columns are brought to like size first, since singular values are good relative to the largest only.
    """
    n = phi.shape[1]
    if not n:
        return _Strings(np.ones(len(occupied)), np.zeros((len(occupied), 0, 4)), np.zeros(len(occupied)), 0.0)
    per_block = max(1, BLOCK // (5 * n * n))
    blocks = [_factorised(phi, occupied[k : k + per_block]) for k in range(0, len(occupied), per_block)]
    phase, log, derivatives, others = (np.concatenate(part) for part in zip(*blocks, strict=True))
    largest = float(others.max())
    shift = largest if np.isfinite(largest) else 0.0
    sizes = np.exp(others - shift)
    return _Strings(phase * np.exp(log - shift), derivatives * sizes[:, None, None], sizes, shift)


def _factorised(phi: NDArray[Any], occupied: NDArray[np.int64]) -> tuple[NDArray[Any], ...]:
    """(K) phase and logarithm of the determinants, (K, n, 4) derivatives over exp(others), and (K) others."""
    a = np.moveaxis(phi[:, :, occupied], 2, 0)  # (K, 5, electron, orbital)
    by_row = np.abs(a[:, 0]).max(axis=2)
    by_row[by_row == 0] = 1.0
    a = a / by_row[:, None, :, None]
    by_column = np.abs(a[:, 0]).max(axis=1)
    by_column[by_column == 0] = 1.0
    a = a / by_column[:, None, None, :]
    u, s, vh = np.linalg.svd(a[:, 0])
    with np.errstate(divide="ignore"):
        logs = np.log(s)
    before, after = np.zeros_like(logs), np.zeros_like(logs)
    before[:, 1:] = np.cumsum(logs, axis=1)[:, :-1]
    after[:, :-1] = np.cumsum(logs[:, ::-1], axis=1)[:, ::-1][:, 1:]
    scale = np.log(by_row).sum(axis=1) + np.log(by_column).sum(axis=1)
    products = before + after  # logarithm of the product of all singular values but one
    others = products.max(axis=1)
    with np.errstate(invalid="ignore"):
        weights = np.exp(np.where(np.isfinite(others)[:, None], products - others[:, None], -np.inf))
    phase = np.linalg.det(u) * np.linalg.det(vh)
    adjugate = np.einsum("k,kqp,kq,kiq->kpi", phase, vh.conj(), weights, u.conj(), optimize=True)
    derivatives = np.einsum("kcip,kpi->kic", a[:, 1:], adjugate, optimize=True)
    return phase, logs.sum(axis=1) + scale, derivatives, others + scale


def _sum(
    coefficients: NDArray[Any], rows: NDArray[np.int64], columns: NDArray[np.int64], up: _Strings, down: _Strings
) -> tuple[NDArray[Any], ...] | None:
    """log|D|, sign, gradients (S, N, 3) of log D, Laplacian (S) of D over D; None where D is lost in rounding."""
    for_up, for_down = coefficients * down.values[columns], coefficients * up.values[rows]  # (S, E)
    D = (for_up * up.values[rows]).sum(axis=1)
    size = np.abs(D)
    rounding = (np.abs(for_up) * up.sizes[rows]).sum(axis=1) + (np.abs(for_down) * down.sizes[columns]).sum(axis=1)
    if not (np.isfinite(size) & (size > SOUND * rounding)).all():
        return None
    of_up = np.einsum("se,eik->sik", for_up, up.derivatives[rows], optimize=True)
    of_down = np.einsum("se,eik->sik", for_down, down.derivatives[columns], optimize=True)
    every = np.concatenate([of_up, of_down], axis=1) / D[:, None, None]
    return np.log(size) + up.shift + down.shift, D / size, every[:, :, :3], every[:, :, 3].sum(axis=1)


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
