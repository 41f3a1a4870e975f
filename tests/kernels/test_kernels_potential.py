"""Potential energies against plain sums, closed forms and PySCF's integrals."""

from __future__ import annotations

import numpy as np
import pytest
from pyscf import gto

from qwfx.converters.pyscf import from_pyscf
from qwfx.errors import EvaluationError
from qwfx.kernels.potential import Potential
from qwfx.model import Potentials, System, Wavefunction
from qwfx.reference.potential import coulomb, local_part, projected, radial_potential
from qwfx.reference.sphere import random_rotations, sphere_rule

NUCLEI = np.array([[0.0, 0.0, 0.0], [0.4, 1.6, -1.1], [2.0, 0.3, 0.9]])


def wavefunction(n: int = 4) -> Wavefunction:
    """Two core potentials, one of them without projectors, and a ghost."""
    potentials = Potentials(
        np.array([1, 0, 1, 1, 0, 1, 1], "i4"), np.array([2, -1, -1, 0, -1, 0, 1], "i4"),
        np.array([0, -1, 1, 0, 2, -2, -1], "i4"), np.array([0.7, 1.9, 2.1, 0.8, 1.3, 2.5, 0.9]),
        np.array([0.5, 4.0, -3.0, 7.0, -0.6, 0.3, 2.2]),
    )  # fmt: skip
    system = System(n, 0, ("A", "B", "G"), np.array([6, 8, 1], "i4"), np.array([4.0, 6.0, 0.0]), NUCLEI)
    return Wavefunction(system, potentials)


def test_local_part_is_the_plain_sum() -> None:
    wf = wavefunction()
    x = np.random.default_rng(1).normal(size=(20, 4, 3))
    assert wf.potentials is not None
    expected = coulomb(x, NUCLEI, wf.system.effective_charges) + local_part(wf.potentials, NUCLEI, x)
    assert np.allclose(Potential(wf).local(x), expected, rtol=1e-13)
    far = x + 200.0  # exponentials underflow, quietly
    assert np.allclose(Potential(wf).local(far), coulomb(far, NUCLEI, wf.system.effective_charges), rtol=1e-13)


@pytest.mark.parametrize("n", [6, 12, 18, 26, 50])
def test_projectors_are_the_plain_sum(n: int) -> None:
    wf = wavefunction()
    rng = np.random.default_rng(2)
    x = rng.normal(size=(3, 4, 3))
    turns = random_rotations(rng, 3)

    def function(points: np.ndarray) -> np.ndarray:
        return np.asarray(np.exp(-0.3 * ((points - 0.2) ** 2).sum(axis=-1)) * (1 + points[..., 0]))

    assert wf.potentials is not None
    for rotations in (None, turns):
        points = Potential(wf, rule=n).nonlocal_points(x, rotations)
        mine = np.zeros((3, 4))
        np.add.at(mine, (points.walker, points.electron), (points.weights * function(points.places)).sum(axis=1))
        for w in range(3):
            for i in range(4):
                turn = None if rotations is None else rotations[w]
                told = projected(wf.potentials, NUCLEI, x[w, i], sphere_rule(n), function, turn)
                assert mine[w, i] == pytest.approx(told, rel=1e-12, abs=1e-9)


def test_electrons_far_away_are_left_out() -> None:
    potential = Potential(wavefunction())
    x = np.array([[[0.4, 1.6, -1.0], [30.0, 0, 0], [0, 0, 40.0], [0, 0.1, 0]]])
    points = potential.nonlocal_points(x)
    assert set(points.electron.tolist()) == {0, 3}
    everything = Potential(Wavefunction(wavefunction().system))
    assert not everything.has_projectors
    assert everything.nonlocal_points(x).places.shape == (0, 12, 3)
    with pytest.raises(EvaluationError, match="6, 12, 18, 26, 50"):
        Potential(wavefunction(), rule=10)


# (2l+1) i_l(2 a r R) P_l(cos g) exp(-2 a r R cos g), a = 0.5, r = 0.6, R = 1.4, cos g = 0.3: what a projector with
# V_l = 1 makes of exp(-a |r - R|^2), from its expansion in spherical Bessel functions (DLMF, section 10.60).
EXACT = {0: 0.871928161569, 1: 0.210038814486, 2: -0.070154464560}


