"""One-electron systems with closed forms, by the evaluator, from `.qwfx` files: local energies, cusps, H2+.

Sources: H. A. Bethe and E. E. Salpeter, Quantum Mechanics of One- and Two-Electron Atoms (1957), section 3 (hydrogenic
states); J. M. Thijssen, Computational Physics, 2nd ed. (2007), table 12.1 (trial functions); L. Pauling and E. B.
Wilson, Introduction to Quantum Mechanics (1935), and B. N. Finkelstein and G. E. Horowitz, Z. Phys. 48, 118 (1928)
(H2+).
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from published_atoms import stored
from reference_cases import ShellData, make_basis

from qwfx.model import OrbitalSet, System, Wavefunction
from qwfx.reference import evaluate_orbitals, overlap

Primitives = tuple[tuple[float, float, int], ...]


def one_electron(
    radial: Any, charge: int, shells: list[ShellData], coefficients: list[list[float]], positions: NDArray[np.float64]
) -> Wavefunction:
    n_atoms = len(positions)
    system = System(
        1, 0, ("X",) * n_atoms, np.full(n_atoms, charge, dtype=np.int32), np.full(n_atoms, float(charge)), positions,
    )  # fmt: skip
    orbitals = OrbitalSet("both", np.array(coefficients))
    return Wavefunction(system, basis=make_basis(radial, shells), orbitals={"spatial": orbitals})


def local_energy(wf: Wavefunction, points: NDArray[np.float64]) -> NDArray[np.float64]:
    """(n, M) ``-lap phi / 2 phi - sum_A Z_A / r_A`` of each orbital, from the literal numbers of the file."""
    assert wf.basis is not None
    values = evaluate_orbitals(wf.basis, wf.system.positions, wf.orbitals["spatial"].coefficients, points)
    distance = np.linalg.norm(points[:, None] - wf.system.positions, axis=2)
    potential = -np.sum(wf.system.effective_charges / distance, axis=1)
    return np.asarray(-0.5 * values[4] / values[0] + potential[:, None])


def hydrogenic(n: int, l: int, Z: int) -> Primitives:
    """Radial part over r^l: ``exp(-Zr/n)`` times the generalised Laguerre polynomial ``L_(n-l-1)^(2l+1)(2Zr/n)``."""
    x = 2 * Z / n
    k = n - l - 1
    return tuple(
        (Z / n, (-1) ** i * math.comb(k + 2 * l + 1, k - i) / math.factorial(i) * x**i, i) for i in range(k + 1)
    )


STATES = [(1, 0), (2, 0), (2, 1), (3, 0), (3, 1), (3, 2), (4, 0), (4, 1), (4, 2), (4, 3)]


@pytest.mark.parametrize("Z", [1, 2, 7])
@pytest.mark.parametrize(("n", "l"), STATES)
def test_local_energy_of_hydrogenic_states_is_constant(n: int, l: int, Z: int, tmp_path: Path) -> None:
    """``E_L = -Z^2/(2 n^2)`` wherever the orbital is not zero."""
    shell = ShellData(0, l, False, hydrogenic(n, l, Z))
    wf = stored(one_electron("slater", Z, [shell], np.eye(2 * l + 1).tolist(), np.zeros((1, 3))), tmp_path)
    points = np.random.default_rng(n + 10 * l).normal(size=(200, 3)) * n / Z
    assert wf.basis is not None
    values = np.abs(evaluate_orbitals(wf.basis, wf.system.positions, np.eye(2 * l + 1), points)[0])
    clear = values > 0.05 * values.max(axis=0)  # off the nodes, where -lap/2phi is 0/0
    energies = local_energy(wf, points)[clear]
    assert len(energies) > 10 * (2 * l + 1)
    np.testing.assert_allclose(energies, -(Z**2) / (2 * n**2), rtol=0, atol=1e-12 * Z**2)


def test_nuclear_cusps_of_hydrogenic_states(tmp_path: Path) -> None:
    """``R'/R = -Z/(l+1)`` at the nucleus (R over r^l): T. Kato (1957); R. T Pack and W. Byers Brown (1966)."""
    Z = 3
    for n, l in STATES:
        shell = ShellData(0, l, False, hydrogenic(n, l, Z))
        wf = stored(one_electron("slater", Z, [shell], np.eye(2 * l + 1).tolist(), np.zeros((1, 3))), tmp_path)
        assert wf.basis is not None
        direction = np.array([[0.48, -0.6, 0.64]])
        r = np.array([[1e-4], [2e-4]])
        values = evaluate_orbitals(wf.basis, wf.system.positions, np.eye(2 * l + 1), r * direction)
        radial = values[0] / r**l
        slope = np.einsum("x,xnf->nf", direction[0], values[1:4]) / r**l - l * radial / r
        ratio = slope / radial
        at_zero = 2 * ratio[0] - ratio[1]  # the next order falls linearly in r
        np.testing.assert_allclose(at_zero, -Z / (l + 1), rtol=0, atol=2e-6)


