"""Functions: PySCF's are what `basis_of` says they are, and `translate` gives PySCF functions that are ours."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from pyscf_cases import HYDROXYL, WATER, molecule

from qwfx.converters.pyscf import from_pyscf, to_mole, translate
from qwfx.converters.pyscf.from_mole import basis_of, function_order
from qwfx.converters.witness import witness_points, witness_through_pyscf
from qwfx.errors import UnsupportedError
from qwfx.model import Basis, Cell, OrbitalSet, System, Wavefunction
from qwfx.reference import evaluate_functions, evaluate_orbitals, overlap

UP_TO_SIX = {"H": [[n, [0.9 - 0.05 * n, 0.7], [0.3 + 0.02 * n, 0.5]] for n in range(7)], "O": "sto-3g"}


def pyscf_values(mol, points):
    """(5, n, AO) value, gradient and Laplacian by PySCF."""
    derivatives = mol.eval_gto("GTOval_cart_deriv2" if mol.cart else "GTOval_sph_deriv2", points)
    return np.concatenate([derivatives[:4], (derivatives[4] + derivatives[7] + derivatives[9])[np.newaxis]])


def assert_close(found, expected, tolerance=1e-12):
    scale = max(1.0, np.abs(expected).max())
    np.testing.assert_allclose(found, expected, rtol=0, atol=tolerance * scale)


@pytest.mark.parametrize("cartesian", [False, True], ids=["spherical", "cartesian"])
@pytest.mark.parametrize("basis", [UP_TO_SIX, "ano", "6-31g**", "cc-pvtz"], ids=["l-to-6", "ano", "pople", "cc"])
def test_functions_and_overlaps_are_those_of_pyscf(basis, cartesian):
    mol = molecule(atom=HYDROXYL, basis=basis, spin=1, cart=cartesian)
    ours, order = basis_of(mol), function_order(mol)
    points = witness_points(mol.atom_coords())
    expected = pyscf_values(mol, points)[:, :, order]
    found = evaluate_functions(ours, mol.atom_coords(), points)
    for component in range(5):
        assert_close(found[component], expected[component])
    overlaps = mol.intor("int1e_ovlp")[np.ix_(order, order)]
    assert_close(overlap(ours, mol.atom_coords()), overlaps)


def test_general_contraction_becomes_one_shell_each():
    mol = molecule(atom="C 0 0 0", basis="ano")
    ours = basis_of(mol)
    assert ours.n_shells == sum(mol.bas_nctr(i) for i in range(mol.nbas)) > mol.nbas
    assert ours.n_functions == mol.nao_nr()
    assert np.all(ours.coefficients != 0)


@pytest.mark.parametrize("name", ["rhf", "rhf-cartesian", "uhf", "general-contraction", "core-potential", "ghost"])
def test_witness_is_reproduced_by_the_reference(name, calculation):
    mf = calculation(name)
    wavefunction = from_pyscf(mf)
    witness = wavefunction.witness
    assert witness.independent
    assert witness.evaluator == "pyscf"
    assert set(witness.orbitals) == set(wavefunction.orbitals)
    for set_name, orbitals in wavefunction.orbitals.items():
        found = evaluate_orbitals(
            wavefunction.basis, wavefunction.system.positions, orbitals.coefficients, witness.points
        )
        said = witness.orbitals[set_name]
        assert_close(found[0], said.values)
        assert_close(np.moveaxis(found[1:4], 0, -1), said.gradients)
        assert_close(found[4], said.laplacians)


def test_witness_through_pyscf_agrees_with_that_of_the_source(calculation):
    wavefunction = from_pyscf(calculation("rhf"))
    again = witness_through_pyscf(wavefunction)
    assert not again.independent
    np.testing.assert_array_equal(again.points, wavefunction.witness.points)
    for part in ("values", "gradients", "laplacians"):
        expected = getattr(wavefunction.witness.orbitals["spatial"], part)
        assert_close(getattr(again.orbitals["spatial"], part), expected)


def test_general_contractions_are_put_together_again(calculation):
    mf = calculation("general-contraction")
    mole = to_mole(from_pyscf(mf, witness=False))
    assert mole.nbas == mf.mol.nbas
    assert [mole.atom_symbol(i) for i in range(mole.natm)] == ["He", "H"]


def test_ghosts_keep_element_and_functions(calculation):
    mf = calculation("ghost")
    wavefunction = from_pyscf(mf, witness=False)
    assert wavefunction.system.atomic_numbers.tolist() == [8, 1, 1, 7]
    assert wavefunction.system.effective_charges.tolist() == [8, 1, 1, 0]
    assert np.count_nonzero(wavefunction.basis.shell_center == 3) > 0
    mole = to_mole(wavefunction)
    assert mole.atom_charges().tolist() == [8, 1, 1, 0]
    assert mole.nao_nr() == mf.mol.nao_nr()


# --- arbitrary bases -----------------------------------------------------------------------------------------------


def made_wavefunction(basis: Basis, positions, numbers, charges=None, labels=None) -> Wavefunction:
    charges = np.asarray(numbers if charges is None else charges, dtype=float)
    labels = labels or tuple(f"A{i}" for i in range(len(numbers)))
    electrons = round(float(charges.sum()))
    return Wavefunction(
        system=System(
            electrons - electrons // 2,
            electrons // 2,
            tuple(labels),
            np.asarray(numbers, np.int32),
            charges,
            np.asarray(positions, float),
        ),
        basis=basis,
    )


@st.composite
def bases(draw) -> Basis:
    """Two atoms, shells in any order and of both kinds, contractions that nobody normalised."""
    n_shells = draw(st.integers(1, 6))
    n_primitives = [draw(st.integers(1, 3)) for _ in range(n_shells)]
    total = sum(n_primitives)
    # A short list of exponents, so that shells share some and repeat others within a contraction.
    exponent = st.sampled_from([0.13, 0.4, 1.1, 2.7, 9.0])
    coefficient = st.sampled_from([-2.5, -0.3, 0.2, 0.9, 4.0])
    return Basis(
        "gaussian",
        shell_center=draw(arrays(np.int32, n_shells, elements=st.integers(0, 1))),
        shell_l=draw(arrays(np.int32, n_shells, elements=st.integers(0, 4))),
        shell_monomial=draw(arrays(np.int8, n_shells, elements=st.integers(0, 1))),
        primitive_start=np.concatenate([[0], np.cumsum(n_primitives)]).astype(np.int64),
        exponents=np.array([draw(exponent) for _ in range(total)]),
        coefficients=np.array([draw(coefficient) for _ in range(total)]),
    )


@settings(max_examples=60, deadline=None)
@given(bases())
def test_any_basis_goes_to_pyscf_exactly(basis):
    positions = np.array([[0.1, -0.2, 0.3], [0.4, 1.1, -0.9]])
    wavefunction = made_wavefunction(basis, positions, [3, 1])
    translation = translate(wavefunction)
    points = witness_points(positions)
    ours = evaluate_functions(basis, positions, points)
    theirs = pyscf_values(translation.mole, points) @ translation.matrix
    for component in range(5):
        assert_close(theirs[component], ours[component])
    square = translation.matrix.T @ translation.mole.intor("int1e_ovlp") @ translation.matrix
    assert_close(square, overlap(basis, positions), 1e-11)


def test_solid_and_monomial_shells_in_one_molecule():
    mol = molecule(atom=WATER, basis="cc-pvtz")
    plain = basis_of(mol)
    monomial = plain.shell_monomial.copy()
    monomial[plain.shell_l == 2] = 1
    mixed = replace(plain, shell_monomial=monomial)
    assert to_mole(made_wavefunction(plain, mol.atom_coords(), [8, 1, 1])).cart is False
    translation = translate(made_wavefunction(mixed, mol.atom_coords(), [8, 1, 1]))
    assert translation.mole.cart is True
    assert translation.matrix.shape == (translation.mole.nao_nr(), mixed.n_functions)
    points = witness_points(mol.atom_coords())
    assert_close(
        (pyscf_values(translation.mole, points) @ translation.matrix)[0],
        evaluate_functions(mixed, mol.atom_coords(), points, derivatives=0)[0],
    )


def test_labels_that_pyscf_would_confuse_are_replaced():
    mol = molecule(atom="H 0 0 0; H 0 0 1.4; Li 0 0 4", basis={"H": "sto-3g", "Li": "sto-3g"}, spin=1)
    basis = basis_of(mol)
    positions, numbers = mol.atom_coords(), [1, 1, 3]
    same = to_mole(made_wavefunction(basis, positions, numbers, labels=("H", "H", "Li")))
    assert [same.atom_symbol(i) for i in range(3)] == ["H", "H", "Li"]
    unlike = replace(basis, coefficients=basis.coefficients * np.linspace(1.0, 1.3, len(basis.coefficients)))
    told_apart = to_mole(made_wavefunction(unlike, positions, numbers, labels=("H", "H", "Li")))
    assert [told_apart.atom_symbol(i) for i in range(3)] == ["H1", "H2", "Li3"]
    misleading = to_mole(made_wavefunction(basis, positions, numbers, labels=("He", "left side", "Li")))
    assert [misleading.atom_pure_symbol(i) for i in range(3)] == ["H", "H", "Li"]


def test_centres_without_functions_or_element():
    basis = basis_of(molecule(atom="He 0 0 0", basis="sto-3g"))
    # The functions of helium on a centre without an element, beside a helium without functions.
    positions = np.array([[0.0, 0.0, 0.5], [0.0, 0.0, 0.0]])
    mole = to_mole(made_wavefunction(basis, positions, [0, 2], charges=[0.0, 2.0], labels=("mid", "He")))
    assert mole.nao_nr() == 1
    assert mole.atom_charges().tolist() == [0, 2]
    assert mole.nelec == (1, 1)


def _basis(**changes) -> Basis:
    return replace(basis_of(molecule(atom="He 0 0 0", basis="sto-3g")), **changes)


def _with(wavefunction: Wavefunction, **changes) -> Wavefunction:
    return replace(wavefunction, system=replace(wavefunction.system, **changes))


HELIUM = ([[0.0, 0.0, 0.0]], [2])


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: made_wavefunction(_basis(radial="slater"), *HELIUM), "Slater functions"),
        (lambda: made_wavefunction(_basis(powers=np.array([0, 2, 0], np.int32)), *HELIUM), "powers of r"),
        (lambda: made_wavefunction(_basis(coefficients=np.zeros(3)), *HELIUM), "is zero"),
        (lambda: replace(made_wavefunction(_basis(), *HELIUM), basis=None), "no nuclei or no basis"),
        (lambda: made_wavefunction(_basis(), *HELIUM, charges=[1.5]), "effective charge 1.5"),
        (lambda: made_wavefunction(_basis(), *HELIUM, charges=[4.0]), "effective charge 4"),
        (
            lambda: _with(made_wavefunction(_basis(), *HELIUM), cell=Cell(np.eye(3), np.zeros((1, 3)))),
            "periodic",
        ),
    ],
    ids=["slater", "powers", "zero", "no-basis", "fraction", "too-much", "cell"],
)
def test_what_pyscf_cannot_hold_is_refused(make, message):
    with pytest.raises(UnsupportedError, match=message):
        to_mole(make())


def test_lazy_coefficients_are_taken(calculation):
    class Lazy:
        def __init__(self, values):
            self.values = values

        shape = property(lambda self: self.values.shape)
        dtype = property(lambda self: self.values.dtype)

        def __len__(self):
            return len(self.values)

        def __getitem__(self, key):
            return self.values[key]

        def __array__(self, dtype=None, copy=None):
            return np.asarray(self.values, dtype=dtype)

    wavefunction = from_pyscf(calculation("rhf"), witness=False)
    own = wavefunction.orbitals["spatial"]
    lazy = OrbitalSet("both", Lazy(own.coefficients))
    translation = translate(wavefunction)
    found = translation.coefficients(lazy.coefficients)
    np.testing.assert_array_equal(found, translation.coefficients(own.coefficients))
