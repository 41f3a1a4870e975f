"""Active-space calculations with their CI vectors."""

from __future__ import annotations

import numpy as np
import pytest
from pyscf_cases import METHYLENE, WATER, molecule

from qwfx.converters.pyscf import casci_energy, energy, from_pyscf
from qwfx.converters.pyscf.complex_ci import _Product
from qwfx.errors import ConversionError, UnsupportedError


def reference(kind="RHF", **settings):
    from pyscf import scf

    mf = getattr(scf, kind)(molecule(**settings))
    mf._chkfile.close()
    mf.chkfile = None
    return mf.run(conv_tol=1e-11)


@pytest.fixture(scope="module")
def water():
    return reference(atom=WATER, basis="sto-3g")


def active(mf, space, electrons, kind="CASSCF", **settings):
    from pyscf import mcscf

    cas = getattr(mcscf, kind)(mf, space, electrons)
    cas.verbose = 0
    for name, value in settings.items():
        setattr(cas, name, value)
    return cas


def dense(expansion, state=0):
    matrix = np.zeros((len(expansion.up_strings), len(expansion.down_strings)))
    rows = np.repeat(np.arange(len(matrix)), np.diff(expansion.row_start))
    matrix[rows, expansion.columns] = expansion.coefficients[state]
    return matrix


def expectation_value(wavefunction, state=0) -> float:
    """<D|H|D> / <D|D> with the Hamiltonian over all orbitals, the core included in the strings."""
    from pyscf.fci import cistring

    hamiltonian, expansion = wavefunction.hamiltonian, wavefunction.expansion
    system = wavefunction.system
    product = _Product(hamiltonian, system.n_up, system.n_down)
    vector = np.zeros(product.shape)
    positions = [
        [list(cistring.make_strings(range(hamiltonian.n_orbitals), n)).index(int(row[0])) for row in strings]
        for strings, n in ((expansion.up_strings, system.n_up), (expansion.down_strings, system.n_down))
    ]
    vector[np.ix_(*positions)] = dense(expansion, state)
    energy = np.vdot(vector, product(vector)).real / np.vdot(vector, vector).real
    return float(energy + hamiltonian.core_energy)


@pytest.mark.parametrize("natural", [False, True])
def test_expansion_has_the_energy_of_the_calculation(natural, water):
    cas = active(water, 4, 4, natorb=natural)
    cas.kernel()
    wavefunction = from_pyscf(cas, hamiltonian=True)
    orbitals = wavefunction.orbitals["spatial"]
    assert wavefunction.energies.method[0] == "CASSCF(4,4)"
    assert orbitals.roles == ("core",) * 3 + ("active",) * 4
    assert orbitals.occupations.sum() == pytest.approx(10, abs=1e-9)
    assert bool(wavefunction.provenance.steps[0]["notes"]) is not natural
    expansion = wavefunction.expansion
    assert all(int(row[0]) & 0b111 == 0b111 for row in expansion.up_strings)
    strings = [int(row[0]) for row in expansion.up_strings]
    assert strings == sorted(set(strings))
    assert (np.abs(expansion.coefficients) ** 2).sum() == pytest.approx(1, abs=1e-12)
    assert expectation_value(wavefunction) == pytest.approx(cas.e_tot, abs=1e-9)
    assert energy(wavefunction) == pytest.approx(cas.e_tot, abs=1e-8)


def test_spin_of_the_state_may_differ_from_that_of_the_molecule(water):
    cas = active(water, 4, (3, 1), kind="CASCI")
    cas.kernel()
    wavefunction = from_pyscf(cas, hamiltonian=True)
    assert (wavefunction.system.n_up, wavefunction.system.n_down) == (6, 4)
    assert expectation_value(wavefunction) == pytest.approx(cas.e_tot, abs=1e-9)
    assert casci_energy(wavefunction, 4, 4) == pytest.approx(cas.e_tot, abs=1e-8)


def test_open_shell():
    cas = active(reference("ROHF", atom=METHYLENE, basis="sto-3g", spin=2), 4, 4)
    cas.kernel()
    assert expectation_value(from_pyscf(cas, hamiltonian=True)) == pytest.approx(cas.e_tot, abs=1e-9)


def test_several_states(water):
    cas = active(water, 4, 4, kind="CASCI")
    cas.fcisolver.nroots = 3
    cas.kernel()
    wavefunction = from_pyscf(cas, hamiltonian=True)
    assert wavefunction.energies.quantity == ("total",) * 3 + ("nuclear-repulsion",)
    assert wavefunction.energies.state.tolist() == [0, 1, 2, 0]
    for state in range(3):
        assert expectation_value(wavefunction, state) == pytest.approx(cas.e_tot[state], abs=1e-8)

    averaged = active(water, 4, 4).state_average_([0.5, 0.5])
    averaged.verbose = 0
    averaged.kernel()
    wavefunction = from_pyscf(averaged, hamiltonian=True)
    assert wavefunction.energies.method[0] == "CASSCF(4,4) state average"
    for state in range(2):
        assert expectation_value(wavefunction, state) == pytest.approx(averaged.e_states[state], abs=1e-8)


def test_density_fitting_of_the_reference_is_in_the_method():
    cas = active(reference(atom=WATER, basis="cc-pvdz").density_fit().run(), 2, 2, kind="CASCI")
    cas.kernel()
    wavefunction = from_pyscf(cas, witness=False)
    assert wavefunction.energies.method[0] == "CASCI(2,2) (density fitting with H=cc-pvdz-jkfit, O=cc-pvdz-jkfit)"
    with pytest.raises(UnsupportedError, match="no mean-field method"):
        energy(wavefunction)


def test_other_solvers_and_unrun_calculations_are_refused(water):
    with pytest.raises(ConversionError, match="no orbitals or no CI vector"):
        from_pyscf(active(water, 4, 4))
    cas = active(water, 4, 4, kind="CASCI")
    cas.kernel()
    cas.ci = object()  # a state of a solver that has no CI vectors
    with pytest.raises(UnsupportedError, match="not a CI vector"):
        from_pyscf(cas)
