"""Fast overlap integrals against the plain ones, PySCF and a closed form."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx import kernels, reference
from qwfx.errors import EvaluationError
from qwfx.model import Basis

CENTERS = np.array([[0.0, 0.0, 0.0], [1.1, -0.4, 0.7], [-0.3, 2.2, 0.2], [1.1, -0.4, 0.7]])


def basis_of_shells(
    rng: np.random.Generator, n_shells: int, top: int, radial: str = "gaussian", powers: bool = False
) -> Basis:
    lengths = rng.integers(1, 4, n_shells)
    total = int(lengths.sum())
    return Basis(
        radial,  # type: ignore[arg-type]
        rng.integers(0, len(CENTERS), n_shells).astype(np.int32),
        rng.integers(0, top + 1, n_shells).astype(np.int32),
        rng.integers(0, 2, n_shells).astype(np.int8),
        np.concatenate([[0], np.cumsum(lengths)]),
        rng.uniform(0.1, 20.0, total),
        rng.normal(size=total),
        (2 * rng.integers(0, 2, total)).astype(np.int32) if powers else None,
    )


def agree(basis: Basis, tolerance: float = 1e-13) -> None:
    fast, plain = kernels.overlap(basis, CENTERS), reference.overlap(basis, CENTERS)
    # Relative to the terms that are added up, which may cancel within a contraction: take all coefficients positive.
    terms = reference.overlap(dataclasses.replace(basis, coefficients=np.abs(basis.coefficients)), CENTERS)
    scale = np.sqrt(np.abs(np.diag(terms)))
    assert (np.abs(fast - plain) <= tolerance * np.outer(scale, scale) + 1e-300).all()
    assert np.array_equal(fast, fast.T)


@settings(deadline=None, max_examples=25)
@given(seed=st.integers(0, 2**32 - 1), n_shells=st.integers(1, 6), top=st.integers(0, 4))
def test_equal_to_the_reference(seed: int, n_shells: int, top: int) -> None:
    agree(basis_of_shells(np.random.default_rng(seed), n_shells, top))


def test_contractions_that_nearly_cancel() -> None:
    agree(basis_of_shells(np.random.default_rng(58138073), 4, 0))


def test_high_angular_momenta() -> None:
    agree(basis_of_shells(np.random.default_rng(1), 6, 6))


@pytest.mark.parametrize(("radial", "powers"), [("slater", False), ("slater", True), ("gaussian", True)])
def test_other_functions_go_to_the_reference(radial: str, powers: bool) -> None:
    basis = basis_of_shells(np.random.default_rng(2), 4, 2, radial, powers)
    assert np.array_equal(kernels.overlap(basis, CENTERS), reference.overlap(basis, CENTERS))


@pytest.mark.parametrize("cart", [False, True])
def test_equal_to_pyscf(cart: bool) -> None:
    from pyscf import gto

    from qwfx.converters.pyscf.from_mole import basis_of, function_order

    mol = gto.M(atom="O 0 0 0.12; H 0 0.76 -0.47; H 0.1 -0.7 -0.4", basis="cc-pv5z", cart=cart, verbose=0)
    order = function_order(mol)
    theirs = mol.intor("int1e_ovlp")[np.ix_(order, order)]
    assert np.abs(kernels.overlap(basis_of(mol), mol.atom_coords()) - theirs).max() < 1e-13 * np.abs(theirs).max()


def test_two_normalised_s_functions() -> None:
    # Closed form of A. Szabo and N. S. Ostlund, Modern Quantum Chemistry, appendix A; 0.616238880350597926 by mpmath.
    a, b, distance = 0.5, 0.8, 1.2
    norms = [2 * (2 * x) ** 0.75 / np.pi**0.25 for x in (a, b)]
    basis = Basis(
        "gaussian", np.array([0, 1], "i4"), np.zeros(2, "i4"), np.zeros(2, "i1"), np.array([0, 1, 2]),
        np.array([a, b]), np.array(norms),
    )  # fmt: skip
    matrix = kernels.overlap(basis, np.array([[0.0, 0.0, 0.0], [0.0, 0.0, distance]]))
    assert matrix == pytest.approx(np.array([[1.0, 0.616238880350597926], [0.616238880350597926, 1.0]]), abs=1e-15)


def test_far_centres_and_empty_bases() -> None:
    basis = basis_of_shells(np.random.default_rng(3), 4, 2)
    far = CENTERS + np.arange(4)[:, None] * 1e4
    matrix = kernels.overlap(basis, far)
    same = np.repeat(basis.shell_center, basis.shell_size)
    assert (matrix[same[:, None] != same] == 0.0).all()
    assert (np.diag(matrix) > 0).all()
    empty = Basis(
        "gaussian", np.zeros(0, "i4"), np.zeros(0, "i4"), np.zeros(0, "i1"), np.zeros(1, "i8"), np.zeros(0), np.zeros(0)
    )
    assert kernels.overlap(empty, CENTERS).shape == (0, 0)
    with pytest.raises(EvaluationError, match="positions"):
        kernels.overlap(basis, np.zeros(3))
