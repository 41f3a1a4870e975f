"""The factor to start from: cusps by differences of the local energy, and helium with its published orbital."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from atoms import helium
from hypothesis import given
from hypothesis import strategies as st
from published_atoms import BUNGE

from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.kernels.jastrow import Jastrow
from qwfx.model import Cell, System, Wavefunction
from qwfx.reference.jastrow import radial_function
from qwfx.trial import Trial
from qwfx.trial.starting import starting_jastrow


def system_of(n_up: int, n_down: int, cell: Cell | None = None) -> System:
    return System(n_up, n_down, ("X",), np.array([6], "i4"), np.array([6.0]), np.zeros((1, 3)), cell)


@given(n_up=st.integers(0, 3), n_down=st.integers(0, 3), cutoff=st.floats(0.1, 30.0))
def test_every_pair_has_its_cusp(n_up: int, n_down: int, cutoff: float) -> None:
    """Slopes 1/2 and 1/4 (Kato 1957; Pack and Byers Brown 1966) for pairs that there are, no row for others."""
    system = system_of(n_up, n_down)
    terms = starting_jastrow(system, cutoff)
    wanted = {"up_up": 0.25 * (n_up > 1), "up_down": 0.5 * (n_up * n_down > 0), "down_down": 0.25 * (n_down > 1)}
    assert Jastrow(Wavefunction(system, jastrow=terms)).slopes() == pytest.approx(wanted, rel=1e-14)
    words = [str(word) for term in terms.values() for word in term.members["channel"]]
    assert words == [word for word, slope in wanted.items() if slope]
    for term in terms.values():
        for row in range(len(words)):
            u = radial_function(term, row)
            slopes = [u(cutoff * x)[1] for x in np.linspace(0, 1, 20)]
            assert np.all(np.diff(slopes) < 0)  # it rises, ever less steeply, to 0 at the cutoff
            assert slopes[-1] == 0


def test_the_local_energy_stays_finite_where_electrons_meet() -> None:
    """Two electrons at a distance s, both 0.8 bohr from a nucleus: 1/s cancels, to the order of s, or does not."""

    def spread(with_factor: bool) -> float:
        wavefunction = helium([1.7], [1], [1.0])
        if with_factor:
            wavefunction = replace(wavefunction, jastrow=starting_jastrow(wavefunction.system))
        trial = Trial(wavefunction)
        half = np.array([1e-4, 1e-5]) / 2
        places = np.array([[[0.8, h, 0.0], [0.8, -h, 0.0]] for h in half])
        near, nearer = trial.evaluate(places).local_energy[0]
        return float(nearer - near)

    assert spread(False) == pytest.approx(1e5 - 1e4, rel=1e-6)
    assert abs(spread(True)) < 1e-2


def energy_and_variance(wavefunction: Wavefunction) -> tuple[float, float]:
    """Of two electrons in an S state by Gauss-Legendre quadrature in perimetric coordinates.

    a = -r1 + r2 + u, b = r1 - r2 + u and c = r1 + r2 - u (C. L. Pekeris, Phys. Rev. 112, 1649 (1958)), volume r1 r2 u.
    """
    x, weight = np.polynomial.legendre.leggauss(36)
    x, weight = (1 + x) / 2, weight / 2
    one, step = 28 * x**2, 56 * x * weight  # where a coordinate is 28 bohr, nothing is left of the density
    a, b, c = np.meshgrid(one, one, one, indexing="ij")
    w = np.prod(np.meshgrid(step, step, step, indexing="ij"), axis=0)
    r1, r2, u = (b + c) / 2, (a + c) / 2, (a + b) / 2
    half = np.sqrt(a * b / (4 * r1 * r2))  # sine of half the angle at the nucleus
    zero = np.zeros_like(r1)
    second = [r2 * 2 * half * np.sqrt(1 - half**2), zero, r2 * (1 - 2 * half**2)]
    places = np.stack([np.stack([zero, zero, r1], -1), np.stack(second, -1)], -2)
    trial, electrons = Trial(wavefunction), places.reshape(-1, 2, 3)
    log_abs = trial.log(electrons)[0][0]
    p = (w * r1 * r2 * u).ravel() * np.exp(2 * (log_abs - log_abs.max()))
    some = p > 1e-20 * p.max()
    p = p[some] / p[some].sum()
    local = trial.evaluate(electrons[some]).local_energy[0]
    energy = float(p @ local)
    return energy, float(p @ (local - energy) ** 2)


def test_it_lowers_the_energy_of_helium() -> None:
    """Of the Hartree-Fock orbital of C. F. Bunge et al., At. Data Nucl. Data Tables 53, 113 (1993): -2.861679993.

    The exact energy is -2.903724 (C. L. Pekeris, Phys. Rev. 115, 1216 (1959)).
    """
    atom = BUNGE["He"]
    powers, exponents = zip(*atom.s, strict=True)
    wavefunction = helium(list(exponents), list(powers), list(atom.s_orbitals[0]))
    before, spread = energy_and_variance(wavefunction)
    assert before == pytest.approx(-2.861679993, abs=1e-4)
    energy, variance = energy_and_variance(replace(wavefunction, jastrow=starting_jastrow(wavefunction.system)))
    assert -2.903724 < energy < before - 0.01
    assert variance < spread / 2


def test_no_pairs_no_terms() -> None:
    assert starting_jastrow(system_of(1, 0)) == {}
    assert starting_jastrow(system_of(0, 0)) == {}


@pytest.mark.parametrize("cutoff", [0.0, -1.0, float("nan"), float("inf")])
def test_a_cutoff_that_is_no_length(cutoff: float) -> None:
    with pytest.raises(EvaluationError, match="length above 0"):
        starting_jastrow(system_of(2, 1), cutoff)


def test_a_periodic_system() -> None:
    with pytest.raises(UnsupportedError, match="periodic"):
        starting_jastrow(system_of(1, 1, Cell(np.eye(3), np.zeros((1, 3)))))
