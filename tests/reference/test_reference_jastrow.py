"""Jastrow functions: derivatives against mpmath and dual numbers, constraints at coalescence, SciPy's splines."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np
import pytest
from jastrows import KINDS, random_term
from scipy.interpolate import BSpline

from qwfx.model import JastrowTerm
from qwfx.reference.jastrow import evaluate, radial_function, three_body_function

TWO_BODIES = [kind for kind in KINDS if kind[1] == "electron-electron"]
THREE_BODIES = [kind for kind in KINDS if kind[1] == "three-body"]


@dataclass(frozen=True)
class Dual:
    """x + x' e + x'' e^2/2 with e^3 = 0: derivatives by the rules of arithmetic alone."""

    x: float
    d: float = 0.0
    dd: float = 0.0

    def __add__(self, other: Any) -> Dual:
        o = other if isinstance(other, Dual) else Dual(float(other))
        return Dual(self.x + o.x, self.d + o.d, self.dd + o.dd)

    def __mul__(self, other: Any) -> Dual:
        o = other if isinstance(other, Dual) else Dual(float(other))
        return Dual(self.x * o.x, self.d * o.x + self.x * o.d, self.dd * o.x + 2 * self.d * o.d + self.x * o.dd)

    def __neg__(self) -> Dual:
        return self * -1.0

    def __sub__(self, other: Any) -> Dual:
        return self + (-other if isinstance(other, Dual) else -float(other))

    def __rsub__(self, other: Any) -> Dual:
        return -self + other

    def __pow__(self, n: int) -> Dual:
        result = Dual(1.0)
        for _ in range(n):
            result = result * self
        return result

    def __truediv__(self, other: Any) -> Dual:
        if not isinstance(other, Dual):
            return self * (1.0 / float(other))
        inverse = 1 / other.x
        return self * Dual(inverse, -other.d * inverse**2, 2 * other.d**2 * inverse**3 - other.dd * inverse**2)

    def __rtruediv__(self, other: Any) -> Dual:
        return Dual(float(other)) / self

    def __ge__(self, other: Any) -> bool:
        return self.x >= float(other)

    def __le__(self, other: Any) -> bool:
        return self.x <= float(other)

    def __abs__(self) -> Dual:
        return self if self.x >= 0 else -self

    __radd__ = __add__
    __rmul__ = __mul__


@pytest.mark.parametrize("form", [form for form, _ in TWO_BODIES])
@pytest.mark.parametrize("seed", range(5))
def test_derivatives_of_two_bodies(form: str, seed: int) -> None:
    """u' and u'' against those of u by mpmath at 50 digits, and by dual numbers."""
    term = random_term(np.random.default_rng(seed), form, "electron-electron", 1)
    for row in range(len(term.members["channel"])):
        u = radial_function(term, row)
        for r in (0.11, 0.77, 1.93, 6.1):
            _, du, d2u = u(r)
            with mpmath.workdps(50):
                one = mpmath.diff(lambda x, u=u: u(x)[0], mpmath.mpf(r), 1)
                two = mpmath.diff(lambda x, u=u: u(x)[0], mpmath.mpf(r), 2)
            scale = abs(float(one)) + abs(float(two)) + 1e-3
            assert abs(du - float(one)) < 1e-13 * scale * 10
            assert abs(d2u - float(two)) < 1e-13 * scale * 100
            dual = u(Dual(r, 1.0))[0]
            assert dual.d == pytest.approx(du, rel=1e-10, abs=1e-12)
            assert dual.dd == pytest.approx(d2u, rel=1e-9, abs=1e-11)


@pytest.mark.parametrize("form", [form for form, _ in THREE_BODIES])
@pytest.mark.parametrize("seed", range(3))
def test_derivatives_of_three_bodies(form: str, seed: int) -> None:
    """All derivatives of f against mpmath."""
    term = random_term(np.random.default_rng(seed), form, "three-body", 1)
    f = three_body_function(term, 0)
    point = (0.61, 0.83, 1.17)
    told = f(*point)
    orders = [(0, 0, 0), (1, 0, 0), (0, 1, 0), (0, 0, 1), (2, 0, 0), (0, 2, 0), (0, 0, 2), (1, 0, 1), (0, 1, 1)]
    with mpmath.workdps(50):
        place = tuple(map(mpmath.mpf, point))
        exact = [float(f(*place)[0] if not any(n) else mpmath.diff(lambda *x: f(*x)[0], place, n)) for n in orders]
    assert np.allclose(told, exact, rtol=1e-12, atol=1e-12 * np.abs(exact).max())


