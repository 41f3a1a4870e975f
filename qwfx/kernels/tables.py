"""The factorised determinant of each walker, and the table of the other orbitals over it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.kernels.strings import SpinStrings

__all__ = ["Table", "gamma_of", "make_table"]


@dataclass(eq=False)
class Table:
    """One spin of W walkers."""

    log: NDArray[np.float64]
    """(W) log |det A|, A = Phi[:, reference]; -inf where the orbitals are dependent whatever the reference."""
    sign: NDArray[Any]
    """(W) its sign or phase; 0 where it vanishes."""
    inverse: NDArray[Any]
    """(W, n, n) A^-1: row j belongs to orbital j of the reference, column i to electron i."""
    table: NDArray[Any]
    """(W, n, M) T = A^-1 Phi."""
    references: list[NDArray[np.int64]]
    """The sets of orbitals that are taken as reference; the first is the usual one."""
    reference_of: NDArray[np.int64]
    """(W) which of them each walker has."""


def make_table(strings: SpinStrings, phi: NDArray[Any], largest: float) -> Table:
    """Factorise walkers (W, n, M); those whose table has an entry above `largest` take another reference."""
    usual = strings.reference
    whole = len(usual) == phi.shape[2]
    with np.errstate(all="ignore"):
        a = phi if whole else phi[:, :, usual]
        sign, log, inverse = _factors(a)
        table = np.broadcast_to(np.eye(len(usual), dtype=phi.dtype), phi.shape) if whole else inverse @ phi
    made = Table(log, sign, inverse, table, [usual], np.zeros(len(phi), dtype=np.int64))
    if whole:
        return made
    with np.errstate(all="ignore"):
        odd = np.flatnonzero(~(np.abs(table).max(axis=(1, 2), initial=0.0) <= largest))
    for w in odd.tolist():
        if np.isfinite(phi[w]).all():
            _other_reference(made, w, phi[w])
    return made


def _factors(a: NDArray[Any]) -> tuple[NDArray[Any], NDArray[np.float64], NDArray[Any]]:
    """Sign, logarithm of the magnitude, and inverse of matrices (W, n, n); NaN for an inverse that does not exist."""
    sign, log = np.linalg.slogdet(a)
    try:
        return sign, log, np.linalg.inv(a)
    except np.linalg.LinAlgError:  # one of them is exactly singular
        inverse = np.full_like(a, np.nan)
        sound = np.flatnonzero(sign != 0)
        inverse[sound] = np.linalg.inv(a[sound])
        return sign, log, inverse


def _other_reference(made: Table, w: int, phi: NDArray[Any]) -> None:
    """Take the orbitals that are most independent at this walker: pivots of a QR factorisation."""
    from scipy.linalg import qr

    n = phi.shape[0]
    size = np.abs(phi).max(axis=1, keepdims=True)
    scaled = phi / np.where(size > 0, size, 1.0)  # an electron in the tail has a small row
    _, _, order = qr(scaled, mode="economic", pivoting=True)
    reference = np.sort(order[:n]).astype(np.int64)
    sign, log = np.linalg.slogdet(phi[:, reference])
    if sign == 0 or not np.isfinite(log):
        made.sign[w], made.log[w] = 0, -np.inf
        made.inverse[w] = made.table[w] = np.nan
        return
    made.sign[w], made.log[w] = sign, log
    made.inverse[w] = np.linalg.inv(phi[:, reference])
    made.table[w] = made.inverse[w] @ phi
    for number, known in enumerate(made.references):
        if np.array_equal(known, reference):
            made.reference_of[w] = number
            return
    made.reference_of[w] = len(made.references)
    made.references.append(reference)


def gamma_of(made: Table, slope: NDArray[Any] | None, n_states: int) -> NDArray[Any]:
    """(S, W, M, n) d log D / d Phi[i, p] at [p, i], from d log F / d T (S, W, n, M); None if F is constant.

    With D = det(A) F(T) and dT = A^-1 (dPhi - dA T): the columns of the reference get A^-1 - (T X^T) A^-1, all get
    X^T A^-1, where X is `slope`.
    """
    if slope is None:
        return np.broadcast_to(made.inverse, (n_states, *made.inverse.shape))
    gamma = slope.swapaxes(2, 3) @ made.inverse
    own = made.inverse - (made.table @ slope.swapaxes(2, 3)) @ made.inverse
    for number, reference in enumerate(made.references):
        walkers = np.flatnonzero(made.reference_of == number)
        if len(walkers) == len(made.log):
            gamma[:, :, reference] += own
        elif len(walkers):
            gamma[:, walkers[:, None], reference] += own[:, walkers]
    return np.asarray(gamma)
