"""Core potentials: the stored table against closed forms, both ways, and the library."""

from __future__ import annotations

from dataclasses import replace
from math import gamma

import numpy as np
import pytest
from pyscf_cases import molecule

from qwfx.converters.pyscf import from_pyscf, potentials_from_library, to_mole
from qwfx.errors import UnsupportedError
from qwfx.model import Potentials


def gaussian_moment(power: int, exponent: float) -> float:
    """int_0^inf r^power exp(-exponent r^2) dr."""
    return gamma((power + 1) / 2) / (2 * exponent ** ((power + 1) / 2))


def matrix_element(potentials: Potentials, l: int, exponent: float) -> float:
    """<g|V|g> of the normalised on-centre Gaussian r^l exp(-a r^2), straight from FORMAT.md's formula."""
    norm = gaussian_moment(2 * l + 2, 2 * exponent)
    total = 0.0
    for channel, power, a, c in zip(
        potentials.channel, potentials.power, potentials.exponent, potentials.coefficient, strict=True
    ):
        if channel in (-1, l):
            total += c * gaussian_moment(2 * l + 2 + int(power), 2 * exponent + a)
    return total / norm


BASIS = {"C": [[0, [0.5, 1.0]], [1, [0.7, 1.0]], [2, [0.9, 1.0]]]}
# Analytic integrals of the table that PySCF's library has under ccecp for carbon.
CLOSED_FORMS = {0: 1.976450760611971, 1: -0.020047979842980, 2: -0.006339235638350}


def test_stored_table_gives_the_closed_forms():
    table, cores = potentials_from_library({"C": "ccecp"}, ["C"], [6])
    assert cores.tolist() == [2]
    for l, expected in CLOSED_FORMS.items():
        assert matrix_element(table, l, BASIS["C"][l][1][0]) == pytest.approx(expected, abs=1e-14)


def test_table_reaches_pyscf_and_comes_back():
    mol = molecule(atom="C 0 0 0", basis=BASIS, ecp={"C": "ccecp"})
    wavefunction = from_pyscf(mol)
    table, _ = potentials_from_library({"C": "ccecp"}, ["C"], [6])
    assert wavefunction.system.effective_charges.tolist() == [4.0]

    def rows(potentials):
        columns = (getattr(potentials, n).tolist() for n in ("center", "channel", "power", "exponent", "coefficient"))
        return sorted(zip(*columns, strict=True))

    assert rows(wavefunction.potentials) == rows(table)
    mole = to_mole(wavefunction)
    integrals = mole.intor("ECPscalar")
    for l, position in ((0, 0), (1, 1), (2, 4)):
        assert integrals[position, position] == pytest.approx(CLOSED_FORMS[l], abs=1e-12)
    assert rows(from_pyscf(mole).potentials) == rows(table)
    np.testing.assert_allclose(integrals, mol.intor("ECPscalar"), rtol=0, atol=1e-14)


@pytest.mark.parametrize("channel", range(-1, 6))
@pytest.mark.parametrize("power", range(-2, 7))
def test_every_power_and_channel_that_is_handed_to_pyscf(channel, power):
    l = max(channel, 0)
    mol = molecule(atom="Ne 0 0 0", basis={"Ne": [[l, [1.3, 1.0]]]})
    table = Potentials(
        np.zeros(2, np.int32),
        np.full(2, channel, np.int32),
        np.full(2, power, np.int32),
        np.array([0.7, 2.1]),
        np.array([2.0, -0.5]),
    )
    wavefunction = from_pyscf(mol)
    system = replace(wavefunction.system, effective_charges=np.array([8.0]), n_up=4, n_down=4)
    mole = to_mole(replace(wavefunction, system=system, potentials=table))
    assert mole.atom_nelec_core(0) == 2
    assert mole.intor("ECPscalar")[0, 0] == pytest.approx(matrix_element(table, l, 1.3), abs=1e-10)


@pytest.mark.parametrize(("channel", "power"), [(6, 0), (0, 7), (-1, -3), (-2, 0)])
def test_terms_outside_pyscf_are_refused(channel, power):
    wavefunction = from_pyscf(molecule(atom="Ne 0 0 0", basis="sto-3g"))
    one = np.ones(1)
    table = Potentials(
        np.zeros(1, np.int32), np.array([channel], np.int32), np.array([power], np.int32), one, one
    )
    with pytest.raises(UnsupportedError, match=rf"r\^{power} in channel {channel}"):
        to_mole(replace(wavefunction, potentials=table))


def test_spin_orbit_terms_are_left_out_and_said():
    ecp = {"Ne": [2, [[-1, [[], [], [[1.0, 0.5]]]], [1, [[], [], [[0.8, 1.5, 0.25]]]]]]}
    wavefunction = from_pyscf(molecule(atom="Ne 0 0 0", basis="sto-3g", ecp=ecp))
    assert wavefunction.potentials.coefficient.tolist() == [0.5, 1.5]
    assert any("spin-orbit" in note for note in wavefunction.provenance.steps[0]["notes"])


def test_potential_of_a_label_comes_before_that_of_its_element():
    table, cores = potentials_from_library(
        {"I2": "lanl2dz", "i": "def2-svp", "default": "ccecp"}, ["I1", "I2", "H1", "gh"], [53, 53, 1, 0]
    )
    assert cores.tolist() == [28, 46, 0, 0]
    assert set(table.center.tolist()) == {0, 1, 2}  # the default has a potential of hydrogen without a core


def test_default_passes_over_elements_without_a_potential():
    table, cores = potentials_from_library({"default": "def2-svp"}, ["I", "H"], [53, 1])
    assert cores.tolist() == [28, 0]
    assert set(table.center.tolist()) == {0}
    nothing, cores = potentials_from_library({"default": "def2-svp"}, ["H"], [1])
    assert nothing is None
    assert cores.tolist() == [0]


@pytest.mark.parametrize(
    ("names", "message"),
    [
        ({"H": "def2-svp"}, "no core potential 'def2-svp' of H"),
        ({"I": "nonsense"}, "'nonsense' of I"),
        ({"Xe": "def2-svp"}, "no atom is called xe"),
    ],
)
def test_names_that_the_library_lacks_are_refused(names, message):
    with pytest.raises(UnsupportedError, match=message):
        potentials_from_library(names, ["I", "H"], [53, 1])
