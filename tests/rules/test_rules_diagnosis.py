"""The usual mistakes are recognised by name, and what is none of them is not."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from corpus.valid import POINTS, triplet, water

from qwfx.model import Basis
from qwfx.reference import evaluate_orbitals
from qwfx.rules.algebra_orbitals import _pattern
from qwfx.rules.diagnosis import explain_mismatch
from qwfx.rules.elements import BOHR

Witness = dict[str, np.ndarray]


@pytest.fixture(scope="module")
def molecule() -> tuple[Basis, np.ndarray, np.ndarray]:
    """Water with solid shells up to d, and orbitals that mix everything."""
    whole = water()
    assert whole.basis is not None
    basis = replace(whole.basis, shell_monomial=np.zeros_like(whole.basis.shell_monomial))
    C = np.random.default_rng(1).normal(size=(4, basis.n_functions))
    return basis, whole.system.positions, C


def seen(basis: Basis, positions: np.ndarray, C: np.ndarray, points: np.ndarray = POINTS) -> Witness:
    values = evaluate_orbitals(basis, positions, C, points, derivatives=2)
    return {"values": values[0], "gradients": np.moveaxis(values[1:4], 0, -1), "laplacians": values[4]}


def explain(molecule: Any, witness: Witness, word: str = "values", bad: tuple[int, ...] = (0, 1, 2, 3)) -> str:
    mask = np.zeros(4, dtype=bool)
    mask[list(bad)] = True
    return explain_mismatch(*molecule, POINTS, witness, word, mask)


def reorder(basis: Basis, C: np.ndarray, orders: dict[int, list[int]]) -> np.ndarray:
    """What a producer means whose columns stand in these orders of components."""
    meant = C.copy()
    for s, ell in enumerate(basis.shell_l.tolist()):
        if ell in orders:
            start = basis.function_start[s]
            for column, component in enumerate(orders[ell]):
                meant[:, start + component] = C[:, start + column]
    return meant


XYZ = {1: [2, 0, 1]}
ZIGZAG = {1: [1, 2, 0], 2: [2, 3, 1, 4, 0]}


@pytest.mark.parametrize(
    ("orders", "words"),
    [
        (XYZ, "p functions stand in the order x, y, z"),
        (ZIGZAG, "solid functions stand in the order m = 0, 1, -1, 2, -2, ..."),
        ({**ZIGZAG, **XYZ}, "p functions stand in the order x, y, z and the others in the order m = 0, 1, -1, ..."),
        ({2: ZIGZAG[2]}, "solid functions beyond p stand in the order m = 0, 1, -1, ..."),
    ],
)
def test_order_of_functions(molecule: Any, orders: dict[int, list[int]], words: str) -> None:
    basis, positions, C = molecule
    assert explain(molecule, seen(basis, positions, reorder(basis, C, orders))) == f"they agree if {words}"


def test_phase_of_odd_m(molecule: Any) -> None:
    basis, positions, C = molecule
    meant = C.copy()
    for s, ell in enumerate(basis.shell_l.tolist()):
        for m in range(-ell, ell + 1):
            meant[:, basis.function_start[s] + ell + m] *= (-1) ** (m % 2)
    assert "Condon-Shortley" in explain(molecule, seen(basis, positions, meant))


@pytest.mark.parametrize(
    ("factor", "words"),
    [
        (-1.0, "the sign is opposite"),
        (np.sqrt(2), "the witness is 1.41421 times ours throughout"),
        (np.array([2.0, 3, 4, 5]), "the witness is a multiple of ours, 2 for the first orbital concerned"),
    ],
)
def test_sign_and_factor(molecule: Any, factor: Any, words: str) -> None:
    witness = seen(*molecule)
    assert explain(molecule, {**witness, "values": witness["values"] * factor}) == words
    assert explain(molecule, {**witness, "laplacians": witness["laplacians"] * factor}, "laplacians") == words


def test_phase_of_a_complex_orbital() -> None:
    whole = triplet()
    assert whole.basis is not None
    molecule = (whole.basis, whole.system.positions, np.asarray(whole.orbitals["main"].coefficients))
    witness = seen(*molecule)
    turned = {**witness, "values": witness["values"] * 1j}
    words = explain_mismatch(*molecule, POINTS, turned, "values", np.array([False, True]))
    assert "1j times ours" in words


def test_other_order_of_orbitals(molecule: Any) -> None:
    witness = seen(*molecule)
    swapped = {**witness, "values": witness["values"][:, [0, 2, 1, 3]]}
    words = explain(molecule, swapped, bad=(1, 2))
    assert words == "the orbitals are in another order: the witness's orbital 1 is orbital 2 of the set"


def test_components_of_gradients(molecule: Any) -> None:
    witness = seen(*molecule)
    turned = {**witness, "gradients": witness["gradients"][..., [1, 0, 2]] * [1, 1, -1]}
    assert explain(molecule, turned, "gradients") == "the witness gives the components in the order y, x, -z"


def test_units(molecule: Any) -> None:
    basis, positions, C = molecule
    assert "points are in angstrom" in explain(molecule, seen(basis, positions, C, POINTS / BOHR))
    assert "positions are in angstrom" in explain(molecule, seen(basis, positions / BOHR, C))


def test_what_is_none_of_them_stays_unnamed(molecule: Any) -> None:
    basis, positions, C = molecule
    other = C + np.random.default_rng(2).normal(size=C.shape)
    assert explain(molecule, seen(basis, positions, other)) == ""
    noise = seen(*molecule)
    noise["gradients"] = noise["gradients"] + np.random.default_rng(3).normal(size=noise["gradients"].shape)
    assert explain(molecule, noise, "gradients") == ""
    noise["laplacians"] = noise["laplacians"] + np.random.default_rng(4).normal(size=noise["laplacians"].shape)
    assert explain(molecule, noise, "laplacians") == ""


def test_what_orbitals_that_are_not_orthonormal_have_in_common() -> None:
    """A d function of the wrong scale touches just the orbitals that hold it."""
    basis = Basis(
        "gaussian", np.zeros(3, "i4"), np.arange(3, dtype="i4"), np.zeros(3, "i1"), np.arange(4), np.ones(3), np.ones(3)
    )
    file: Any = SimpleNamespace(basis=basis)
    C = np.eye(9)
    C[2, :] = C[1:4].sum(axis=0)  # still no d function
    residual = np.zeros((9, 9))
    assert _pattern(file, C, residual + 0.1 * np.eye(9)) == "; the orbitals are orthogonal but not normalised"
    residual[4:, 4:] = 0.1
    assert _pattern(file, C, residual).endswith("just those with functions of l = 2")
    residual[3, 4] = residual[4, 3] = 0.1
    assert _pattern(file, C, residual) == ""
    residual[:] = 0.1
    assert _pattern(file, C, residual) == ""
