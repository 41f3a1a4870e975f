"""The factorised determinant of each walker, and the table of the other orbitals over it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels.radial import SUM
from qwfx.kernels.strings import SpinStrings

__all__ = ["Table", "gamma_of", "make_table", "replace_row"]


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


@njit(**SUM)  # type: ignore[untyped-decorator]
def _replace_rows(
    inverse: Any, table: Any, walkers: Any, rows: Any, own: Any, i: int, ratio: Any, rest: Any, change: Any
) -> None:
    """See `replace_row`. `own` (w, n) are the reference's columns of `rows` (w, M); `ratio` (w) is filled."""
    n = inverse.shape[1]
    for m in range(len(walkers)):
        w = walkers[m]
        for k in range(n):
            change[k] = 0.0
        for h in range(n):
            for k in range(n):
                change[k] += own[m, h] * inverse[w, h, k]
        ratio[m] = change[i]
        change[i] -= 1.0
        if len(table):
            for p in range(len(rest)):
                rest[p] = rows[m, p]
            for h in range(n):
                for p in range(len(rest)):
                    rest[p] -= own[m, h] * table[w, h, p]
        for h in range(n):
            factor = inverse[w, h, i] / ratio[m]
            for k in range(n):
                inverse[w, h, k] -= factor * change[k]
            if len(table):
                for p in range(len(rest)):
                    table[w, h, p] += factor * rest[p]


def replace_row(made: Table, walkers: NDArray[np.int64], i: int, rows: NDArray[Any]) -> None:
    """Put `rows` (w, M) in the place of row i of Phi of some walkers, by updates of rank one, in place.

    With A^-1 and T = A^-1 Phi before, v the new row and v_ref its columns of the reference: det A grows by ratio =
    v_ref A^-1 e_i, A^-1 by -(A^-1 e_i)(v_ref A^-1 - e_i)/ratio, T by (A^-1 e_i)(v - v_ref T)/ratio. Source: J. Sherman,
    W. J. Morrison, Ann. Math. Stat. 21, 124 (1950).
    """
    n, n_used = made.inverse.shape[1], rows.shape[1]
    own = np.empty((len(rows), n), rows.dtype)
    for number, reference in enumerate(made.references):
        of = made.reference_of[walkers] == number
        own[of] = rows[of][:, reference]
    kind = made.inverse.dtype
    ratio = np.empty(len(rows), kind)
    table = made.table if n != n_used else np.empty((0, 0, 0), kind)  # of a single determinant it is a unit matrix
    with np.errstate(all="ignore"):
        _replace_rows(made.inverse, table, walkers, rows, own, i, ratio, np.empty(n_used, kind), np.empty(n, kind))
        size = np.abs(ratio)
        made.log[walkers] += np.log(size)
        made.sign[walkers] = made.sign[walkers] * (ratio / size)


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
