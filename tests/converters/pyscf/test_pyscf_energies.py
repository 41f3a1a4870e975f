"""Every kind of mean-field calculation: converted, and its energy computed again from what was stored."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from qwfx.converters.pyscf import casci_energy, energy, from_pyscf, to_mean_field, translate
from qwfx.converters.pyscf.methods import MeanField, parse_active_space, parse_mean_field
from qwfx.errors import ConversionError, EvaluationError, UnsupportedError
from qwfx.model import Basis, OrbitalSet, System, Wavefunction

METHODS = {
    "rhf": "RHF",
    "rhf-cartesian": "RHF",
    "rohf": "ROHF",
    "uhf": "UHF",
    "uhf-cartesian": "UHF",
    "rks": "RKS/b3lyp (grid level 1)",
    "roks": "ROKS/pbe,pbe (grid 30,110)",
    "uks": "UKS/lda,vwn",
    "general-contraction": "RHF",
    "core-potential": "RHF",
    "ghost": "RHF",
    "symmetry": "RHF",
    "density-fitting": "RHF (density fitting with H=weigend, O=weigend)",
    "coulomb-fitting": "RHF (Coulomb fitting with H=cc-pvdz-jkfit, O=cc-pvdz-jkfit)",
    "scalar-x2c": "RHF (scalar X2C)",
    "anion-no-down": "UHF",
}


@pytest.mark.parametrize("name", METHODS)
def test_energy_from_the_stored_orbitals_is_the_stored_energy(name, calculation):
    mf = calculation(name)
    wavefunction = from_pyscf(mf)
    table = wavefunction.energies
    assert table.method[0] == METHODS[name]
    assert table.quantity == ("total", "nuclear-repulsion")
    assert table.value[0] == mf.e_tot
    assert table.value[1] == pytest.approx(mf.mol.energy_nuc(), abs=1e-12)
    assert energy(wavefunction) == pytest.approx(mf.e_tot, abs=1e-9)


@pytest.mark.parametrize("name", ["rhf", "rohf", "uhf", "rks"])
def test_mean_field_object_holds_what_was_stored(name, calculation):
    mf = calculation(name)
    again = to_mean_field(from_pyscf(mf, witness=False))
    assert type(again).__name__ == type(mf).__name__
    assert again.e_tot == mf.e_tot
    assert again.converged
    np.testing.assert_array_equal(again.mo_occ, mf.mo_occ)
    # The same functions in the same order: the coefficients come back up to rounding of the normalisation.
    np.testing.assert_allclose(again.mo_coeff, mf.mo_coeff, rtol=0, atol=1e-12)
    assert again.mol.nelec == mf.mol.nelec


def test_mean_field_object_is_a_stationary_point(calculation):
    again = to_mean_field(from_pyscf(calculation("rohf"), witness=False))
    stored = again.e_tot
    again.max_cycle = 3
    again.kernel(dm0=again.make_rdm1())
    assert again.e_tot == pytest.approx(stored, abs=1e-9)


def test_wrong_functional_gives_another_energy(calculation):
    wavefunction = from_pyscf(calculation("rks"), witness=False)
    assert abs(energy(wavefunction, "RKS/pbe,pbe (grid level 1)") - calculation("rks").e_tot) > 1e-2
    assert abs(energy(wavefunction, "RHF") - calculation("rks").e_tot) > 1e-2


def test_restricted_orbitals_in_an_unrestricted_method(calculation):
    wavefunction = from_pyscf(calculation("rohf"), witness=False)
    assert energy(wavefunction, "UHF") == pytest.approx(calculation("rohf").e_tot, abs=1e-9)


def test_unrestricted_orbitals_in_a_restricted_method_are_refused(calculation):
    with pytest.raises(ConversionError, match="up and down orbitals differ"):
        energy(from_pyscf(calculation("uhf"), witness=False), "RHF")


def test_complex_orbitals_give_the_same_energy(calculation):
    mf = calculation("rhf")
    n_occupied = 5
    rng = np.random.default_rng(7)
    real, imaginary = rng.normal(size=(2, n_occupied, n_occupied))
    unitary, _ = np.linalg.qr(real + 1j * imaginary)
    rotated = mf.mo_coeff.astype(complex)
    rotated[:, :n_occupied] = rotated[:, :n_occupied] @ unitary
    wavefunction = from_pyscf(mf, mo_coeff=rotated, mo_occ=mf.mo_occ)
    assert wavefunction.orbitals["spatial"].coefficients.dtype == np.complex128
    assert wavefunction.energies.quantity == ("nuclear-repulsion",)  # the energy of given orbitals is not known
    assert energy(wavefunction) == pytest.approx(mf.e_tot, abs=1e-9)
    values = wavefunction.witness.orbitals["spatial"].values
    assert values.dtype == np.complex128
    assert np.abs(values.imag).max() > 0.1


def test_hydrogen_atom_in_one_gaussian():
    # The best Gaussian has exponent 8/(9 pi) and energy -4/(3 pi) (Boys, Proc. R. Soc. A 200, 542 (1950)). The
    # function of the basis is not normalised: the factor is in the orbital coefficient.
    exponent = 8 / (9 * np.pi)
    wavefunction = Wavefunction(
        system=System(1, 0, ("H",), np.array([1], np.int32), np.ones(1), np.zeros((1, 3))),
        basis=Basis(
            "gaussian",
            shell_center=np.zeros(1, np.int32),
            shell_l=np.zeros(1, np.int32),
            shell_monomial=np.ones(1, np.int8),
            primitive_start=np.array([0, 1]),
            exponents=np.array([exponent]),
            coefficients=np.array([3.7]),
        ),
        orbitals={"spatial": OrbitalSet("both", np.array([[(2 * exponent / np.pi) ** 0.75 / 3.7]]))},
    )
    assert energy(wavefunction) == pytest.approx(-4 / (3 * np.pi), abs=1e-12)


def test_active_space_energy_does_not_depend_on_the_order_of_the_orbitals(calculation):
    from pyscf import mcscf

    mf = calculation("rhf")
    cas = mcscf.CASSCF(mf, 4, 4)
    cas.natorb = True
    cas.chkfile = None
    cas.verbose = 0
    cas.kernel()
    order = np.random.default_rng(3).permutation(len(cas.mo_occ))
    wavefunction = from_pyscf(
        mf.mol, mo_coeff=cas.mo_coeff[:, order], mo_occ=cas.mo_occ[order], witness=False
    )
    assert wavefunction.expansion is None
    assert energy(wavefunction, "CASSCF(4,4)") == pytest.approx(cas.e_tot, abs=1e-8)
    assert casci_energy(wavefunction, 4, 4) == pytest.approx(cas.e_tot, abs=1e-8)
    halves = {
        spin: OrbitalSet(spin, s.coefficients, occupations=s.occupations / 2)
        for spin in ("up", "down")
        for s in wavefunction.orbitals.values()
    }
    assert casci_energy(replace(wavefunction, orbitals=halves), 4, 4) == pytest.approx(cas.e_tot, abs=1e-8)
    with pytest.raises(ConversionError, match="do not leave"):
        casci_energy(wavefunction, 4, 3)


def test_electrons_without_core_potential_are_refused(calculation):
    wavefunction = replace(from_pyscf(calculation("core-potential"), witness=False), potentials=None)
    assert translate(wavefunction).missing_potentials == (0,)
    assert translate(wavefunction).mole.nelec == (13, 13)
    with pytest.raises(EvaluationError, match=r"atoms 0 \(I\) lack core electrons"):
        energy(wavefunction)


def test_occupations_that_are_absent_come_from_the_expansion(calculation):
    mf = calculation("rohf")
    wavefunction = from_pyscf(mf, witness=False)
    order = np.arange(wavefunction.orbitals["spatial"].n_orbitals)[::-1]
    reversed_set = from_pyscf(mf, mo_coeff=mf.mo_coeff[:, order], mo_occ=mf.mo_occ[order], witness=False)
    bare = replace(reversed_set.orbitals["spatial"], occupations=None)
    assert energy(replace(reversed_set, orbitals={"spatial": bare})) == pytest.approx(mf.e_tot, abs=1e-9)
    lowest_first = replace(wavefunction.orbitals["spatial"], occupations=np.zeros(len(order)))
    without = replace(wavefunction, orbitals={"spatial": lowest_first}, expansion=None)
    assert energy(without) == pytest.approx(mf.e_tot, abs=1e-9)


def test_sets_that_are_ambiguous_are_refused(calculation):
    wavefunction = from_pyscf(calculation("rhf"), witness=False)
    own = wavefunction.orbitals["spatial"]
    two = replace(wavefunction, orbitals={"spatial": own, "localised": own}, expansion=None)
    with pytest.raises(ConversionError, match="orbital sets spatial, localised"):
        energy(two)
    with_expansion = replace(wavefunction, orbitals={"spatial": own, "localised": own})
    assert energy(with_expansion) == pytest.approx(calculation("rhf").e_tot, abs=1e-9)


@pytest.mark.parametrize(
    "method",
    [
        MeanField("R"),
        MeanField("RO"),
        MeanField("U", "lda,vwn"),
        MeanField("R", "b3lyp", grid_level=5),
        MeanField("U", "RSH(0.3,0.2,0.1)+.81*LYP", grid=(75, 302)),
        MeanField("RO", auxiliary={"H": "cc-pvdz-jkfit", "GHOST-O": "cc-pvdz-jkfit"}),
        MeanField("R", "pbe,pbe", auxiliary={"H": "weigend"}, only_coulomb=True, scalar_x2c=True, dispersion="d3bj"),
    ],
    ids=str,
)
def test_text_of_a_method_reads_back(method):
    assert parse_mean_field(str(method)) == method


@pytest.mark.parametrize("text", ["CCSD(T)", "MP2", "", "KS", "RKS", "RHF/b3lyp", "GHF", "CASSCF(6,6)"])
def test_other_methods_are_no_mean_field(text):
    assert parse_mean_field(text) is None


def test_active_space_texts():
    space = parse_active_space("CASSCF(6, 5)")
    assert (space.electrons, space.orbitals) == (6, 5)
    assert parse_active_space("CASPT2(6,5)") is None


@pytest.mark.parametrize(
    ("method", "message"),
    [
        ("MP2", "no mean-field method"),
        ("RHF (grid of stars)", "'grid of stars' of the method is not known"),
        ("RKS/b3lyp (dispersion d3bj)", "dispersion correction"),
    ],
)
def test_methods_that_cannot_be_repeated_are_refused(method, message, calculation):
    with pytest.raises(UnsupportedError, match=message):
        energy(from_pyscf(calculation("rhf"), witness=False), method)
