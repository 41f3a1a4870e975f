"""Local energies with closed forms, and helium by quadrature against published variational energies.

Tables: J. M. Thijssen, Computational Physics (2007), Table 12.1; the quadrature is ours, in perimetric coordinates
(C. L. Pekeris, Phys. Rev. 112, 1649 (1958)), with the reference values of the same functions from an evaluation that
shares nothing with this package.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from atoms import helium, hydrogenic, pair_term
from numpy.typing import NDArray
from published_atoms import BUNGE

from qwfx.model import JastrowTerm, Wavefunction
from qwfx.storage import load, save
from qwfx.trial import Trial


def directions(rng: np.random.Generator, r: NDArray[np.float64]) -> NDArray[np.float64]:
    """(W, 1, 3) one electron at each distance."""
    d = rng.normal(size=(len(r), 3))
    return (d / np.linalg.norm(d, axis=1, keepdims=True) * r[:, None])[:, None]


@pytest.mark.parametrize("charge", [1.0, 2.0, 7.0])
@pytest.mark.parametrize(("orbital", "n"), [("1s", 1), ("2s", 2), ("2p", 2)])
def test_hydrogenic_states_have_a_constant_local_energy(charge: float, orbital: str, n: int) -> None:
    """E = -Z^2 / (2 n^2) everywhere (Bethe and Salpeter 1957, section 3)."""
    r = np.array([1e-3, 0.1, 0.4, 0.7, 1.1, 3.0, 8.0]) / charge
    values = Trial(hydrogenic(charge, orbital)).evaluate(directions(np.random.default_rng(1), r))
    assert np.allclose(values.local_energy, -(charge**2) / (2 * n**2), rtol=0, atol=1e-10 * charge**2)
    assert values.events == ()


def test_local_energy_of_an_approximate_state() -> None:
    """exp(-a r): E_L = -a^2/2 + (a - Z)/r."""
    r = np.array([0.2, 0.9, 2.5])
    values = Trial(hydrogenic(1.0, "1s", 0.8)).evaluate(directions(np.random.default_rng(2), r))
    assert np.allclose(values.local_energy[0], -0.32 - 0.2 / r, rtol=1e-13)
    assert np.allclose(values.log_abs[0], -0.8 * r + np.log(np.sqrt(1 / (4 * np.pi))), rtol=1e-12)


def perimetric(step: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """(W, 2, 3) electrons about a nucleus and the weights of the integral over all of space, both electrons.

    a = -r1 + r2 + u, b = r1 - r2 + u, c = r1 + r2 - u run from 0 to infinity, each as a = exp(x - exp(-x)).
    """
    x = np.arange(-3.6, 5.2, step)
    one, weight = np.exp(x - np.exp(-x)), step * (1 + np.exp(-x))
    a, b, c = (g.ravel() for g in np.meshgrid(one, one, one, indexing="ij"))
    w = np.prod(np.meshgrid(*[one * weight] * 3, indexing="ij"), axis=0).ravel() / 4
    r1, r2, u = (b + c) / 2, (a + c) / 2, (a + b) / 2
    # By half the angle at the nucleus, without the cancellation that its cosine has where electrons meet.
    half = np.sqrt(a * b / (4 * r1 * r2))
    sine, cosine = 2 * half * np.sqrt(np.clip(1 - half**2, 0, 1)), 1 - 2 * half**2
    zero = np.zeros_like(r1)
    electrons = np.stack(
        [np.stack([zero, zero, r1], axis=1), np.stack([r2 * sine, zero, r2 * cosine], axis=1)], axis=1
    )
    # Nearer than this, coordinates of electrons do not resolve their distance; of what is left out, less than 1e-7.
    apart = u > 1e-7
    return electrons[apart], (8 * np.pi**2 * r1 * r2 * u * w)[apart]


GRID = perimetric(0.18)


def energy_and_variance(wavefunction: Wavefunction) -> tuple[float, float]:
    """<E_L> and <E_L^2> - <E_L>^2 over Psi^2, of the wave function as it comes out of a file."""
    with tempfile.TemporaryDirectory() as folder:
        save(wavefunction, Path(folder) / "helium.qwfx")
        trial = Trial(load(Path(folder) / "helium.qwfx"))
    electrons, weights = GRID
    log_abs, _ = trial.log(electrons)
    density = weights * np.exp(2 * (log_abs[0] - log_abs.max()))
    some = density > 1e-40 * density.sum()
    local = trial.evaluate(electrons[some]).local_energy[0]
    p = density[some] / density[some].sum()
    energy = float(p @ local)
    return energy, float(p @ (local - energy) ** 2)


def hydrogen_like_helium(jastrow: JastrowTerm | None = None) -> Wavefunction:
    return helium([2.0], [1], [1.0], {"pairs": jastrow} if jastrow else None)


def test_the_quadrature_itself() -> None:
    """exp(-2 s): E = -2.75 and variance 53/48, both exact."""
    energy, variance = energy_and_variance(hydrogen_like_helium())
    assert energy == pytest.approx(-2.75, abs=1e-7)
    assert variance == pytest.approx(53 / 48, abs=1e-6)


@pytest.mark.parametrize(
    ("alpha", "published", "spread", "energy", "variance"),
    [
        (0.05, (-2.8713, 4e-4), (0.1749, 2e-4), -2.8713536, 0.1753687),
        (0.15, (-2.8778, 3e-4), (0.1114, 2e-4), -2.878174670, 0.11173875),
        (0.25, (-2.8746, 10e-4), (0.0883, 2e-4), -2.8744128, 0.0884845),
    ],
)
def test_helium_with_a_pade_factor(
    alpha: float, published: tuple[float, float], spread: tuple[float, float], energy: float, variance: float
) -> None:
    """Sampled values as published, within four of their standard errors, and the same by quadrature to 1e-6."""
    mine = energy_and_variance(hydrogen_like_helium(pair_term("pade", a=0.5, b=alpha)))
    assert mine == pytest.approx((energy, variance), abs=1e-6)
    assert abs(mine[0] - published[0]) < 4 * published[1]
    assert abs(mine[1] - spread[0]) < 4 * spread[1]


def bunge(jastrow: dict[str, JastrowTerm]) -> Wavefunction:
    atom = BUNGE["He"]
    powers, exponents = zip(*atom.s, strict=True)
    return helium(list(exponents), list(powers), list(atom.s_orbitals[0]), jastrow)


@pytest.mark.parametrize(
    ("beta", "energy", "variance"),
    [(0.3, -2.866717946, 0.10261125), (0.5, -2.882797301, 0.06542215), (1.0, -2.887362389, 0.07221597)],
)
def test_a_tabulated_atom_with_a_pade_factor(beta: float, energy: float, variance: float) -> None:
    """Orbital of Bunge, Barrientos and Bunge (1993)."""
    mine = energy_and_variance(bunge({"pairs": pair_term("pade", a=0.5, b=beta)}))
    assert mine == pytest.approx((energy, variance), abs=1e-6)


def test_a_tabulated_atom_without_a_factor() -> None:
    energy, variance = energy_and_variance(bunge({}))
    assert energy == pytest.approx(-2.861679993, abs=1e-6)
    assert variance == pytest.approx(0.57480525, abs=1e-5)


def test_a_tabulated_atom_with_a_three_body_factor() -> None:
    """Scaled polynomial of Boys and Handy (1969) in the notation of Schmidt and Moskowitz (1990), b = d = 1."""
    members = {
        "channel": np.array(["up_down"]), "atoms": np.array([0]), "scale": np.ones(1), "scale_electron": np.ones(1),
        "powers": np.array([[0, 0, 1], [0, 0, 2], [2, 0, 0], [2, 2, 0], [2, 0, 2]]),
        "coefficients": np.array([[0.5, -0.1, -0.25, 0.05, -0.1]]),
    }  # fmt: skip
    mine = energy_and_variance(bunge({"all": JastrowTerm("scaled-polynomial", {"body": "three-body"}, members)}))
    assert mine == pytest.approx((-2.888027617, 0.089499501), abs=1e-6)


def cutoff(L: float, alpha: float, C: int) -> JastrowTerm:
    """F21 with slope 1/2 at coalescence."""
    slope = 0.5 / (-L) ** C + alpha * C / L
    return pair_term("cutoff-polynomial", {"smoothness": C}, cutoff=L, coefficients=[alpha, slope])


@pytest.mark.parametrize(
    ("L", "alpha", "C", "energy", "variance"),
    [
        (3.0, 0.0, 3, -2.724736400, 0.578964), (3.0, 0.01, 3, -2.806527833, 0.227718),
        (5.0, 0.0, 3, -2.784965432, 0.272185),
    ],
)  # fmt: skip
def test_helium_with_a_polynomial_that_ends(L: float, alpha: float, C: int, energy: float, variance: float) -> None:
    """N. D. Drummond, M. D. Towler, R. J. Needs, Phys. Rev. B 70, 235119 (2004): the term u.

    The third derivative jumps at the cutoff, so that the quadrature, which knows no edges, is good to 1e-5 here.
    """
    mine = energy_and_variance(hydrogen_like_helium(cutoff(L, alpha, C)))
    assert mine == pytest.approx((energy, variance), abs=2e-5)


def test_helium_with_a_spline() -> None:
    """A spline that follows the Pade function closely has nearly its energy: what differs is the spline's own error.

    Interpolated at its knots, with the slope 1/2 at 0.
    """
    from scipy.interpolate import make_interp_spline

    L, K, b = 12.0, 60, 0.15
    pade_at_end = 0.5 * L / (1 + b * L)

    def target(r: NDArray[np.float64]) -> NDArray[np.float64]:  # a Pade function that ends smoothly at L
        return np.asarray((0.5 * r / (1 + b * r) - pade_at_end) * np.where(r < L, (1 - (r / L) ** 6) ** 3, 0))

    knots = np.linspace(0, L, K + 1)
    spline = make_interp_spline(knots, target(knots), bc_type=([(1, 0.5)], [(1, 0.0)]))
    c = spline.c[:K]  # of the uniform splines; the first ones belong to knots that coincide
    h = L / K
    matrix = np.zeros((K, K))
    rows = np.zeros(K)
    for k in range(K - 1):  # u at the knot k is (c_k + 4 c_{k+1} + c_{k+2}) / 6
        for j, weight in enumerate((1, 4, 1)):
            if k + j < K:
                matrix[k, k + j] = weight / 6
        rows[k] = target(knots[k : k + 1])[0]
    matrix[K - 1, 0], matrix[K - 1, 2], rows[K - 1] = -1 / (2 * h), 1 / (2 * h), 0.5
    c = np.linalg.solve(matrix, rows)
    energy, variance = energy_and_variance(hydrogen_like_helium(pair_term("bspline", cutoff=L, coefficients=c)))
    assert energy == pytest.approx(-2.878174670, abs=2e-4)
    assert variance == pytest.approx(0.11173875, abs=2e-3)