# psi, its local energy at distance r for charge Z, exponent a; energies and variances: J. M. Thijssen, table 12.1.
TRIALS: list[tuple[str, Any, ShellData, Any]] = [
    ("1s Slater", "slater", ShellData(0, 0, False, ((0.8, 1.0, 0),)), lambda a, Z, r: -a * a / 2 + (a - Z) / r),
    ("2p Slater", "slater", ShellData(0, 1, False, ((0.8, 1.0, 0),)), lambda a, Z, r: -a * a / 2 + (2 * a - Z) / r),
    (
        "2s Slater", "slater", ShellData(0, 0, False, ((0.8, 1.0, 1),)),
        lambda a, Z, r: -a * a / 2 + (2 * a - Z) / r - 1 / r**2,
    ),
    (
        "s Gaussian", "gaussian", ShellData(0, 0, False, ((0.8, 1.0, 0),)),
        lambda a, Z, r: 3 * a - 2 * a * a * r * r - Z / r,
    ),
    (
        "p Gaussian", "gaussian", ShellData(0, 1, True, ((0.8, 1.0, 0),)),
        lambda a, Z, r: 5 * a - 2 * a * a * r * r - Z / r,
    ),
    (
        "d Gaussian", "gaussian", ShellData(0, 2, False, ((0.8, 1.0, 0),)),
        lambda a, Z, r: 7 * a - 2 * a * a * r * r - Z / r,
    ),
]  # fmt: skip


@pytest.mark.parametrize(("name", "radial", "shell", "formula"), TRIALS, ids=[t[0] for t in TRIALS])
def test_local_energy_of_trials(name: str, radial: Any, shell: ShellData, formula: Any, tmp_path: Path) -> None:
    size = 2 * shell.l + 1
    wf = stored(one_electron(radial, 2, [shell], np.eye(size).tolist(), np.zeros((1, 3))), tmp_path)
    points = np.random.default_rng(2).normal(size=(50, 3))
    wanted = formula(0.8, 2, np.linalg.norm(points, axis=1))
    for orbital in local_energy(wf, points).T:
        np.testing.assert_allclose(orbital, wanted, rtol=1e-11)


@pytest.mark.parametrize("exponent", [0.8, 0.9, 1.0, 1.1, 1.2])
def test_energy_and_variance_of_one_slater_function(exponent: float, tmp_path: Path) -> None:
    """``E = a^2/2 - aZ``, variance ``a^2 (a-Z)^2``: -0.48 and 0.0256 for a = 0.8, and so on."""
    shell = ShellData(0, 0, False, ((exponent, 1.0, 0),))
    wf = stored(one_electron("slater", 1, [shell], [[1.0]], np.zeros((1, 3))), tmp_path)
    t, weights = np.polynomial.laguerre.laggauss(8)  # r^2 psi^2 E_L^2 is a polynomial times exp(-2ar)
    r = t / (2 * exponent)
    energies = local_energy(wf, np.stack([np.zeros(8), np.zeros(8), r], axis=1))[:, 0]
    weights = weights * r**2 / np.sum(weights * r**2)
    mean = float(weights @ energies)
    assert abs(mean - (exponent**2 / 2 - exponent)) < 1e-13
    assert abs(weights @ (energies - mean) ** 2 - exponent**2 * (exponent - 1) ** 2) < 1e-13


# zeta, distance, sign of the combination, energy (J, K, S by closed forms; the published digits are -0.5538, -0.5865).
H2_PLUS = [
    (1.0, 2.0, 1, -0.553771495318),
    (1.0, 2.4928, 1, -0.564830992),
    (1.23869779, 2.0, 1, -0.586505992),
    (1.0, 2.0, -1, -0.160853965597),
]


@pytest.mark.parametrize(("zeta", "distance", "sign", "energy"), H2_PLUS)
def test_hydrogen_molecule_ion(zeta: float, distance: float, sign: int, energy: float, tmp_path: Path) -> None:
    """``int psi H psi / int psi^2`` with values and Laplacians of the evaluator, in prolate spheroidal coordinates."""
    norm = (zeta**3 * 4) ** 0.5
    positions = np.array([[0.3, -0.4, -distance / 2], [0.3, -0.4, distance / 2]])
    shells = [ShellData(center, 0, False, ((zeta, norm, 0),)) for center in (0, 1)]
    wf = stored(one_electron("slater", 1, shells, [[1.0, float(sign)]], positions), tmp_path)
    assert wf.basis is not None
    S = overlap(wf.basis, positions)
    w = zeta * distance
    assert abs(S[0, 1] - math.exp(-w) * (1 + w + w * w / 3)) < 1e-15
    half, (t, t_weights) = distance / 2, np.polynomial.laguerre.laggauss(12)
    eta, eta_weights = np.polynomial.legendre.leggauss(30)
    xi = 1 + t / w
    grid_xi, grid_eta = np.meshgrid(xi, eta, indexing="ij")
    rho = half * np.sqrt((grid_xi**2 - 1) * (1 - grid_eta**2)).reshape(-1)
    points = np.stack([rho, np.zeros_like(rho), half * (grid_xi * grid_eta).reshape(-1)], axis=1) + [0.3, -0.4, 0.0]
    volume = 2 * math.pi * half**3 * (grid_xi**2 - grid_eta**2)
    weights = (np.outer(t_weights * np.exp(t) / w, eta_weights) * volume).reshape(-1)
    density = evaluate_orbitals(wf.basis, positions, wf.orbitals["spatial"].coefficients, points)[0, :, 0] ** 2
    assert abs(weights @ density / (2 + 2 * sign * S[0, 1]) - 1) < 1e-12
    found = weights @ (density * local_energy(wf, points)[:, 0]) / (weights @ density) + 1 / distance
    assert abs(found - energy) < (1e-11 if energy in (-0.553771495318, -0.160853965597) else 1e-9)
