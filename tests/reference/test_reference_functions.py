"""Behaviour of the reference evaluator: at the centres, under rotation, orbitals, shapes, bad arguments."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference_cases import ShellData, make_basis

from qwfx.errors import EvaluationError
from qwfx.reference import evaluate_functions, evaluate_orbitals

ORIGIN = np.zeros((1, 3))
S = 1 / math.sqrt(4 * math.pi)
P = math.sqrt(3 / (4 * math.pi))
NONE = [0.0, 0.0, 0.0]

# radial, l, monomial, primitives, component, expected (value, gradient, Laplacian) at the centre, by hand.
AT_CENTER: list[tuple[Any, int, bool, tuple[tuple[float, float, int], ...], int, list[float]]] = [
    ("gaussian", 0, False, ((0.7, 2.0, 0),), 0, [2 * S, *NONE, 2 * S * -6 * 0.7]),
    ("gaussian", 0, False, ((0.7, 2.0, 2),), 0, [0.0, *NONE, 2 * S * 6]),
    ("gaussian", 1, False, ((0.7, 2.0, 0),), 2, [0.0, 2 * P, 0.0, 0.0, 0.0]),
    ("gaussian", 2, True, ((0.7, 2.0, 0),), 0, [0.0, *NONE, 2.0 * 2]),
    ("gaussian", 2, True, ((0.7, 2.0, 0),), 1, [0.0, *NONE, 0.0]),
    ("gaussian", 2, False, ((0.7, 2.0, 0),), 2, [0.0, *NONE, 0.0]),
    ("slater", 0, False, ((1.3, 2.0, 0),), 0, [2 * S, *NONE, -math.inf]),
    ("slater", 0, False, ((1.3, -2.0, 0),), 0, [-2 * S, *NONE, math.inf]),
    ("slater", 0, False, ((1.3, 2.0, 1),), 0, [0.0, *NONE, math.inf]),
    ("slater", 0, False, ((1.3, 2.0, 2),), 0, [0.0, *NONE, 2 * S * 6]),
    # exp(-ar) (1 + ar): no cusp, and -3 a^2 as Laplacian; the divergences cancel exactly.
    ("slater", 0, False, ((2.0, 1.0, 0), (2.0, 2.0, 1)), 0, [S, *NONE, -3 * 4.0 * S]),
    ("slater", 1, True, ((1.3, 2.0, 0),), 0, [0.0, 2.0, 0.0, 0.0, 0.0]),
    ("slater", 1, True, ((1.3, 2.0, 1),), 0, [0.0, *NONE, 0.0]),
    ("slater", 2, True, ((1.3, 2.0, 0),), 3, [0.0, *NONE, 2.0 * 2]),
    ("slater", 4, False, ((1.3, 2.0, 0),), 4, [0.0, *NONE, 0.0]),
    ("slater", 1, False, ((1.3, 2.0, -1),), 1, [0.0, 0.0, 0.0, math.inf, 0.0]),
    ("slater", 4, False, ((1.3, 2.0, -3),), 4, [0.0, *NONE, 0.0]),
    # exp(-ar)/r: its Laplacian off the centre is a^2 exp(-ar)/r.
    ("slater", 0, False, ((1.3, 2.0, -1),), 0, [math.inf, *NONE, math.inf]),
]  # fmt: skip


@pytest.mark.parametrize(("radial", "l", "monomial", "primitives", "component", "wanted"), AT_CENTER)
def test_at_the_center(
    radial: Any, l: int, monomial: bool, primitives: Any, component: int, wanted: list[float]
) -> None:
    basis = make_basis(radial, [ShellData(0, l, monomial, primitives)])
    found = evaluate_functions(basis, ORIGIN + 0.25, ORIGIN + 0.25)[:, 0, component]
    np.testing.assert_allclose(found, wanted, rtol=1e-15, atol=0)


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
@pytest.mark.parametrize(
    ("l", "monomial", "power"), [(0, False, 0), (1, False, 0), (2, True, 0), (0, False, 2), (3, True, 1)]
)
def test_at_the_center_is_the_mean_over_a_small_sphere(radial: Any, l: int, monomial: bool, power: int) -> None:
    basis = make_basis(radial, [ShellData(0, l, monomial, ((1.2, 0.7, power), (0.5, 0.2, power + 1)))])
    corners = np.array([[x, y, z] for x in (1, -1) for y in (1, -1) for z in (1, -1)]) / math.sqrt(3)
    axes = np.concatenate([np.eye(3), -np.eye(3)])
    # Degree 5 rule on the sphere (A. H. Stroud): weights 1/15 on the axes, 3/40 on the corners of the cube.
    nodes, weights = np.concatenate([axes, corners]), np.array([1 / 15] * 6 + [3 / 40] * 8)
    at_center = evaluate_functions(basis, ORIGIN, ORIGIN)[:, 0]
    near = np.einsum("n,knf->kf", weights, evaluate_functions(basis, ORIGIN, 1e-7 * nodes))
    finite = np.isfinite(at_center)
    np.testing.assert_allclose(at_center[finite], near[finite], atol=2e-6)
    assert np.all(np.abs(near[~finite]) > 1e5)
    np.testing.assert_array_equal(np.sign(at_center[~finite]), np.sign(near[~finite]))


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
def test_close_to_the_center_and_far_away(radial: Any) -> None:
    shells = [ShellData(0, l, False, ((1.2, 1.0, 0),)) for l in range(4)]
    basis = make_basis(radial, shells)
    for distance in (1e-150, 1e-30, 1e-8, 60.0, 1e4):
        found = evaluate_functions(basis, ORIGIN, np.array([[0.48, 0.6, 0.64]]) * distance)
        assert np.all(np.isfinite(found))
    assert np.all(found == 0.0)


@settings(max_examples=40, deadline=None)
@given(
    st.integers(0, 6), st.booleans(), st.sampled_from(["gaussian", "slater"]), st.integers(0, 3), st.integers(0, 10**6)
)  # fmt: skip
def test_a_shell_turns_within_itself(l: int, monomial: bool, radial: Any, power: int, seed: int) -> None:
    """``chi(Q r) = D chi(r)``, ``grad chi(Q r) = Q D grad chi(r)``, the Laplacian as the value; D^T D = 1 (solid)."""
    rng = np.random.default_rng(seed)
    turn, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    basis = make_basis(radial, [ShellData(0, l, monomial, ((0.8, 1.0, power), (0.3, -0.5, 0)))])
    points = rng.normal(size=(60, 3))
    points *= (rng.uniform(0.8, 2.0, 60) / np.linalg.norm(points, axis=1))[:, None]
    before, after = evaluate_functions(basis, ORIGIN, points), evaluate_functions(basis, ORIGIN, points @ turn.T)
    scale = np.abs(before).max()
    usable = np.abs(before[0]).max(axis=1) > 1e-3 * np.abs(before[0]).max()  # away from zeros of R
    D = np.linalg.lstsq(before[0][usable], after[0][usable], rcond=None)[0].T
    if not monomial:
        np.testing.assert_allclose(D @ D.T, np.eye(2 * l + 1), atol=1e-9)
    np.testing.assert_allclose(after[0], before[0] @ D.T, rtol=0, atol=1e-9 * scale)
    np.testing.assert_allclose(after[4], before[4] @ D.T, rtol=0, atol=1e-9 * scale)
    turned = np.einsum("xy,ynf,gf->xng", turn, before[1:4], D)
    np.testing.assert_allclose(after[1:4], turned, rtol=0, atol=1e-9 * scale)


def sample() -> tuple[Any, np.ndarray[Any, Any], np.ndarray[Any, Any]]:
    shells = [ShellData(0, 0, False, ((1.0, 1.0, 0),)), ShellData(1, 2, True, ((0.6, 0.4, 0),)),
              ShellData(1, 1, False, ((0.9, 0.3, 0), (0.2, 0.1, 0)))]  # fmt: skip
    positions = np.array([[0.0, 0.1, 0.2], [1.0, -0.5, 0.3]])
    return make_basis("slater", shells, powers=False), positions, np.random.default_rng(5).normal(size=(11, 3))


def test_fewer_derivatives_are_the_first_rows() -> None:
    basis, positions, points = sample()
    full = evaluate_functions(basis, positions, points)
    assert full.shape == (5, 11, 10)
    for derivatives, rows in ((0, 1), (1, 4), (2, 5)):
        found = evaluate_functions(basis, positions, points, derivatives=derivatives)
        np.testing.assert_array_equal(found, full[:rows])


@pytest.mark.parametrize("dtype", [float, complex])
def test_orbitals_are_sums_of_functions(dtype: type) -> None:
    basis, positions, points = sample()
    rng = np.random.default_rng(8)
    coefficients = rng.normal(size=(3, 10)).astype(dtype)
    if dtype is complex:
        coefficients = coefficients + 1j * rng.normal(size=(3, 10))
    functions = evaluate_functions(basis, positions, points)
    found = evaluate_orbitals(basis, positions, coefficients, points)
    assert found.dtype == np.dtype(dtype)
    for p in range(3):
        wanted = sum(coefficients[p, f] * functions[:, :, f] for f in range(10))
        np.testing.assert_allclose(found[:, :, p], wanted, rtol=1e-12, atol=1e-15)
    assert evaluate_orbitals(basis, positions, coefficients, points, derivatives=0).shape == (1, 11, 3)


@pytest.mark.parametrize("factor", [1.0, -2.0, 1j, 1.0 - 2j])
def test_orbitals_at_a_centre_add_up_before_the_limit(factor: complex) -> None:
    """Two functions whose Laplacians diverge against each other: the orbital has no cusp and a finite Laplacian."""
    shells = [ShellData(0, 0, False, ((2.0, 1.0, 0),)), ShellData(0, 0, False, ((2.0, 1.0, 1),)),
              ShellData(1, 0, False, ((1.0, 1.0, 0),))]  # fmt: skip
    basis, positions = make_basis("slater", shells), np.array([[0.0, 0.0, 0.0], [0.0, 0.0, 1.5]])
    both = [[1.0, 2.0, 0.5], [1.0, 0.0, 0.5], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]]
    value, dx, _, dz, laplacian = evaluate_orbitals(basis, positions, factor * np.array(both), positions[:1])[:, 0]
    distant = evaluate_functions(basis, positions, positions[:1])[:, 0, 2]
    np.testing.assert_allclose(value, factor * np.array([S + distant[0] / 2, S + distant[0] / 2, 0.0, distant[0]]))
    np.testing.assert_array_equal(dx, 0.0)
    np.testing.assert_allclose(dz, factor * distant[3] * np.array([0.5, 0.5, 0.0, 1.0]))
    np.testing.assert_allclose(laplacian[[0, 3]], factor * np.array([-12 * S + distant[4] / 2, distant[4]]))
    for part in (np.real, np.imag):
        if part(factor):
            np.testing.assert_array_equal(part(laplacian[1:3]), np.sign(part(factor)) * np.array([-np.inf, np.inf]))


def test_nothing_to_evaluate() -> None:
    basis, positions, points = sample()
    assert evaluate_functions(basis, positions, points[:0]).shape == (5, 0, 10)
    assert evaluate_functions(make_basis("gaussian", []), positions, points).shape == (5, 11, 0)
    assert evaluate_orbitals(basis, positions, np.zeros((0, 10)), points).shape == (5, 11, 0)


def test_bad_arguments_are_named() -> None:
    basis, positions, points = sample()
    with pytest.raises(EvaluationError, match="derivatives"):
        evaluate_functions(basis, positions, points, derivatives=3)
    with pytest.raises(EvaluationError, match=r"points: an array of shape \(3,\)"):
        evaluate_functions(basis, positions, np.zeros(3))
    with pytest.raises(EvaluationError, match=r"positions: an array of shape \(2, 2\)"):
        evaluate_functions(basis, positions[:, :2], points)
    with pytest.raises(EvaluationError, match="atom 1, but there are 1"):
        evaluate_functions(basis, positions[:1], points)
    with pytest.raises(EvaluationError, match=r"\(number of orbitals, 10\)"):
        evaluate_orbitals(basis, positions, np.zeros((2, 9)), points)
