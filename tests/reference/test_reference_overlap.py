"""Overlap integrals against closed forms, quadrature in mpmath, and the Gaussian transform of Slater functions."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from reference_cases import ShellData, make_basis

from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.model import Basis
from qwfx.reference import evaluate_functions, overlap
from qwfx.reference.norms import (
    gaussian_norm,
    monomial_norm,
    radial_norm,
    self_overlaps,
    slater_monomial_norm,
    slater_norm,
)


def slater_pair(one: tuple[int, int, float], other: tuple[int, int, float]) -> Basis:
    """Normalised Slater shells (n, l, zeta) on atoms 0 and 1."""
    shells = [
        ShellData(center, l, False, ((zeta, slater_norm(n, zeta), n - 1 - l),))
        for center, (n, l, zeta) in enumerate((one, other))
    ]
    return make_basis("slater", shells)


def along_z(distance: float) -> NDArray[np.float64]:
    return np.array([[0.0, 0.0, 0.0], [0.0, 0.0, distance]])


# Equal exponents, p = zeta R; R. S. Mulliken, C. A. Rieke, D. Orloff, H. Orloff, J. Chem. Phys. 17, 1248 (1949).
CLOSED_FORMS: list[tuple[str, int, int, int, Callable[[float], float]]] = [
    ("1s-1s", 1, 0, 0, lambda p: 1 + p + p**2 / 3),
    ("2s-2s", 2, 0, 0, lambda p: 1 + p + 4 * p**2 / 9 + p**3 / 9 + p**4 / 45),
    ("2p sigma", 2, 1, 1, lambda p: 1 + p + p**2 / 5 - 2 * p**3 / 15 - p**4 / 15),
    ("2p pi", 2, 1, 0, lambda p: 1 + p + 2 * p**2 / 5 + p**3 / 15),
]


@pytest.mark.parametrize(("name", "n", "l", "component", "polynomial"), CLOSED_FORMS, ids=[c[0] for c in CLOSED_FORMS])
@pytest.mark.parametrize("distance", [1e-8, 0.01, 0.7, 1.4, 5.0, 20.0, 60.0])
def test_slater_closed_forms(
    name: str, n: int, l: int, component: int, polynomial: Callable[[float], float], distance: float
) -> None:
    zeta = 1.3
    block = overlap(slater_pair((n, l, zeta), (n, l, zeta)), along_z(distance))
    p = zeta * distance
    wanted = math.exp(-p) * polynomial(p)
    found = block[component, 2 * l + 1 + component]
    assert abs(found - wanted) < 1e-14 * math.exp(-p) * (1 + p**4)


def test_slater_1s_of_different_exponents() -> None:
    """In momentum space: ``exp(-a r)`` has the transform ``8 pi a / (k^2 + a^2)^2``; one integral is left."""
    a, b, distance = 0.8, 2.9, 1.7
    block = overlap(slater_pair((1, 0, a), (1, 0, b)), along_z(distance))

    def integrand(k: Any) -> Any:
        return k * mpmath.sin(k * distance) / ((k * k + a * a) ** 2 * (k * k + b * b) ** 2)

    with mpmath.workdps(20):
        integral = mpmath.quadosc(integrand, [0, mpmath.inf], omega=distance)
        wanted = 32 * (a * b) ** 2.5 / (mpmath.pi * distance) * integral
    assert abs(block[0, 1] - float(wanted)) < 1e-14


@pytest.mark.parametrize(
    ("n", "a", "b", "distance"),
    [
        (1, 1.0, 2.0, 1.5), (2, 60.0, 0.3, 8.0), (4, 60.0, 0.3, 8.0), (7, 60.0, 0.3, 8.0), (7, 90.0, 2.0, 25.0),
        (6, 0.4, 80.0, 5.0),
    ],
)  # fmt: skip
def test_slater_s_functions_of_very_different_extent(n: int, a: float, b: float, distance: float) -> None:
    """Right to 2e-14 of itself, also where the integrand sits at one end of its range and the value is 1e-23.

    The mean of ``exp(-b |r - R|)`` over a sphere about the first centre is elementary; one radial integral is left.
    """
    with mpmath.workdps(60):
        A, B, R = mpmath.mpf(a), mpmath.mpf(b), mpmath.mpf(distance)

        def primitive(s: Any) -> Any:
            return -(B * s + 1) / B**2 * mpmath.exp(-B * s)

        def integrand(r: Any) -> Any:
            return r**n * mpmath.exp(-A * r) * (primitive(R + r) - primitive(abs(R - r))) / (2 * R)

        cuts = [k / A for k in (0, 1, 4, 10, 20, 40, 80, 160)] + [R]
        integral = mpmath.quad(integrand, [*sorted(c for c in cuts if c <= R), R + 20 / B, R + 120 / B])
        norm = mpmath.sqrt((2 * A) ** (2 * n + 1) / mpmath.factorial(2 * n)) * mpmath.sqrt((2 * B) ** 3 / 2)
        wanted = float(norm * integral)
    found = overlap(slater_pair((n, 0, a), (1, 0, b)), along_z(distance))[0, 1]
    assert abs(found / wanted - 1) < 2e-14


def azimuthal(l: int, m: int) -> Callable[[Any, Any, Any], Any]:
    """Angular part without the azimuth, ``r^l Theta(theta)`` with ``int Theta^2 sin theta dtheta = 1``, by hand."""
    forms: dict[tuple[int, int], Callable[[Any, Any, Any], Any]] = {
        (0, 0): lambda z, s, r: mpmath.sqrt(0.5),
        (1, 0): lambda z, s, r: mpmath.sqrt(1.5) * z,
        (1, 1): lambda z, s, r: mpmath.sqrt(0.75) * s,
        (2, 0): lambda z, s, r: mpmath.sqrt(mpmath.mpf(5) / 8) * (3 * z * z - r * r),
        (2, 1): lambda z, s, r: mpmath.sqrt(mpmath.mpf(15) / 4) * z * s,
        (2, 2): lambda z, s, r: mpmath.sqrt(mpmath.mpf(15) / 16) * s * s,
        (3, 1): lambda z, s, r: mpmath.sqrt(mpmath.mpf(21) / 32) * s * (5 * z * z - r * r),
    }
    return forms[l, m]


QUADRATURES = [
    ((2, 1, 1.6), (2, 1, 0.9), 1, 1.5),
    ((3, 2, 2.4), (1, 0, 1.1), 0, 2.2),
    ((3, 2, 1.3), (2, 1, 2.7), 1, 0.8),
    ((3, 2, 1.3), (4, 2, 1.9), 2, 3.1),
    ((4, 3, 2.0), (3, 1, 0.7), 1, 2.5),
    ((1, 0, 9.5), (3, 0, 0.6), 0, 6.0),
]


@pytest.mark.parametrize(("one", "other", "m", "distance"), QUADRATURES)
def test_slater_against_quadrature_in_mpmath(
    one: tuple[int, int, float], other: tuple[int, int, float], m: int, distance: float
) -> None:
    """Doubly adaptive quadrature in prolate spheroidal coordinates, functions written out by hand."""
    block = overlap(slater_pair(one, other), along_z(distance))
    found = block[one[1] + m, 2 * one[1] + 1 + other[1] + m]
    with mpmath.workdps(20):
        half = mpmath.mpf(distance) / 2

        def function(shell: tuple[int, int, float], z: Any, s: Any, r: Any) -> Any:
            n, l, zeta = shell
            norm = mpmath.sqrt((2 * mpmath.mpf(zeta)) ** (2 * n + 1) / mpmath.factorial(2 * n))
            return norm * r ** (n - 1 - l) * azimuthal(l, m)(z, s, r) * mpmath.exp(-zeta * r)

        def integrand(t: Any, eta: Any) -> Any:
            xi = 1 + t
            r, r_other = half * (xi + eta), half * (xi - eta)
            s = half * mpmath.sqrt(t * (xi + 1) * (1 - eta) * (1 + eta))
            volume = half**3 * (xi + eta) * (xi - eta)
            z = half * (1 + xi * eta)
            return volume * function(one, z, s, r) * function(other, z - distance, s, r_other)

        reach = 90 / ((one[2] + other[2]) * half)
        edges = [0, reach / 30, reach / 10, reach / 3, reach]
        wanted = mpmath.quad(integrand, edges, [-1, -0.5, 0.5, 1], method="gauss-legendre", maxdegree=4)
    assert abs(found - float(wanted)) < 1e-13


def as_gaussians(zeta: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Exponents and coefficients of ``exp(-zeta r)`` as a sum of Gaussians, to about 1e-13 in overlap integrals.

    ``exp(-zeta r) = zeta / (2 sqrt pi) int_0^inf s^(-3/2) exp(-zeta^2/(4 s) - s r^2) ds`` (I. Shavitt and M. Karplus,
    J. Chem. Phys. 43, 398 (1965)), by the trapezoidal rule in ln s.
    """
    step = 0.12
    u = np.arange(math.log(zeta**2 / 160), 24.0, step)
    s = np.exp(u)
    return s, step * zeta / (2 * math.sqrt(math.pi)) * s**-0.5 * np.exp(-(zeta**2) / (4 * s))


