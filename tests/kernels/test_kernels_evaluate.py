"""The fast evaluator against the plain one, against PySCF, and against itself in other blocks and threads."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx import kernels, reference
from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.kernels import plan as plan_module
from qwfx.kernels.numeric import exp_row
from qwfx.model import Basis

CENTERS = np.array([[0.0, 0.0, 0.0], [1.1, -0.4, 0.7], [-0.3, 2.2, 0.2]])


def random_basis(
    rng: np.random.Generator, n_shells: int, radial: str, kinds: tuple[int, ...], powers: bool, top: int = 6
) -> Basis:
    """Shells of any kind on three centres, some of them sharing exponents."""
    lengths = rng.integers(1, 5, n_shells)
    total = int(lengths.sum())
    exponents = rng.choice([0.15, 0.6, 1.3, 4.0, 11.0], total)
    return Basis(
        radial,  # type: ignore[arg-type]
        rng.integers(0, len(CENTERS), n_shells).astype(np.int32),
        rng.integers(0, top + 1, n_shells).astype(np.int32),
        rng.choice(kinds, n_shells).astype(np.int8),
        np.concatenate([[0], np.cumsum(lengths)]),
        exponents,
        rng.normal(size=total),
        rng.integers(0, 4, total).astype(np.int32) if powers else None,
    )


def close(a: np.ndarray, b: np.ndarray, tolerance: float = 1e-13) -> None:
    """Agreement relative to the largest number of each row (value, each derivative, Laplacian)."""
    assert a.shape == b.shape
    if not a.size:
        return
    finite = np.isfinite(b)
    assert np.array_equal(np.isfinite(a), finite)
    assert np.array_equal(a[~finite], b[~finite])
    a, b = np.where(finite, a, 0.0), np.where(finite, b, 0.0)
    size = np.abs(b).max(axis=(1, 2), keepdims=True)
    assert (np.abs(a - b) <= tolerance * size).all(), (np.abs(a - b).max(axis=(1, 2), keepdims=True) / size).max()


@settings(deadline=None, max_examples=60)
@given(
    seed=st.integers(0, 2**32 - 1),
    radial=st.sampled_from(["gaussian", "slater"]),
    kinds=st.sampled_from([(0,), (1,), (0, 1)]),
    powers=st.booleans(),
    derivatives=st.integers(0, 2),
    n_points=st.sampled_from([0, 1, 2, 7, 255, 256, 257, 600]),
    n_shells=st.integers(0, 9),
)
def test_functions_equal_the_reference(
    seed: int, radial: str, kinds: tuple[int, ...], powers: bool, derivatives: int, n_points: int, n_shells: int
) -> None:
    rng = np.random.default_rng(seed)
    basis = random_basis(rng, n_shells, radial, kinds, powers)
    points = rng.normal(size=(n_points, 3)) * rng.choice([0.1, 1.0, 4.0])
    fast = kernels.evaluate_functions(basis, CENTERS, points, derivatives=derivatives)
    # Powers of r make terms that cancel; each is computed to rounding of its own size.
    close(fast, reference.evaluate_functions(basis, CENTERS, points, derivatives=derivatives))


@settings(deadline=None, max_examples=25)
@given(seed=st.integers(0, 2**32 - 1), complex_values=st.booleans(), radial=st.sampled_from(["gaussian", "slater"]))
def test_orbitals_equal_the_reference(seed: int, complex_values: bool, radial: str) -> None:
    rng = np.random.default_rng(seed)
    basis = random_basis(rng, 6, radial, (0, 1), False, top=4)
    matrix: np.ndarray[Any, Any] = rng.normal(size=(5, basis.n_functions))
    if complex_values:
        matrix = matrix + 1j * rng.normal(size=matrix.shape)
    points = rng.normal(size=(300, 3)) * 2
    fast = kernels.evaluate_orbitals(basis, CENTERS, matrix, points)
    assert np.iscomplexobj(fast) == complex_values
    close(fast, reference.evaluate_orbitals(basis, CENTERS, matrix, points))


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
@pytest.mark.parametrize("powers", [False, True])
def test_points_on_a_centre(radial: str, powers: bool) -> None:
    basis = random_basis(np.random.default_rng(3), 12, radial, (0, 1), powers)
    points = np.concatenate([CENTERS, CENTERS + 1e-9, np.random.default_rng(4).normal(size=(5, 3))])
    close(
        kernels.evaluate_functions(basis, CENTERS, points),
        reference.evaluate_functions(basis, CENTERS, points),
        tolerance=1e-12,
    )
    matrix = np.random.default_rng(5).normal(size=(3, basis.n_functions))
    close(
        kernels.evaluate_orbitals(basis, CENTERS, matrix, points),
        reference.evaluate_orbitals(basis, CENTERS, matrix, points),
        tolerance=1e-12,
    )


@pytest.mark.parametrize("cart", [False, True])
def test_functions_equal_pyscf(cart: bool) -> None:
    from pyscf import gto

    from qwfx.converters.pyscf.from_mole import basis_of, function_order

    mol = gto.M(atom="O 0 0 0.12; H 0 0.76 -0.47; H 0.1 -0.7 -0.4", basis="cc-pv5z", cart=cart, verbose=0)
    points = np.random.default_rng(6).normal(size=(400, 3)) * 2
    told = mol.eval_gto("GTOval_cart_deriv2" if cart else "GTOval_sph_deriv2", points)
    theirs = np.concatenate([told[:4], (told[4] + told[7] + told[9])[None]])
    ours = kernels.evaluate_functions(basis_of(mol), mol.atom_coords(), points)
    order = function_order(mol)
    close(ours, theirs[:, :, order], tolerance=1e-12)


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
def test_threshold_is_a_bound(radial: str) -> None:
    rng = np.random.default_rng(7)
    basis = random_basis(rng, 14, radial, (0, 1), False)
    # Points in clusters, so that whole blocks are far from some centre.
    points = np.concatenate([c + rng.normal(size=(256, 3)) for c in (CENTERS[0], CENTERS[0] + 12.0, CENTERS[1] - 25.0)])
    exact = kernels.evaluate_functions(basis, CENTERS, points)
    matrix = rng.normal(size=(4, basis.n_functions))
    for threshold in (1e-14, 1e-8, 1e-3):
        screened = kernels.evaluate_functions(basis, CENTERS, points, threshold=threshold)
        assert np.abs(screened - exact).max() < threshold
        assert ((screened == 0) & (exact != 0)).any(), "the test must leave something out"
        kept = screened != 0
        assert np.array_equal(screened[kept], exact[kept])
        orbitals = kernels.evaluate_orbitals(basis, CENTERS, matrix, points, threshold=threshold)
        allowed = threshold * np.abs(matrix).sum(axis=1)
        difference = np.abs(orbitals - kernels.evaluate_orbitals(basis, CENTERS, matrix, points))
        rounding = 1e-13 * np.abs(orbitals).max(axis=(1, 2), keepdims=True)
        assert (difference <= allowed + rounding).all()


def test_threads_do_not_change_a_bit() -> None:
    rng = np.random.default_rng(8)
    basis = random_basis(rng, 10, "gaussian", (0, 1), False)
    points = rng.normal(size=(1500, 3)) * 2
    matrix = rng.normal(size=(7, basis.n_functions))
    one = kernels.evaluate_functions(basis, CENTERS, points, threads=1)
    for threads in (2, 3, 50):
        assert np.array_equal(one, kernels.evaluate_functions(basis, CENTERS, points, threads=threads))
    first = kernels.evaluate_orbitals(basis, CENTERS, matrix, points, threads=1)
    assert np.array_equal(first, kernels.evaluate_orbitals(basis, CENTERS, matrix, points, threads=3))


def test_inputs_in_other_memory_orders() -> None:
    rng = np.random.default_rng(9)
    basis = random_basis(rng, 5, "gaussian", (0,), False)
    points = rng.normal(size=(64, 3))
    expected = kernels.evaluate_functions(basis, CENTERS, points)
    strided = np.repeat(points, 2, axis=0)[::2]
    assert np.array_equal(expected, kernels.evaluate_functions(basis, np.asfortranarray(CENTERS), strided))
    assert np.array_equal(expected, kernels.evaluate_functions(basis, CENTERS, np.asfortranarray(points).astype(">f8")))


def test_writing_into_given_memory() -> None:
    rng = np.random.default_rng(10)
    basis = random_basis(rng, 5, "gaussian", (0, 1), False)
    points = rng.normal(size=(300, 3))
    memory = np.full((5, basis.n_functions, 300), np.nan)
    result = kernels.evaluate_functions(basis, CENTERS, points, out=memory)
    assert np.shares_memory(result, memory)
    assert np.array_equal(result, kernels.evaluate_functions(basis, CENTERS, points))
    with pytest.raises(EvaluationError, match="C order"):
        kernels.evaluate_functions(basis, CENTERS, points, out=np.empty((5, 300, basis.n_functions)))


def test_exponential_is_accurate_to_the_last_bits() -> None:
    x = np.concatenate([np.linspace(0, 50, 4001), np.geomspace(1e-300, 707.9, 2000)])
    result = np.empty_like(x)
    exp_row(1.0, x, result, len(x))
    exact = np.exp(-x)
    assert np.abs(result / exact - 1).max() < 3e-16
    tail = np.array([708.1, 745.0, 1e4, 1e300, np.inf])
    exp_row(1.0, tail, result, len(tail))
    assert (result[: len(tail)] == 0.0).all()


def test_bad_arguments_are_said() -> None:
    basis = random_basis(np.random.default_rng(11), 3, "gaussian", (0,), False)
    points = np.zeros((2, 3))
    with pytest.raises(EvaluationError, match="derivatives"):
        kernels.evaluate_functions(basis, CENTERS, points, derivatives=3)
    with pytest.raises(EvaluationError, match="points"):
        kernels.evaluate_functions(basis, CENTERS, np.zeros(3))
    with pytest.raises(EvaluationError, match="coefficients"):
        kernels.evaluate_orbitals(basis, CENTERS, np.zeros((2, basis.n_functions + 1)), points)
    with pytest.raises(EvaluationError, match="atom"):
        kernels.evaluate_functions(basis, CENTERS[:0], points)
    zero, one = np.zeros(1, "i4"), np.ones(1)
    high = Basis("gaussian", zero, np.array([7], "i4"), zero.astype("i1"), np.array([0, 1]), one, one)
    with pytest.raises(UnsupportedError, match="reference"):
        kernels.evaluate_functions(high, CENTERS, points)


def test_cutoffs_are_where_the_bound_meets_the_threshold() -> None:
    basis = random_basis(np.random.default_rng(12), 20, "gaussian", (0, 1), True)
    plan = plan_module.make_plan(basis, CENTERS)
    cutoffs = plan.cutoffs(1e-10)
    for s, r in enumerate(cutoffs):
        assert plan._bound(s, r) <= 1e-10 * (1 + 1e-6)
        assert plan._bound(s, 2 * r) < 1e-10


@settings(deadline=None, max_examples=80)
@given(
    seed=st.integers(0, 2**32 - 1), l=st.integers(0, 6), power=st.integers(0, 3), monomial=st.booleans(),
    radial=st.sampled_from(["gaussian", "slater"]), r=st.floats(0.05, 6.0),
)  # fmt: skip
def test_the_bound_holds_at_every_distance(
    seed: int, l: int, power: int, monomial: bool, radial: str, r: float
) -> None:
    """Of one primitive, whose terms cannot make up for each other, so that a bound that is too low would show."""
    one = np.array([1], dtype=np.int32)
    basis = Basis(
        radial, 0 * one, l * one, (monomial * one).astype(np.int8), np.array([0, 1]), np.array([0.8]), np.ones(1),
        power * one,
    )  # type: ignore[arg-type]  # fmt: skip
    directions = np.random.default_rng(seed).normal(size=(200, 3))
    points = r * directions / np.linalg.norm(directions, axis=1, keepdims=True)
    exact = reference.evaluate_functions(basis, np.zeros((1, 3)), points)
    assert np.abs(exact).max() <= plan_module.make_plan(basis, np.zeros((1, 3)))._bound(0, r) * (1 + 1e-12)


def test_compilation_is_known_and_done_once() -> None:
    kernels.prepare()
    assert kernels.compiled()
    said: list[str] = []
    kernels.prepare(lambda phase, fraction: said.append(phase))
    assert said[0].startswith("compiling")
