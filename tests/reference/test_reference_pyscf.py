"""Functions, derivatives and overlap integrals against PySCF, to l = 6, spherical and Cartesian.

The translation of PySCF's conventions is written out here, apart from the one of the converter: its coefficients
contain the norms of primitives and contractions; l = 1 is ordered x, y, z; Cartesian s and p carry sqrt((2l+1)/4pi).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from reference_cases import ShellData, largest_terms, make_basis

from qwfx.model import Basis
from qwfx.reference import evaluate_functions, overlap

HIGH = [[5, [0.9, 0.6], [2.2, 0.5]], [6, [1.1, 1.0]], [4, [1.7, 1.0]], [3, [0.4, 0.3, 0.7], [1.4, 0.9, -0.2]]]


@pytest.fixture(scope="module", params=[False, True], ids=["spherical", "cartesian"])
def molecule(request: pytest.FixtureRequest) -> Any:
    from pyscf import gto

    basis = {"O": gto.basis.load("cc-pvtz", "O") + HIGH, "H": "cc-pvdz", "C": gto.basis.load("6-31g", "C") + HIGH[:1]}
    return gto.M(atom="O 0 0 0; H 0.3 0.9 0.1; C -0.4 1.1 2.2", basis=basis, spin=1, cart=request.param, verbose=0)


def translated(mol: Any) -> tuple[Basis, NDArray[np.int64]]:
    """The basis, and where each of our functions stands in PySCF's order."""
    data, order = [], []
    for shell in range(mol.nbas):
        l = mol.bas_angular(shell)
        factor = math.sqrt((2 * l + 1) / (4 * math.pi)) if mol.cart and l < 2 else 1.0
        for column in mol._libcint_ctr_coeff(shell).T:
            primitives = [(a, c * factor, 0) for a, c in zip(mol.bas_exp(shell), column, strict=True)]
            data.append(ShellData(mol.bas_atom(shell), l, mol.cart, tuple(primitives)))
            start, size = len(order), (l + 1) * (l + 2) // 2 if mol.cart else 2 * l + 1
            order += [start + k for k in ([1, 2, 0] if l == 1 and not mol.cart else range(size))]
    return make_basis("gaussian", data, powers=False), np.array(order)


def test_values_gradients_laplacians(molecule: Any) -> None:
    basis, order = translated(molecule)
    positions = molecule.atom_coords()
    points = np.random.default_rng(3).normal(scale=2.0, size=(60, 3))
    raw = molecule.eval_gto("GTOval_cart_deriv2" if molecule.cart else "GTOval_sph_deriv2", points)
    wanted = np.concatenate([raw[:4], raw[[4, 7, 9]].sum(axis=0)[None]])[:, :, order]
    found = evaluate_functions(basis, positions, points)
    tolerance = 1e-13 * largest_terms(basis, positions, points) + 1e-14
    excess = np.abs(found - wanted) / tolerance
    assert found.shape == (5, 60, molecule.nao)
    assert excess.max() < 1.0, np.unravel_index(excess.argmax(), excess.shape)


def test_overlap(molecule: Any) -> None:
    basis, order = translated(molecule)
    wanted = molecule.intor("int1e_ovlp")[np.ix_(order, order)]
    np.testing.assert_allclose(overlap(basis, molecule.atom_coords()), wanted, rtol=0, atol=2e-14 * wanted.max())
