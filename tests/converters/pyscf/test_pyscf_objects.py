"""What is taken from a live object: strings, occupations, irreps, notes; and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
from pyscf_cases import HYDROXYL, METHYLENE, WATER, molecule, orbital_energies

from qwfx.converters.pyscf import energy, from_pyscf, to_mean_field
from qwfx.errors import ConversionError, UnsupportedError


def occupied(words) -> list[int]:
    bits = sum(int(word) << (64 * position) for position, word in enumerate(words))
    return [p for p in range(bits.bit_length()) if bits >> p & 1]


def test_restricted_open_shell_has_one_set_and_two_strings(calculation):
    mf = calculation("rohf")
    wavefunction = from_pyscf(mf, witness=False)
    assert (wavefunction.system.n_up, wavefunction.system.n_down) == (5, 3)
    orbitals = wavefunction.orbitals["spatial"]
    assert list(wavefunction.orbitals) == ["spatial"]
    assert orbitals.spin == "both"
    np.testing.assert_array_equal(orbitals.energies, np.asarray(orbital_energies(mf)))
    np.testing.assert_array_equal(orbitals.occupations, mf.mo_occ)
    expansion = wavefunction.expansion
    assert (expansion.up_set, expansion.down_set) == ("spatial", "spatial")
    assert occupied(expansion.up_strings[0]) == [0, 1, 2, 3, 4]
    assert occupied(expansion.down_strings[0]) == [0, 1, 2]
    assert expansion.up_strings.dtype == np.uint64
    assert expansion.row_start.tolist() == [0, 1]
    assert expansion.columns.tolist() == [0]
    assert expansion.coefficients.tolist() == [[1.0]]


def test_unrestricted_has_two_sets(calculation):
    wavefunction = from_pyscf(calculation("uhf"), witness=False)
    assert {name: s.spin for name, s in wavefunction.orbitals.items()} == {"up": "up", "down": "down"}
    assert occupied(wavefunction.expansion.up_strings[0]) == [0, 1, 2, 3, 4]
    assert occupied(wavefunction.expansion.down_strings[0]) == [0, 1, 2, 3]


def test_no_electron_of_one_spin(calculation):
    wavefunction = from_pyscf(calculation("anion-no-down"), witness=False)
    assert wavefunction.system.n_down == 0
    assert wavefunction.expansion.down_strings.tolist() == [[0]]


def test_strings_longer_than_a_word(calculation):
    mf = calculation("general-contraction")
    n = mf.mo_coeff.shape[1]
    assert n > 64
    moved = np.roll(np.arange(n), -1)  # the occupied orbital comes last
    wavefunction = from_pyscf(mf, mo_coeff=mf.mo_coeff[:, moved], mo_occ=mf.mo_occ[moved], witness=False)
    assert wavefunction.expansion.up_strings.shape == (1, -(-n // 64))
    assert occupied(wavefunction.expansion.up_strings[0]) == [n - 1]
    assert to_mean_field(wavefunction).mo_occ[-1] == 2


def test_irreps_where_symmetry_is_on(calculation):
    orbitals = from_pyscf(calculation("symmetry"), witness=False).orbitals["spatial"]
    assert orbitals.irreps[:4] == ("A1", "A1", "B2", "A1")
    assert from_pyscf(calculation("rhf"), witness=False).orbitals["spatial"].irreps is None


def test_orbitals_that_mix_irreps_are_told(calculation):
    mf = calculation("symmetry")
    mixed = np.array(mf.mo_coeff)
    mixed[:, [0, 2]] = mixed[:, [0, 2]] @ np.array([[0.6, -0.8], [0.8, 0.6]])
    wavefunction = from_pyscf(mf, mo_coeff=mixed, mo_occ=mf.mo_occ, witness=False)
    assert wavefunction.orbitals["spatial"].irreps is None
    assert any("do not have the symmetry C2v" in note for note in wavefunction.provenance.steps[0]["notes"])


def test_fractional_occupations_give_no_determinant(calculation):
    mf = calculation("rhf")
    occupations = np.array(mf.mo_occ)
    occupations[4:6] = 1.4, 0.6
    wavefunction = from_pyscf(mf, mo_coeff=mf.mo_coeff, mo_occ=occupations, witness=False)
    assert wavefunction.expansion is None
    assert wavefunction.orbitals["spatial"].occupations[4] == 1.4
    assert any("not those of a single determinant" in note for note in wavefunction.provenance.steps[0]["notes"])


def test_provenance_names_the_programs_and_the_method_is_as_asked(calculation):
    import pyscf

    wavefunction = from_pyscf(calculation("rhf"), method="RHF", witness=False)
    (step,) = wavefunction.provenance.steps
    assert set(step) == {"activity", "agent", "time", "used", "generated", "notes"}
    assert pyscf.__version__ in step["agent"]
    assert wavefunction.witness is None


def test_bare_molecule_has_no_orbitals():
    wavefunction = from_pyscf(molecule(atom=WATER, basis="sto-3g"))
    assert not wavefunction.orbitals
    assert wavefunction.witness is None
    assert wavefunction.basis.n_functions == 7
    assert wavefunction.energies.quantity == ("nuclear-repulsion",)


def test_unconverged_is_said():
    from pyscf import scf

    mf = scf.RHF(molecule(atom=WATER, basis="sto-3g"))
    mf.max_cycle = 0
    mf.kernel()
    notes = from_pyscf(mf, witness=False).provenance.steps[0]["notes"]
    assert "the self-consistent field is not converged" in notes


def test_grids_that_the_text_of_a_method_cannot_hold_are_noted():
    from pyscf import dft

    mf = dft.RKS(molecule(atom=WATER, basis="sto-3g"), xc="lda,vwn")
    mf.grids.prune = None
    mf.grids.atom_grid = {"O": (20, 50), "H": (10, 38)}
    mf.max_cycle = 0
    mf.kernel()
    wavefunction = from_pyscf(mf, witness=False)
    notes = " ".join(wavefunction.provenance.steps[0]["notes"])
    for text in (notes, wavefunction.energies.method[0]):
        assert "grid with its own prune" in text
        assert "grid that differs from atom to atom" in text
    with pytest.raises(UnsupportedError, match="'grid with its own prune' of the method is not known"):
        energy(wavefunction)


def test_auxiliary_basis_without_a_name_is_noted():
    from pyscf import df, scf

    mol = molecule(atom=WATER, basis="sto-3g")
    mf = scf.RHF(mol).density_fit(auxbasis=df.aug_etb(mol)).run()
    wavefunction = from_pyscf(mf, witness=False)
    assert wavefunction.energies.method[0] == "RHF (density fitting with an auxiliary basis without a name)"
    with pytest.raises(UnsupportedError, match="without a name"):
        energy(wavefunction)


def _ghf():
    from pyscf import scf

    return scf.GHF(molecule(atom=HYDROXYL, basis="sto-3g", spin=1))


def _four_component():
    from pyscf import scf

    return scf.DHF(molecule(atom=HYDROXYL, basis="sto-3g", spin=1))


def _spinor_x2c():
    from pyscf import x2c

    return x2c.UHF(molecule(atom=HYDROXYL, basis="sto-3g", spin=1))


def _periodic():
    from pyscf.pbc import gto, scf

    cell = gto.M(atom="He 0 0 0", a=np.eye(3) * 4, basis="sto-3g", verbose=0)
    return scf.RHF(cell)


def _solvent():
    from pyscf import scf

    return scf.RHF(molecule(atom=WATER, basis="sto-3g")).ddCOSMO()


def _external_charges():
    from pyscf import qmmm, scf

    return qmmm.mm_charge(scf.RHF(molecule(atom=WATER, basis="sto-3g")), [[0, 0, 9.0]], [0.5])


def _model_hamiltonian():
    from pyscf import scf

    mf = scf.RHF(molecule(atom=WATER, basis="sto-3g"))
    mf.get_hcore = lambda *_: np.eye(7)
    return mf


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (_ghf, "mix spin up and spin down"),
        (_four_component, "mix spin up and spin down"),
        (_spinor_x2c, "mix spin up and spin down"),
        (_periodic, "periodic"),
        (_solvent, "solvent"),
        (_external_charges, "external charges"),
        (_model_hamiltonian, "replaced by the user"),
        (lambda: molecule(atom="He 0 0 0", basis="sto-3g", nucmod="G"), "finite size"),
    ],
    ids=["ghf", "dhf", "x2c", "periodic", "solvent", "charges", "model", "finite-nuclei"],
)
@pytest.mark.filterwarnings("ignore::UserWarning")
def test_kinds_that_the_format_cannot_hold_are_refused(make, message):
    with pytest.raises(UnsupportedError, match=message):
        from_pyscf(make())


def test_range_separated_repulsion_is_refused():
    mol = molecule(atom="He 0 0 0", basis="sto-3g")
    mol.omega = 0.3
    with pytest.raises(UnsupportedError, match="range-separated"):
        from_pyscf(mol)


def _not_run():
    from pyscf import scf

    return from_pyscf(scf.RHF(molecule(atom=WATER, basis="sto-3g")))


def _not_built():
    from pyscf import gto

    return from_pyscf(gto.Mole())


@pytest.mark.parametrize(
    ("convert", "message"),
    [
        (_not_run, "no orbitals; .*run kernel"),
        (_not_built, "not built"),
        (lambda: from_pyscf("water"), "no mean-field calculation"),
        (lambda: from_pyscf(molecule(atom=WATER, basis="sto-3g"), mo_coeff=np.eye(6)), "6 coefficients each"),
        (lambda: from_pyscf(molecule(atom=WATER, basis="sto-3g"), mo_coeff=np.full((7, 2), np.nan)), "not all finite"),
        (
            lambda: from_pyscf(molecule(atom=WATER, basis="sto-3g"), mo_coeff=np.eye(7), mo_occ=np.ones(5)),
            "occupations have the shapes",
        ),
        (lambda: from_pyscf(molecule(atom=WATER, basis="sto-3g"), mo_coeff=np.ones(7)), "shape"),
    ],
    ids=["not-run", "not-built", "no-object", "other-basis", "nan", "occupations", "rank"],
)
def test_objects_that_do_not_make_sense_are_refused(convert, message):
    with pytest.raises(ConversionError, match=message):
        convert()


def test_methylene_triplet_is_read_with_its_spin():
    wavefunction = from_pyscf(molecule(atom=METHYLENE, basis="sto-3g", spin=2))
    assert (wavefunction.system.n_up, wavefunction.system.n_down) == (5, 3)
