"""Solid harmonics against the tables of Schlegel and Frisch, Int. J. Quantum Chem. 54, 83 (1995), and identities."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx.reference.harmonics import evaluate_monomials, mean_over_sphere, monomial_powers, solid_from_monomial
from qwfx.reference.norms import gaussian_norm, monomial_norm

# Polynomials without normalisation, and N^2 pi, for each (l, m).
POLYNOMIALS: dict[tuple[int, int], tuple[dict[tuple[int, int, int], float], Fraction]] = {
    (0, 0): ({(0, 0, 0): 1}, Fraction(1, 4)),
    (1, -1): ({(0, 1, 0): 1}, Fraction(3, 4)),
    (1, 0): ({(0, 0, 1): 1}, Fraction(3, 4)),
    (1, 1): ({(1, 0, 0): 1}, Fraction(3, 4)),
    (2, -2): ({(1, 1, 0): 6}, Fraction(5, 48)),
    (2, -1): ({(0, 1, 1): 3}, Fraction(5, 12)),
    (2, 0): ({(0, 0, 2): 1, (2, 0, 0): -0.5, (0, 2, 0): -0.5}, Fraction(5, 4)),
    (2, 1): ({(1, 0, 1): 3}, Fraction(5, 12)),
    (2, 2): ({(2, 0, 0): 3, (0, 2, 0): -3}, Fraction(5, 48)),
    (3, -3): ({(2, 1, 0): 45, (0, 3, 0): -15}, Fraction(7, 1440)),
    (3, -2): ({(1, 1, 1): 30}, Fraction(7, 240)),
    (3, -1): ({(0, 1, 2): 6, (2, 1, 0): -1.5, (0, 3, 0): -1.5}, Fraction(7, 24)),
    (3, 0): ({(0, 0, 3): 1, (2, 0, 1): -1.5, (0, 2, 1): -1.5}, Fraction(7, 4)),
    (3, 1): ({(1, 0, 2): 6, (3, 0, 0): -1.5, (1, 2, 0): -1.5}, Fraction(7, 24)),
    (3, 2): ({(2, 0, 1): 15, (0, 2, 1): -15}, Fraction(7, 240)),
    (3, 3): ({(3, 0, 0): 15, (1, 2, 0): -45}, Fraction(7, 1440)),
    (4, 0): (
        {(4, 0, 0): 0.375, (2, 2, 0): 0.75, (0, 4, 0): 0.375, (2, 0, 2): -3, (0, 2, 2): -3, (0, 0, 4): 1},
        Fraction(9, 4),
    ),
}  # fmt: skip

r = math.sqrt
# Coefficients between individually normalised Cartesian and solid functions (the tables of the paper).
NORMALISED: dict[tuple[int, int], dict[str, float]] = {
    (2, 0): {"200": -0.5, "020": -0.5, "002": 1},
    (2, 2): {"200": r(3) / 2, "020": -r(3) / 2},
    (2, 1): {"101": 1},
    (2, -1): {"011": 1},
    (2, -2): {"110": 1},
    (3, 0): {"201": -3 * r(5) / 10, "021": -3 * r(5) / 10, "003": 1},
    (3, 1): {"300": -r(6) / 4, "120": -r(30) / 20, "102": r(30) / 5},
    (3, -1): {"210": -r(30) / 20, "030": -r(6) / 4, "012": r(30) / 5},
    (3, 2): {"201": r(3) / 2, "021": -r(3) / 2},
    (3, -2): {"111": 1},
    (3, 3): {"300": r(10) / 4, "120": -3 * r(2) / 4},
    (3, -3): {"210": 3 * r(2) / 4, "030": -r(10) / 4},
    (4, 0): {
        "400": 3 / 8, "040": 3 / 8, "220": 3 * r(105) / 140, "202": -3 * r(105) / 35, "022": -3 * r(105) / 35, "004": 1,
    },
    (4, 1): {"301": -3 * r(70) / 28, "121": -3 * r(14) / 28, "103": r(70) / 7},
    (4, -1): {"031": -3 * r(70) / 28, "211": -3 * r(14) / 28, "013": r(70) / 7},
    (4, 2): {"400": -r(5) / 4, "040": r(5) / 4, "202": 3 * r(21) / 14, "022": -3 * r(21) / 14},
    (4, -2): {"310": -r(35) / 14, "130": -r(35) / 14, "112": 3 * r(7) / 7},
    (4, 3): {"301": r(10) / 4, "121": -3 * r(2) / 4},
    (4, -3): {"211": 3 * r(2) / 4, "031": -r(10) / 4},
    (4, 4): {"400": r(35) / 8, "040": r(35) / 8, "220": -3 * r(3) / 4},
    (4, -4): {"310": r(5) / 2, "130": -r(5) / 2},
}  # fmt: skip


def test_order_of_monomials() -> None:
    assert monomial_powers(0) == ((0, 0, 0),)
    assert monomial_powers(1) == ((1, 0, 0), (0, 1, 0), (0, 0, 1))
    assert monomial_powers(2) == ((2, 0, 0), (1, 1, 0), (1, 0, 1), (0, 2, 0), (0, 1, 1), (0, 0, 2))
    assert len(monomial_powers(6)) == 28


@pytest.mark.parametrize(("l", "m"), POLYNOMIALS)
def test_polynomials_of_the_paper(l: int, m: int) -> None:
    polynomial, square = POLYNOMIALS[l, m]
    wanted = [math.sqrt(square / math.pi) * polynomial.get(powers, 0) for powers in monomial_powers(l)]
    np.testing.assert_allclose(solid_from_monomial(l)[m + l], wanted, rtol=1e-15, atol=0)


@pytest.mark.parametrize(("l", "m"), NORMALISED)
def test_coefficients_of_the_paper(l: int, m: int) -> None:
    exponent = 0.83
    wanted = [NORMALISED[l, m].get("".join(map(str, powers)), 0.0) for powers in monomial_powers(l)]
    ratio = [gaussian_norm(l, exponent) / monomial_norm(*powers, exponent) for powers in monomial_powers(l)]
    np.testing.assert_allclose(solid_from_monomial(l)[m + l] * ratio, wanted, rtol=3e-15, atol=1e-16)


@pytest.mark.parametrize("l", range(10))
def test_orthonormal_on_the_sphere_and_harmonic(l: int) -> None:
    matrix, powers = solid_from_monomial(l), monomial_powers(l)
    means = [[mean_over_sphere(*(a + b for a, b in zip(p, q, strict=True))) for q in powers] for p in powers]
    gram = 4 * math.pi * matrix @ np.array(means) @ matrix.T
    np.testing.assert_allclose(gram, np.eye(2 * l + 1), atol=1e-12)
    points = np.random.default_rng(l).normal(size=(7, 3))
    terms = evaluate_monomials(l, points)[4]
    laplacian = terms @ matrix.T
    assert np.all(np.abs(laplacian) <= 1e-13 * (1.0 + np.abs(terms) @ np.abs(matrix.T)))


@pytest.mark.parametrize("l", range(7))
def test_same_as_the_matrices_of_pyscf(l: int) -> None:
    from pyscf.gto import cart2sph

    if l < 2:  # PySCF keeps the angular factor of s and p elsewhere, and orders p x, y, z
        factor = math.sqrt((2 * l + 1) / (4 * math.pi))
        wanted = factor * np.eye(2 * l + 1)[[1, 2, 0] if l else [0]]
    else:
        wanted = cart2sph(l).T
    np.testing.assert_allclose(solid_from_monomial(l), wanted, rtol=1e-13, atol=1e-14)


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 8), st.tuples(*(st.floats(-1, 1) for _ in range(3))).filter(lambda v: np.hypot(*v[:2]) > 0.1))
def test_addition_theorem(l: int, point: tuple[float, float, float]) -> None:
    """``sum_m Y_lm^2 = (2l+1)/(4 pi)`` in each direction."""
    x = np.array([point]) / np.linalg.norm(point)
    values = evaluate_monomials(l, x)[0] @ solid_from_monomial(l).T
    np.testing.assert_allclose(np.sum(values**2), (2 * l + 1) / (4 * math.pi), rtol=1e-11)


def test_matrix_cannot_be_changed_by_accident() -> None:
    with pytest.raises(ValueError, match="read-only"):
        solid_from_monomial(2)[0, 0] = 1.0
