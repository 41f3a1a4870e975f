"""The average of the local energy over D^2 is <D|H|D>/<D|D>, which PySCF computes from integrals.

Metropolis sampling (N. Metropolis et al., J. Chem. Phys. 21, 1087 (1953)) by moves of one electron; the standard error
is that of the means of independent walkers. Seeded: the same numbers every time.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from pyscf import gto, mcscf, scf

from qwfx.converters.pyscf import from_pyscf
from qwfx.trial import Trial


def sampled(trial: Trial, positions: np.ndarray, n_walkers: int, n_sweeps: int, seed: int) -> tuple[float, float]:
    """Mean of the local energy over Psi^2 of state 0, and its standard error."""
    rng = np.random.default_rng(seed)
    n = trial.n_electrons
    host = positions[rng.integers(len(positions), size=(n_walkers, n))]
    walkers = trial.walkers(host + rng.normal(size=(n_walkers, n, 3)))
    energies = []
    for sweep in range(n_sweeps):
        for which in range(n):
            # Short steps for the cores, long ones for the rest: a mixture is symmetric all the same.
            width = np.where(rng.random(n_walkers) < 0.5, 0.25, 0.9)
            ratio = walkers.ratio(which, walkers.electrons[:, which] + width[:, None] * rng.normal(size=(n_walkers, 3)))
            walkers.accept(np.abs(ratio[0]) ** 2 > rng.random(n_walkers))
        if sweep >= n_sweeps // 4 and sweep % 2:
            energies.append(trial.evaluate(walkers.electrons, rotations=rng).local_energy[0].real)
    assert walkers.refresh() < 1e-6
    means = np.mean(energies, axis=0)
    return float(means.mean()), float(means.std(ddof=1) / np.sqrt(n_walkers))


def lithium_hydride(**more: Any) -> Any:
    return gto.M(atom="Li 0 0 0; H 0 0 3.0", unit="bohr", basis="6-31g", verbose=0, **more)


def check(calculation: Any, energy: float, n_walkers: int = 400, n_sweeps: int = 120, rule: int = 12) -> None:
    wavefunction = from_pyscf(calculation)
    trial = Trial(wavefunction, rule=rule)
    mean, error = sampled(trial, wavefunction.system.positions, n_walkers, n_sweeps, 11)
    assert error < 0.03
    assert abs(mean - energy) < 3 * error, (mean, energy, error)


def test_one_determinant() -> None:
    mf = scf.RHF(lithium_hydride()).run()
    check(mf, mf.e_tot)


def test_open_shell() -> None:
    mf = scf.UHF(gto.M(atom="H 0 0 0; H 0 0 1.1; H 0.2 0.9 0.4", basis="6-31g**", spin=1, verbose=0)).run()
    check(mf, mf.e_tot)


def test_an_active_space() -> None:
    mc = mcscf.CASSCF(scf.RHF(lithium_hydride()).run(), 4, 2).run()
    check(mc, mc.e_tot)


@pytest.mark.parametrize("rule", [6, 12, 50])
def test_a_core_potential(rule: int) -> None:
    """By projectors; with random rotations the expectation does not depend on the rule."""
    mol = gto.M(atom="C 0 0 0; H 0 0 2.1", unit="bohr", basis={"C": "ccecpccpvdz", "H": "6-31g"},
                ecp={"C": "ccecp"}, spin=1, verbose=0)  # fmt: skip
    mf = scf.ROHF(mol).run()
    check(mf, mf.e_tot, rule=rule)