@pytest.mark.parametrize(
    ("n", "values"),
    [
        (6, (0.87323937, 0.19794531, -0.17796170)), (12, (0.87193347, 0.21022141, -0.06876008)),
        (18, (0.87192764, 0.21009715, -0.06937773)), (26, (0.87192816, 0.21003844, -0.07015214)),
        (50, (0.87192816, 0.21003881, -0.07015446)),
    ],
)  # fmt: skip
def test_what_the_rule_leaves_out(n: int, values: tuple[float, float, float]) -> None:
    """Each rule on a Gaussian off the centre, against the closed form: the error of its finite degree."""
    a, r, R, cosine = 0.5, 0.6, 1.4, 0.3
    elsewhere = R * np.array([np.sqrt(1 - cosine**2), 0.0, cosine])
    system = System(1, 0, ("A",), np.array([6], "i4"), np.array([4.0]), np.zeros((1, 3)))
    x = np.array([[[0.0, 0.0, r]]])

    def gaussian(points: np.ndarray) -> np.ndarray:
        return np.asarray(np.exp(-a * ((points - elsewhere) ** 2).sum(axis=-1)))

    for l, told in enumerate(values):
        one = Potentials(np.zeros(1, "i4"), np.array([l], "i4"), np.zeros(1, "i4"), np.array([1e-12]), np.ones(1))
        points = Potential(Wavefunction(system, one), rule=n).nonlocal_points(x)
        mine = float((points.weights * gaussian(points.places)).sum() / gaussian(x[0])[0])
        assert mine == pytest.approx(told, abs=1e-8)
        if n == 50:
            assert mine == pytest.approx(EXACT[l], abs=2e-8)


def carbon() -> Wavefunction:
    from pyscf import scf

    mol = gto.M(atom="C 0 0 0", basis={"C": [[0, [0.5, 1.0]], [1, [0.7, 1.0]], [2, [0.9, 1.0]]]}, ecp={"C": "ccecp"},
                verbose=0)  # fmt: skip
    return from_pyscf(scf.RHF(mol).run(max_cycle=0))


def test_a_real_core_potential_at_a_point() -> None:
    """ccECP of carbon: U_loc - 4/r and U_s at three distances."""
    p = carbon().potentials
    assert p is not None
    r = np.array([0.1, 0.5, 1.0])
    assert np.allclose(
        radial_potential(p, 0, -1, r) - 4 / r, [-24.0499853726, -8.3252379085, -4.0030704224], atol=1e-9
    )
    assert np.allclose(radial_potential(p, 0, 0, r), [48.2404980745, 7.4903031996, 0.0222150960], atol=1e-9)


@pytest.mark.parametrize("off", [0.0, 0.9])
def test_integrals_over_a_core_potential_are_those_of_pyscf(off: float) -> None:
    """<f|U|f> of a Gaussian on the centre and off it, by quadrature over radius and sphere."""
    wf = carbon()
    a = 0.6
    mol = gto.M(atom="C 0 0 0", basis={"C": [[0, [0.5, 1.0]]]}, ecp={"C": "ccecp"}, verbose=0, unit="bohr")
    other = gto.M(atom=f"X 0 0 {off}", basis={"X": [[0, [a, 1.0]]]}, verbose=0, unit="bohr")
    both = gto.conc_mol(mol, other)
    expected = float(both.intor("ECPscalar")[-1, -1])
    norm = (2 * a / np.pi) ** 0.75

    def f(points: np.ndarray) -> np.ndarray:
        return np.asarray(norm * np.exp(-a * ((points - [0, 0, off]) ** 2).sum(axis=-1)))

    # Gauss-Legendre for the radius and the polar angle of the electron; the integrand depends on nothing else.
    x, wx = np.polynomial.legendre.leggauss(80)
    r, wr = 3.5 * (x + 1), 3.5 * wx
    c, wc = np.polynomial.legendre.leggauss(24)
    total = 0.0
    potential = Potential(Wavefunction(System(1, 0, ("C",), np.array([6], "i4"), np.array([0.0]), np.zeros((1, 3))),
                                       wf.potentials), rule=50)  # fmt: skip
    for radius, weight in zip(r, wr, strict=True):
        electrons = radius * np.stack([np.sqrt(1 - c**2), 0 * c, c], axis=1)[:, None]
        own = f(electrons[:, 0])
        value = potential.local(electrons) * own
        points = potential.nonlocal_points(electrons)
        np.add.at(value, points.walker, (points.weights * f(points.places)).sum(axis=1))
        total += weight * radius**2 * 2 * np.pi * float((wc * own * value).sum())
    assert total == pytest.approx(expected, abs=2e-7)