@pytest.mark.parametrize(("l", "other_l"), [(0, 1), (1, 2), (2, 2), (3, 1), (4, 3)])
@pytest.mark.parametrize("monomial", [False, True], ids=["solid", "monomial"])
def test_slater_in_any_direction_against_their_gaussian_transform(l: int, other_l: int, monomial: bool) -> None:
    """Whole blocks of shells, powers 0 and 2: what PySCF confirms for Gaussians then holds for Slater functions."""
    positions = np.array([[0.3, -0.2, 0.1], [-0.9, 0.6, 1.2]])
    slater, gaussian = [], []
    for center, shell_l, zeta, power in ((0, l, 1.4, 0), (1, other_l, 2.3, 2)):
        norm = slater_norm(shell_l + power + 1, zeta)
        slater.append(ShellData(center, shell_l, monomial, ((zeta, norm, power),)))
        exponents, coefficients = as_gaussians(zeta)
        primitives = tuple((a, c * norm, power) for a, c in zip(exponents, coefficients, strict=True))
        gaussian.append(ShellData(center, shell_l, monomial, primitives))
    found = overlap(make_basis("slater", slater), positions)
    wanted = overlap(make_basis("gaussian", gaussian), positions)
    size = (l + 1) * (l + 2) // 2 if monomial else 2 * l + 1
    np.testing.assert_allclose(found[:size, size:], wanted[:size, size:], rtol=0, atol=2e-12 * np.abs(wanted).max())


