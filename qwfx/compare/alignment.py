"""Bringing two lists of orbitals together, up to the freedoms that do not change a determinant.

Orbitals are given by their values, gradients and Laplacians at points, as fields of shape (5, n_points, M). The
freedoms, in the order in which they are tried: none; a sign (a phase for complex orbitals); another order; a rotation
within a group of orbitals of equal energy.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["DEGENERATE_WITHIN", "Alignment", "align", "degenerate_groups"]

DEGENERATE_WITHIN = 1e-6
"""hartree; converged SCF energies of partners of a degenerate level agree much better than this (common practice)."""


@dataclass(frozen=True)
class Alignment:
    """How the second list was brought to the first."""

    fields: NDArray[Any]
    """(5, n_points, M) the second list after alignment."""
    freedom: tuple[str, ...]
    """(M) what was used for each orbital of the first list: ``none``, ``sign``, ``phase``, ``order`` ... in words."""


def degenerate_groups(energies: NDArray[np.float64] | None, n_orbitals: int) -> list[NDArray[np.int64]]:
    """Groups of orbitals, of at least two, whose energies agree within `DEGENERATE_WITHIN`, chained."""
    if energies is None or len(energies) != n_orbitals or n_orbitals < 2:
        return []
    order = np.argsort(energies, kind="stable")
    breaks = np.flatnonzero(np.diff(energies[order]) > DEGENERATE_WITHIN) + 1
    return [np.sort(group) for group in np.split(order, breaks) if len(group) > 1]


def _unit_columns(fields: NDArray[Any]) -> NDArray[Any]:
    """Fields as columns (5 n_points, M), each component scaled to the size it has over all orbitals, then unit norm."""
    size = np.sqrt(np.mean(np.abs(fields) ** 2, axis=(1, 2), keepdims=True))
    columns = (fields / np.where(size > 0, size, 1.0)).reshape(-1, fields.shape[2])
    norm = np.linalg.norm(columns, axis=0)
    return np.asarray(columns / np.where(norm > 0, norm, 1.0))


def align(
    first: NDArray[Any],
    second: NDArray[Any],
    energies: NDArray[np.float64] | None,
    tolerance: float,
) -> Alignment:
    """Align `second` to `first`.

    Parameters
    ----------
    first, second : (5, n_points, M) each.
    energies : (M) orbital energies of the first list, or None where there are none (then no rotation is tried).
    tolerance : orbitals that agree within this, relative to their scale, are left alone.
    """
    if first.shape != second.shape:
        raise ValueError(f"fields of {first.shape} and {second.shape} cannot be aligned")
    n_orbitals = first.shape[2]
    aligned = np.array(second, dtype=np.result_type(first, second))
    freedom = ["none"] * n_orbitals
    a, b = _unit_columns(first), _unit_columns(second)
    # |cosine| between every pair of orbitals, seen as vectors of their values at the points.
    cosine = np.abs(a.conj().T @ b)
    settled = np.zeros(n_orbitals, dtype=bool)
    partner = np.arange(n_orbitals)
    threshold = 1.0 - max(tolerance, 1e-12)
    for p in range(n_orbitals):
        settled[p] = cosine[p, p] >= threshold
    loose = np.flatnonzero(~settled)
    for p in map(int, loose):
        q = int(loose[int(np.argmax(cosine[p, loose]))])
        if cosine[p, q] >= threshold and not np.any((partner == q) & settled):
            partner[p], settled[p] = q, True
            freedom[p] = f"order (was {q})"
    rotated = _rotations(first, second, energies, settled, aligned, freedom, tolerance)
    for p in range(n_orbitals):
        if p not in rotated:
            _fix_phase(first, second, int(partner[p]), p, aligned, freedom)
    return Alignment(aligned, tuple(freedom))


def _fix_phase(
    first: NDArray[Any], second: NDArray[Any], q: int, p: int, aligned: NDArray[Any], freedom: list[str]
) -> None:
    """Multiply orbital q of the second list by the sign or phase that brings it to orbital p of the first."""
    inner = np.vdot(second[0, :, q], first[0, :, p])
    phase = inner / abs(inner) if abs(inner) > 0 else 1.0
    if np.isrealobj(first) and np.isrealobj(second):
        phase = np.sign(phase.real) or 1.0
    aligned[:, :, p] = second[:, :, q] * phase
    if abs(phase - 1.0) > 1e-8:
        word = "sign" if abs(phase + 1.0) < 1e-8 else "phase"
        freedom[p] = word if freedom[p] == "none" else f"{freedom[p]} and {word}"


def _rotations(
    first: NDArray[Any],
    second: NDArray[Any],
    energies: NDArray[np.float64] | None,
    settled: NDArray[np.bool_],
    aligned: NDArray[Any],
    freedom: list[str],
    tolerance: float,
) -> set[int]:
    """Rotate degenerate groups that have unsettled members; the orbitals that were rotated."""
    done: set[int] = set()
    for group in degenerate_groups(energies, first.shape[2]):
        if np.all(settled[group]):
            continue
        a = first[:, :, group].reshape(-1, len(group))
        b = second[:, :, group].reshape(-1, len(group))
        rotation, *_ = np.linalg.lstsq(b, a, rcond=None)
        # Only a unitary mixing leaves the determinant's modulus as it is; anything else is a real difference.
        # The fit of data that agree within tolerance has errors of the same order, a few times amplified.
        defect = np.abs(rotation.conj().T @ rotation - np.eye(len(group))).max()
        if defect > max(100 * tolerance, 1e-8):
            continue
        aligned[:, :, group] = second[:, :, group] @ rotation
        members = ", ".join(map(str, group))
        for p in group:
            freedom[p] = f"rotation within {{{members}}}"
            done.add(int(p))
    return done
