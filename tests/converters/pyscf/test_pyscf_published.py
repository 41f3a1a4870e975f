"""Energies printed in a textbook, from orbitals written down by hand.

A. Szabo, N. S. Ostlund, Modern Quantum Chemistry (Dover 1996), sections 3.5.2 and 3.5.3: H2 and HeH+ in the minimal
basis. The book's contractions are over normalised primitives and are not normalised themselves (their self-overlap is
1.0000014), so its last digits come out only if the functions of a file are taken literally: PySCF's own STO-3G, which
it normalises, gives -2.860658717 for HeH+.
"""

from __future__ import annotations

import numpy as np
import pytest

from qwfx.converters.pyscf import energy, translate
from qwfx.model import Basis, OrbitalSet, System, Wavefunction

EXPONENTS = np.array([0.109818, 0.405771, 2.22766])
COEFFICIENTS = np.array([0.444635, 0.535328, 0.154329])


def diatomic(numbers, scale, distance, orbital) -> Wavefunction:
    exponents = np.concatenate([EXPONENTS * zeta**2 for zeta in scale])
    return Wavefunction(
        system=System(
            n_up=1,
            n_down=1,
            labels=("left", "right"),
            atomic_numbers=np.array(numbers, np.int32),
            effective_charges=np.array(numbers, float),
            positions=np.array([[0.0, 0.0, 0.0], [0.0, 0.0, distance]]),
        ),
        basis=Basis(
            "gaussian",
            shell_center=np.array([0, 1], np.int32),
            shell_l=np.zeros(2, np.int32),
            shell_monomial=np.ones(2, np.int8),
            primitive_start=np.array([0, 3, 6]),
            exponents=exponents,
            coefficients=np.tile(COEFFICIENTS, 2) * (2 * exponents / np.pi) ** 0.75,
        ),
        orbitals={"spatial": OrbitalSet("both", np.array([orbital]))},
    )


def test_helium_hydride_cation():
    wavefunction = diatomic([2, 1], [2.0925, 1.24], 1.4632, [0.80191698, 0.33680121])
    assert energy(wavefunction) == pytest.approx(-2.860662164, abs=2e-8)
    translation = translate(wavefunction)
    overlap = translation.matrix.T @ translation.mole.intor("int1e_ovlp") @ translation.matrix
    assert overlap[0, 1] == pytest.approx(0.45077041, abs=1e-8)
    assert overlap[0, 0] == pytest.approx(1.0000014260, abs=1e-9)


def test_hydrogen_molecule():
    orbital = [0.54893406, 0.54893406]  # 1/sqrt(2(1+S))
    assert energy(diatomic([1, 1], [1.24, 1.24], 1.4, orbital)) == pytest.approx(-1.1167, abs=5e-5)
    # A hundredth of a bohr is in the fourth digit: the geometry counts.
    assert abs(energy(diatomic([1, 1], [1.24, 1.24], 1.5, orbital)) + 1.1167) > 1e-3