def test_gaussian_handbook_values() -> None:
    """Normalised s, p functions of exponents 0.5 and 0.8 at 1.2 bohr (Szabo and Ostlund, Appendix A, closed form)."""
    shells = [
        ShellData(0, 0, False, ((0.5, gaussian_norm(0, 0.5), 0),)),
        ShellData(1, 0, False, ((0.8, gaussian_norm(0, 0.8), 0),)),
        ShellData(0, 1, False, ((0.5, gaussian_norm(1, 0.5), 0),)),
        ShellData(1, 1, False, ((0.8, gaussian_norm(1, 0.8), 0),)),
    ]
    found = overlap(make_basis("gaussian", shells), along_z(1.2))
    assert abs(found[0, 1] - 0.616238880350597926) < 1e-15
    np.testing.assert_allclose(
        [found[0, 6], found[3, 1], found[4, 7], found[3, 6]],
        [-0.50878229, 0.64356434, 0.59960568, 0.06826280],
        atol=6e-9,
    )


def test_even_powers_and_contractions_against_a_grid() -> None:
    """Gauss-Legendre products on a box: crude, but independent of every formula."""
    shells = [
        ShellData(0, 1, False, ((0.9, 1.0, 2), (1.5, -0.6, 0))),
        ShellData(1, 2, True, ((1.2, 0.7, 4), (0.8, 0.2, 2))),
    ]
    basis, positions = make_basis("gaussian", shells), np.array([[0.2, 0.1, -0.3], [-0.4, 0.5, 0.4]])
    n, box = 66, 6.0
    x, w = np.polynomial.legendre.leggauss(n)
    x, w = box * x, box * w
    found = np.zeros((9, 9))
    for a, wa in zip(x, w, strict=True):
        points = np.stack([np.full(n * n, a), np.repeat(x, n), np.tile(x, n)], axis=1)
        values = evaluate_functions(basis, positions, points, derivatives=0)[0]
        found += wa * values.T @ (np.outer(w, w).reshape(-1, 1) * values)
    wanted = overlap(basis, positions)
    np.testing.assert_allclose(found, wanted, rtol=0, atol=1e-12 * np.abs(wanted).max())


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
def test_contractions_are_sums_of_their_primitives(radial: Any) -> None:
    primitives = ((0.9, 1.0, 2), (1.5, -0.6, 0), (4.0, 0.3, 2))
    others = ((0.7, 0.5, 0), (2.0, 1.1, 4))
    positions = np.array([[0.2, 0.1, -0.3], [-0.4, 0.5, 1.4]])
    whole = overlap(make_basis(radial, [ShellData(0, 1, False, primitives), ShellData(1, 2, False, others)]), positions)
    parts = [ShellData(0, 1, False, (p,)) for p in primitives] + [ShellData(1, 2, False, (p,)) for p in others]
    single = overlap(make_basis(radial, parts), positions)
    gather = np.zeros((8, single.shape[0]))
    gather[:3, :9] = np.tile(np.eye(3), 3)
    gather[3:, 9:] = np.tile(np.eye(5), 2)
    np.testing.assert_allclose(whole, gather @ single @ gather.T, rtol=0, atol=1e-14 * np.abs(whole).max())