@pytest.mark.parametrize("seed", range(8))
def test_gradient_and_laplacian_of_j(seed: int) -> None:
    """F19 and F27 against differences in mpmath of the sum of values alone, which knows no unit vectors."""
    rng = np.random.default_rng(seed)
    nuclei = np.array([[0.0, 0.0, 0.0], [1.2, 0.3, -0.8]])
    smooth = [kind for kind in KINDS if kind[0] in ("pade", "scaled-polynomial") or kind[1] == "three-body"]
    terms = {f"t{k}": random_term(rng, *smooth[rng.integers(len(smooth))], 2) for k in range(2)}
    n_up, x = 2, rng.normal(size=(1, 3, 3)) * 0.6
    _, gradient, laplacian = evaluate(terms, n_up, nuclei, x)

    def value(places: list[list[Any]]) -> Any:
        def distance(a: Any, b: Any) -> Any:
            return mpmath.sqrt(sum((p - q) ** 2 for p, q in zip(a, b, strict=True)))

        total = mpmath.mpf(0)
        for term in terms.values():
            for row, channel in enumerate(term.members["channel"]):
                spins = {"up": [0, 1], "down": [2]}
                atoms = nuclei[term.members["atoms"]] if "atoms" in term.members else []
                if term.attributes["body"] == "electron-nucleus":
                    for i in spins[str(channel)]:
                        total += sum(radial_function(term, row)(distance(places[i], a))[0] for a in atoms)
                    continue
                pairs = {"up_up": [(0, 1)], "up_down": [(0, 2), (1, 2)], "down_down": []}[str(channel)]
                for i, j in pairs:
                    rij = distance(places[i], places[j])
                    if term.attributes["body"] == "electron-electron":
                        total += radial_function(term, row)(rij)[0]
                    else:
                        f = three_body_function(term, row)
                        total += sum(f(distance(places[i], a), distance(places[j], a), rij)[0] for a in atoms)
        return total

    with mpmath.workdps(50):
        places = [[mpmath.mpf(float(c)) for c in e] for e in x[0]]
        h = mpmath.mpf(10) ** -12
        middle = value(places)
        for i in range(3):
            curvature = mpmath.mpf(0)
            for k in range(3):
                there = []
                for step in (-1, 1):
                    moved = [list(e) for e in places]
                    moved[i][k] += step * h
                    there.append(value(moved))
                assert gradient[0, i, k] == pytest.approx(float((there[1] - there[0]) / (2 * h)), rel=1e-11, abs=1e-11)
                curvature += (there[0] - 2 * middle + there[1]) / h**2
            assert laplacian[0, i] == pytest.approx(float(curvature), rel=1e-9, abs=1e-9)


def test_splines_are_those_of_scipy() -> None:
    rng = np.random.default_rng(1)
    L, K = 4.0, 7
    c = rng.normal(size=K)
    term = JastrowTerm("bspline", {"body": "electron-electron"}, {
        "channel": np.array(["up_down"]), "cutoff": np.array([L]), "coefficients": c[None]})  # fmt: skip
    h = L / K
    # F25 in SciPy's terms: the knots of coefficient k are h (k - 3) to h (k + 1), the three that reach beyond L are 0.
    told = BSpline(h * np.arange(-3, K + 4), np.append(c, np.zeros(3)), 3)
    for r in (0.0, 0.2, 1.7, 3.9999, 4.0, 5.0):
        mine = radial_function(term, 0)(r)
        expected = [float(told(r, nu)) if r < L else 0.0 for nu in range(3)]
        assert np.allclose(mine, expected, rtol=1e-12, atol=1e-12)


def test_constraints_of_three_bodies() -> None:
    """gamma that leaves both cusps alone (FORMAT.md after F22; Drummond, Towler and Needs 2004): no slope there.

    N = 2, C = 3: the conditions are linear, so that their null space is all such gamma.
    """
    N, C, L = 3, 3, 3.5
    index = {lmn: k for k, lmn in enumerate(np.ndindex(N, N, N))}
    rows = []
    for k in range(2 * N - 1):
        row = np.zeros(len(index))
        for l, m in np.ndindex(N, N):
            if l + m == k:
                row[index[l, m, 1]] += 1
        rows.append(row)
        row = np.zeros(len(index))
        for m, n in np.ndindex(N, N):
            if m + n == k:
                row[index[0, m, n]] += C
                row[index[1, m, n]] -= L
        rows.append(row)
    for l, m, n in np.ndindex(N, N, N):
        row = np.zeros(len(index))
        row[index[l, m, n]] += 1
        row[index[m, l, n]] -= 1
        rows.append(row)
    _, s, vh = np.linalg.svd(np.array(rows))
    null = vh[int((s > 1e-10).sum()) :]
    assert len(null) > 3
    gamma = (np.random.default_rng(2).normal(size=len(null)) @ null).reshape(1, N, N, N)
    term = JastrowTerm("cutoff-polynomial", {"body": "three-body", "smoothness": C}, {
        "channel": np.array(["up_down"]), "atoms": np.array([0]), "cutoff": np.array([L]), "coefficients": gamma,
    })  # fmt: skip
    f = three_body_function(term, 0)
    for r in (0.4, 1.1, 2.7):
        at_electron, at_nucleus = f(r, r, 0.0), f(0.0, r, r)
        assert abs(at_electron[3]) < 1e-12 * L**6  # df/dr_ij where the electrons meet
        assert abs(at_nucleus[1]) < 1e-12 * L**6  # df/dr_i where an electron is at the nucleus, r_ij = r_j
        assert abs(at_electron[0]) > 1e-3
