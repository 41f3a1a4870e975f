"""Jastrow factors as they stand in FORMAT.md (F17 to F27), without regard for speed."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from qwfx.model import JastrowTerm

__all__ = ["Values", "evaluate", "radial_function", "three_body_function"]

Real: TypeAlias = Any
"""A number that has the four operations: float, or a number of mpmath."""
Radial: TypeAlias = Callable[[Real], tuple[Real, Real, Real]]
ThreeBody: TypeAlias = Callable[[Real, Real, Real], tuple[Real, ...]]
Values: TypeAlias = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]


def _power(x: Real, n: int) -> Real:
    """x^n for n >= 0, and 0 for n < 0: derivatives of powers take what is multiplied by 0 for 0."""
    return x**n if n >= 0 else 0 * x


def _polynomial(coefficients: Any, x: Real) -> tuple[Real, Real, Real]:
    """sum_k c_k x^k and its first two derivatives."""
    terms = list(enumerate(coefficients))
    return (
        sum((c * _power(x, k) for k, c in terms), 0 * x),
        sum((c * k * _power(x, k - 1) for k, c in terms), 0 * x),
        sum((c * k * (k - 1) * _power(x, k - 2) for k, c in terms), 0 * x),
    )


def _edge(r: Real, cutoff: Real, smoothness: int) -> tuple[Real, Real, Real]:
    """(r - L)^C and its derivatives."""
    x, C = r - cutoff, smoothness
    return _power(x, C), C * _power(x, C - 1), C * (C - 1) * _power(x, C - 2)


def _scaled(r: Real, b: Real) -> tuple[Real, Real, Real]:
    """s = b r / (1 + b r) and its derivatives (F23)."""
    return b * r / (1 + b * r), b / (1 + b * r) ** 2, -2 * b**2 / (1 + b * r) ** 3


def _product(f: tuple[Real, ...], g: tuple[Real, ...]) -> tuple[Real, Real, Real]:
    return f[0] * g[0], f[1] * g[0] + f[0] * g[1], f[2] * g[0] + 2 * f[1] * g[1] + f[0] * g[2]


def _composed(f: tuple[Real, ...], s: tuple[Real, ...]) -> tuple[Real, Real, Real]:
    """f(s(r)) from f and its derivatives at s, and s and its derivatives at r."""
    return f[0], f[1] * s[1], f[2] * s[1] ** 2 + f[1] * s[2]


def _basis_spline(t: Real) -> tuple[Real, Real, Real]:
    """B(t) and its derivatives (F26)."""
    a, side = abs(t), 1 if t >= 0 else -1
    if a <= 1:
        return 2 * t**0 / 3 - a**2 + a**3 / 2, side * (-2 * a + 3 * a**2 / 2), -2 + 3 * a
    if a <= 2:
        return (2 - a) ** 3 / 6, -side * (2 - a) ** 2 / 2, 2 - a
    return 0 * t, 0 * t, 0 * t


def radial_function(term: JastrowTerm, row: int) -> Radial:
    """u and its first two derivatives at a distance r > 0 (F20, F21, F23, F25), of one row of a term of two bodies."""
    p = term.members

    def pade(r: Real) -> tuple[Real, Real, Real]:
        a, b = p["a"][row], p["b"][row]
        return a * r / (1 + b * r), a / (1 + b * r) ** 2, -2 * a * b / (1 + b * r) ** 3

    def cutoff_polynomial(r: Real) -> tuple[Real, Real, Real]:
        if r >= p["cutoff"][row]:
            return 0 * r, 0 * r, 0 * r
        edge = _edge(r, p["cutoff"][row], int(term.attributes["smoothness"]))
        return _product(edge, _polynomial(p["coefficients"][row], r))

    def scaled_polynomial(r: Real) -> tuple[Real, Real, Real]:
        s = _scaled(r, p["scale"][row])
        f = [0 * r, 0 * r, 0 * r]
        for c, n in zip(p["coefficients"][row], p["powers"], strict=True):
            n = int(n)
            f[0] += c * _power(s[0], n)
            f[1] += c * n * _power(s[0], n - 1)
            f[2] += c * n * (n - 1) * _power(s[0], n - 2)
        return _composed(tuple(f), s)

    def bspline(r: Real) -> tuple[Real, Real, Real]:
        c = p["coefficients"][row]
        h = p["cutoff"][row] / len(c)
        if r >= p["cutoff"][row]:
            return 0 * r, 0 * r, 0 * r
        parts = [_basis_spline(r / h - k + 1) for k in range(len(c))]
        u = [sum((c[k] * parts[k][d] for k in range(len(c))), 0 * r) for d in range(3)]
        return u[0], u[1] / h, u[2] / h**2

    forms = {"pade": pade, "cutoff-polynomial": cutoff_polynomial, "scaled-polynomial": scaled_polynomial}
    return (forms | {"bspline": bspline})[term.form]


def three_body_function(term: JastrowTerm, row: int) -> ThreeBody:
    """f(r_i, r_j, r_ij) of F22 or F24: f, f_1, f_2, f_3, f_11, f_22, f_33, f_13, f_23."""
    p = term.members

    def products(one: list[Any], two: list[Any], pair: list[Any]) -> tuple[Real, ...]:
        orders = [(0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1), (2, 0, 0), (0, 2, 0), (0, 0, 2), (1, 0, 1), (0, 1, 1)]
        return tuple(one[a] * two[b] * pair[c] for a, b, c in orders)

    def cutoff_polynomial(ri: Real, rj: Real, rij: Real) -> tuple[Real, ...]:
        L, C = p["cutoff"][row], int(term.attributes["smoothness"])
        total = [0 * ri] * 9
        if ri >= L or rj >= L:
            return tuple(total)
        for (l, m, n), gamma in np.ndenumerate(p["coefficients"][row]):
            one = _product(_edge(ri, L, C), _polynomial([0] * l + [1], ri))
            two = _product(_edge(rj, L, C), _polynomial([0] * m + [1], rj))
            found = products(list(one), list(two), list(_polynomial([0] * n + [1], rij)))
            total = [t + gamma * f for t, f in zip(total, found, strict=True)]
        return tuple(total)

    def scaled_polynomial(ri: Real, rj: Real, rij: Real) -> tuple[Real, ...]:
        b, d = p["scale"][row], p["scale_electron"][row]
        total = [0 * ri] * 9
        for c, (m, n, o) in zip(p["coefficients"][row], np.asarray(p["powers"]).tolist(), strict=True):
            pair = _composed(_polynomial([0] * o + [1], _scaled(rij, d)[0]), _scaled(rij, d))
            for first, second in ((m, n), (n, m)):
                one = _composed(_polynomial([0] * first + [1], _scaled(ri, b)[0]), _scaled(ri, b))
                two = _composed(_polynomial([0] * second + [1], _scaled(rj, b)[0]), _scaled(rj, b))
                found = products(list(one), list(two), list(pair))
                half = 2 if m == n else 1  # Delta
                total = [t + c * f / half for t, f in zip(total, found, strict=True)]
        return tuple(total)

    return cutoff_polynomial if term.form == "cutoff-polynomial" else scaled_polynomial


def _row_of(term: JastrowTerm, channel: str) -> int | None:
    words = [str(word) for word in term.members["channel"]]
    return words.index(channel) if channel in words else None


def _pairs(n_up: int, n: int) -> Iterator[tuple[int, int, str]]:
    """Pairs of electrons, the up electron of an unlike pair first, with their channel."""
    for i in range(n):
        for j in range(i + 1, n):
            yield i, j, "up_up" if j < n_up else "up_down" if i < n_up else "down_down"


def evaluate(
    terms: Mapping[str, JastrowTerm], n_up: int, positions: NDArray[np.float64], electrons: NDArray[np.float64]
) -> Values:
    """J (W), its gradients (W, N, 3) and its Laplacians (W, N) at electrons (W, N, 3); nuclei at `positions` (A, 3)."""
    parts = [_one_walker(terms, n_up, positions, walker) for walker in electrons]
    value, gradient, laplacian = (np.array(part) for part in zip(*parts, strict=True))
    return value, gradient, laplacian


def _one_walker(
    terms: Mapping[str, JastrowTerm], n_up: int, positions: NDArray[np.float64], x: NDArray[np.float64]
) -> tuple[float, NDArray[np.float64], NDArray[np.float64]]:
    value, gradient, laplacian = 0.0, np.zeros((len(x), 3)), np.zeros(len(x))
    for term in terms.values():
        body = term.attributes["body"]
        if body == "electron-electron":
            for i, j, channel in _pairs(n_up, len(x)):
                if (row := _row_of(term, channel)) is not None:
                    r = np.linalg.norm(x[i] - x[j])
                    u, du, d2u = radial_function(term, row)(r)
                    value += u
                    for k, e in ((i, (x[i] - x[j]) / r), (j, (x[j] - x[i]) / r)):
                        gradient[k] += du * e
                        laplacian[k] += d2u + 2 * du / r
        elif body == "electron-nucleus":
            for i in range(len(x)):
                if (row := _row_of(term, "up" if i < n_up else "down")) is not None:
                    for nucleus in positions[term.members["atoms"]]:
                        r = np.linalg.norm(x[i] - nucleus)
                        u, du, d2u = radial_function(term, row)(r)
                        value += u
                        gradient[i] += du * (x[i] - nucleus) / r
                        laplacian[i] += d2u + 2 * du / r
        else:
            for i, j, channel in _pairs(n_up, len(x)):
                if (row := _row_of(term, channel)) is not None:
                    for nucleus in positions[term.members["atoms"]]:
                        ri, rj, rij = (np.linalg.norm(d) for d in (x[i] - nucleus, x[j] - nucleus, x[i] - x[j]))
                        f = three_body_function(term, row)(ri, rj, rij)
                        ei, ej, eij = (x[i] - nucleus) / ri, (x[j] - nucleus) / rj, (x[i] - x[j]) / rij
                        value += f[0]
                        gradient[i] += f[1] * ei + f[3] * eij
                        gradient[j] += f[2] * ej - f[3] * eij
                        pair = f[6] + 2 * f[3] / rij
                        laplacian[i] += f[4] + 2 * f[1] / ri + pair + 2 * f[7] * (ei @ eij)
                        laplacian[j] += f[5] + 2 * f[2] / rj + pair - 2 * f[8] * (ej @ eij)
    return value, gradient, laplacian