def test_norms_give_unit_self_overlap() -> None:
    solid = [ShellData(0, l, False, ((a, gaussian_norm(l, a), 0),)) for l in range(7) for a in (0.3, 4.0)]
    np.testing.assert_allclose(self_overlaps(make_basis("gaussian", solid)), 1.0, rtol=1e-13)
    kinds = [(n, l, a) for n in range(1, 8) for l, a in ((n - 1, 2.5), (0, 0.4))]
    slater = [ShellData(0, l, False, ((a, slater_norm(n, a), n - 1 - l),)) for n, l, a in kinds]
    np.testing.assert_allclose(self_overlaps(make_basis("slater", slater)), 1.0, rtol=1e-13)
    for powers, place in (((3, 0, 0), 0), ((1, 1, 1), 4), ((0, 2, 1), 7)):
        gauss = make_basis("gaussian", [ShellData(0, 3, True, ((1.7, monomial_norm(*powers, 1.7), 0),))])
        assert abs(self_overlaps(gauss)[place] - 1) < 1e-14
        slat = make_basis("slater", [ShellData(0, 3, True, ((1.7, slater_monomial_norm(*powers, 2, 1.7), 2),))])
        assert abs(self_overlaps(slat)[place] - 1) < 1e-14
    both = [gaussian_norm(2, 0.5), gaussian_norm(2, 2.0)]
    np.testing.assert_allclose(radial_norm(2, np.array([0.5, 2.0]), "gaussian"), both, rtol=1e-15)


@settings(max_examples=25, deadline=None)
@given(
    st.integers(0, 3), st.integers(0, 3), st.sampled_from(["gaussian", "slater"]),
    st.tuples(*(st.floats(-3, 3) for _ in range(3))), st.integers(0, 2**32 - 1),
)  # fmt: skip
def test_rotations_of_the_pair(l: int, other_l: int, radial: Any, separation: tuple[float, ...], seed: int) -> None:
    """Turning the two centres turns the block of two shells: ``S(Q d) = D S(d) D'^T``, D from values alone."""
    rng = np.random.default_rng(seed)
    turn, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    shells = [ShellData(0, l, False, ((1.1, 1.0, 0),)), ShellData(1, other_l, False, ((0.6, 1.0, 0),))]
    basis = make_basis(radial, shells)
    points = rng.normal(size=(40, 3))

    def block(d: NDArray[np.float64]) -> NDArray[np.float64]:
        return overlap(basis, np.array([np.zeros(3), d]))[: 2 * l + 1, 2 * l + 1 :]

    def turned(shell: ShellData) -> NDArray[np.float64]:
        alone = make_basis(radial, [ShellData(0, shell.l, False, shell.primitives)])
        origin = np.zeros((1, 3))
        before = evaluate_functions(alone, origin, points, derivatives=0)[0]
        after = evaluate_functions(alone, origin, points @ turn.T, derivatives=0)[0]
        return np.asarray(np.linalg.lstsq(before, after, rcond=None)[0].T)

    d = np.array(separation)
    wanted = turned(shells[0]) @ block(d) @ turned(shells[1]).T
    np.testing.assert_allclose(block(turn @ d), wanted, rtol=0, atol=1e-11 * max(1.0, np.abs(wanted).max()))


def test_symmetric_and_positive() -> None:
    shells = [ShellData(c, l, False, ((1.0 + c, slater_norm(l + 1, 1.0 + c), 0),)) for c in range(3) for l in range(4)]
    matrix = overlap(make_basis("slater", shells), np.array([[0, 0, 0], [1.5, 0, 0], [0, 1.0, 2.0]]))
    assert np.array_equal(matrix, matrix.T)
    assert np.linalg.eigvalsh(matrix)[0] > 1e-3
    np.testing.assert_allclose(np.diag(matrix), 1.0, rtol=1e-14)


@pytest.mark.parametrize(("radial", "power"), [("gaussian", 1), ("gaussian", -2), ("slater", -1)])
def test_powers_without_a_formula_are_refused(radial: Any, power: int) -> None:
    shells = [ShellData(0, 2, False, ((1.0, 1.0, power),)), ShellData(1, 0, False, ((1.0, 1.0, 0),))]
    with pytest.raises(UnsupportedError, match=f"the power {power};"):
        overlap(make_basis(radial, shells), along_z(1.0))
    one_center = overlap(make_basis(radial, shells[:1]), along_z(1.0))
    assert np.all(np.diag(one_center) > 0)


def test_bad_arguments() -> None:
    basis = make_basis("gaussian", [ShellData(3, 0, False, ((1.0, 1.0, 0),))])
    with pytest.raises(EvaluationError, match="sits on atom 3"):
        overlap(basis, along_z(1.0))
    with pytest.raises(EvaluationError, match="positions"):
        overlap(basis, np.zeros(3))


def test_progress_and_nothing_at_all() -> None:
    seen: list[float] = []
    overlap(slater_pair((1, 0, 1.0), (2, 1, 1.0)), along_z(1.0), progress=lambda _, fraction: seen.append(fraction))
    assert seen[-1] == 1.0
    assert overlap(make_basis("gaussian", []), np.zeros((0, 3))).shape == (0, 0)
