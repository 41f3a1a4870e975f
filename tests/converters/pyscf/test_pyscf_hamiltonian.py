"""The Hamiltonian over the stored orbitals, and full CI from it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from pyscf_cases import METHYLENE, WATER, molecule

from qwfx.converters.pyscf import fci_energy, from_pyscf, with_hamiltonian
from qwfx.converters.pyscf.complex_ci import lowest_energies
from qwfx.converters.pyscf.hamiltonian import symmetry_numbers
from qwfx.errors import ConversionError, EvaluationError, UnsupportedError
from qwfx.model import TwoBody


def run(kind: str, **settings):
    from pyscf import scf

    mf = getattr(scf, kind)(molecule(**settings))
    mf.chkfile = None
    mf._chkfile.close()
    return mf.run(conv_tol=1e-11)


@pytest.fixture(scope="module")
def water():
    return run("RHF", atom=WATER, basis="sto-3g")


@pytest.fixture(scope="module")
def methylene():
    return run("UHF", atom=METHYLENE, basis="sto-3g", spin=2)


@pytest.fixture(scope="module")
def water_energies(water):
    from pyscf import fci

    solver = fci.FCI(water)
    solver.conv_tol = 1e-12
    return solver.kernel(nroots=3)[0]


def unitary(n: int, seed: int):
    real, imaginary = np.random.default_rng(seed).normal(size=(2, n, n))
    return np.linalg.qr(real + 1j * imaginary)[0]


def test_restricted_integrals_are_in_their_places(water):
    from pyscf import ao2mo

    hamiltonian = from_pyscf(water, hamiltonian=True, witness=False).hamiltonian
    n = hamiltonian.n_orbitals
    full = ao2mo.restore(1, ao2mo.kernel(water.mol, water.mo_coeff), n)
    packed = hamiltonian.two_body["both"]
    assert packed.index is None
    assert (hamiltonian.up_set, hamiltonian.down_set) == ("spatial", "spatial")
    rng = np.random.default_rng(5)
    for p, q, r, s in rng.integers(n, size=(200, 4)):
        pq, rs = (max(a, b) * (max(a, b) + 1) // 2 + min(a, b) for a, b in ((p, q), (r, s)))
        position = max(pq, rs) * (max(pq, rs) + 1) // 2 + min(pq, rs)
        assert packed.values[position] == pytest.approx(full[p, q, r, s], abs=1e-12)
    assert len(packed.values) == 28 * 29 // 2
    expected = water.mo_coeff.T @ water.get_hcore() @ water.mo_coeff
    np.testing.assert_allclose(hamiltonian.one_body["both"], expected, rtol=0, atol=1e-12)
    assert hamiltonian.core_energy == pytest.approx(water.mol.energy_nuc(), abs=1e-12)


def test_unlike_spins_are_fourfold(methylene):
    from pyscf import ao2mo

    hamiltonian = from_pyscf(methylene, hamiltonian=True, witness=False).hamiltonian
    assert hamiltonian.spin_resolved
    up, down = methylene.mo_coeff
    n = hamiltonian.n_orbitals
    full = ao2mo.kernel(methylene.mol, (up, up, down, down), compact=False).reshape(n, n, n, n)
    pairs = hamiltonian.two_body["up_down"].values.reshape(n * (n + 1) // 2, -1)
    for p, q, r, s in np.random.default_rng(6).integers(n, size=(200, 4)):
        pq, rs = (max(a, b) * (max(a, b) + 1) // 2 + min(a, b) for a, b in ((p, q), (r, s)))
        assert pairs[pq, rs] == pytest.approx(full[p, q, r, s], abs=1e-12)


def test_full_ci_of_restricted_orbitals(water, water_energies):
    wavefunction = from_pyscf(water, hamiltonian=True, witness=False)
    assert fci_energy(wavefunction) == pytest.approx(water_energies[0], abs=1e-9)
    np.testing.assert_allclose(fci_energy(wavefunction, nroots=3), water_energies, rtol=0, atol=1e-8)


def test_full_ci_of_unrestricted_orbitals_does_not_depend_on_the_orbitals(methylene):
    restricted = run("ROHF", atom=METHYLENE, basis="sto-3g", spin=2)
    expected = fci_energy(from_pyscf(restricted, hamiltonian=True, witness=False))
    assert fci_energy(from_pyscf(methylene, hamiltonian=True, witness=False)) == pytest.approx(expected, abs=1e-9)


def test_complex_restricted_orbitals_give_the_same_full_ci(water, water_energies):
    real = from_pyscf(water, witness=False)
    own = real.orbitals["spatial"]
    rotated = replace(own, coefficients=unitary(7, 1) @ own.coefficients, energies=None, occupations=None)
    wavefunction = with_hamiltonian(replace(real, orbitals={"spatial": rotated}, expansion=None))
    hamiltonian = wavefunction.hamiltonian
    assert hamiltonian.complex_orbitals
    assert not hamiltonian.orbital_energies
    assert len(hamiltonian.two_body["both"].values) == 49 * 50 // 2
    assert np.abs(hamiltonian.two_body["both"].values.imag).max() > 0.01
    np.testing.assert_allclose(fci_energy(wavefunction, nroots=3), water_energies, rtol=0, atol=1e-9)


def test_complex_unrestricted_orbitals_give_the_same_full_ci(methylene):
    real = from_pyscf(methylene, hamiltonian=True, witness=False)
    rotated = {
        name: replace(s, coefficients=unitary(7, seed) @ s.coefficients, energies=None)
        for seed, (name, s) in enumerate(real.orbitals.items())
    }
    wavefunction = with_hamiltonian(replace(real, orbitals=rotated))
    assert len(wavefunction.hamiltonian.two_body["up_down"].values) == 49**2
    assert fci_energy(wavefunction) == pytest.approx(fci_energy(real), abs=1e-9)


def test_own_product_agrees_with_pyscf_for_real_orbitals(water, methylene):
    for mf in (water, methylene):
        wavefunction = from_pyscf(mf, hamiltonian=True, witness=False)
        electrons = wavefunction.system.n_up, wavefunction.system.n_down
        (own,) = lowest_energies(wavefunction.hamiltonian, *electrons, 1)
        assert own == pytest.approx(fci_energy(wavefunction), abs=1e-9)


def test_sparse_storage_means_the_same(water):
    wavefunction = from_pyscf(water, hamiltonian=True, witness=False)
    dense = wavefunction.hamiltonian.two_body["both"].values
    index = np.flatnonzero(np.abs(dense) > 1e-14).astype(np.uint64)
    assert len(index) < len(dense)
    sparse = replace(wavefunction.hamiltonian, two_body={"both": TwoBody(dense[index.astype(int)], index)})
    assert fci_energy(replace(wavefunction, hamiltonian=sparse)) == pytest.approx(fci_energy(wavefunction), abs=1e-10)


def test_states_of_one_irrep():
    straight = "O 0 0 0.12; H 0 0.75 -0.47; H 0 -0.75 -0.47"
    wavefunction = from_pyscf(
        run("RHF", atom=straight, basis="sto-3g", symmetry=True), hamiltonian=True, witness=False
    )
    assert wavefunction.hamiltonian.orbital_symmetry.tolist() == [0, 0, 3, 0, 2, 0, 3]
    lowest = [fci_energy(wavefunction, symmetry=irrep) for irrep in range(4)]
    assert min(lowest) == lowest[0] == pytest.approx(fci_energy(wavefunction), abs=1e-9)
    assert len({round(e, 6) for e in lowest}) == 4


@pytest.mark.parametrize(
    ("labels", "numbers"),
    [
        (("A1", "B2", "A2", "B1"), [0, 3, 1, 2]),
        (("Ag", "B1u", "B3g"), [0, 5, 3]),
        (("A'", 'A"'), [0, 1]),
        (("A1g", "A1u", "E1ux", "E1uy"), [0, 5, 7, 6]),
        (("A", "A"), [0, 0]),
        (("Ag", "Au"), [0, 1]),
        (("T2g",), None),
        (("A1", "B1u"), None),
    ],
)
def test_numbers_of_irreps(labels, numbers):
    found = symmetry_numbers(labels)
    assert (None if found is None else found.tolist()) == numbers


def test_core_potentials_enter_the_one_body_part(calculation):
    mf = calculation("core-potential")
    hamiltonian = from_pyscf(mf, hamiltonian=True, witness=False).hamiltonian
    expected = mf.mo_coeff.T @ mf.get_hcore() @ mf.mo_coeff
    np.testing.assert_allclose(hamiltonian.one_body["both"], expected, rtol=0, atol=1e-10)
    without = replace(from_pyscf(mf, witness=False), potentials=None)
    with pytest.raises(EvaluationError, match="lack core electrons"):
        with_hamiltonian(without)


def test_mean_field_energy_follows_from_the_hamiltonian(calculation):
    mf = calculation("rhf")
    hamiltonian = from_pyscf(mf, hamiltonian=True, witness=False).hamiltonian
    h, v = hamiltonian.one_body["both"], hamiltonian.two_body["both"].values

    def integral(p, q, r, s):
        pq, rs = (max(a, b) * (max(a, b) + 1) // 2 + min(a, b) for a, b in ((p, q), (r, s)))
        return v[max(pq, rs) * (max(pq, rs) + 1) // 2 + min(pq, rs)]

    energy = hamiltonian.core_energy + 2 * sum(h[i, i] for i in range(5))
    energy += sum(2 * integral(i, i, j, j) - integral(i, j, j, i) for i in range(5) for j in range(5))
    assert energy == pytest.approx(mf.e_tot, abs=1e-9)


def test_full_ci_that_cannot_be_done_is_refused(water, calculation):
    wavefunction = from_pyscf(water, witness=False)
    with pytest.raises(ConversionError, match="no Hamiltonian"):
        fci_energy(wavefunction)
    small = with_hamiltonian(wavefunction)
    with pytest.raises(UnsupportedError, match="states of one irrep"):
        fci_energy(small, symmetry=0)
    with pytest.raises(ConversionError, match="do not fit 7 orbitals"):
        fci_energy(replace(small, system=replace(small.system, n_up=8)))
    with pytest.raises(UnsupportedError, match="determinants"):
        fci_energy(from_pyscf(calculation("rhf"), hamiltonian=True, witness=False))


def test_unequal_numbers_of_orbitals_are_refused(methylene):
    wavefunction = from_pyscf(methylene, witness=False)
    down = wavefunction.orbitals["down"]
    fewer = replace(
        down,
        coefficients=down.coefficients[:6],
        energies=down.energies[:6],
        occupations=down.occupations[:6],
    )
    with pytest.raises(UnsupportedError, match="number 7 and 6"):
        with_hamiltonian(replace(wavefunction, orbitals={**wavefunction.orbitals, "down": fewer}))
