"""Moves of one electron against evaluation from scratch, and what is said when there is no number."""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np
import pytest
from expansions import random_expansion
from hypothesis import given, settings
from hypothesis import strategies as st
from jastrows import KINDS, random_term

from qwfx.errors import EvaluationError, FormatError, UnsupportedError
from qwfx.model import Basis, Cell, Expansion, OrbitalSet, Potentials, System, Wavefunction
from qwfx.trial import Trial, TrialWarning

NUCLEI = np.array([[0.0, 0.0, 0.0], [0.0, 1.4, 1.1]])


def random_wavefunction(
    seed: int, n_up: int, n_down: int, *, n_entries: int = 1, states: int = 1, is_complex: bool = False,
    factors: int = 0, core: bool = False, same_set: bool = True, kinds: tuple[tuple[str, str], ...] = KINDS,
) -> Wavefunction:  # fmt: skip
    """Nothing physical: random functions, orbitals, entries and factors."""
    rng = np.random.default_rng(seed)
    l = np.array([0, 1, 2, 0, 1, 0], dtype=np.int32)
    basis = Basis(
        "gaussian", np.array([0, 0, 0, 1, 1, 1], "i4"), l, np.zeros(6, "i1"), np.arange(7), rng.uniform(0.3, 1.5, 6),
        rng.uniform(0.5, 1.5, 6),
    )  # fmt: skip
    M = 8

    def orbitals(spin: Any) -> OrbitalSet:
        C = rng.normal(size=(M, basis.n_functions))
        return OrbitalSet(spin, C + 1j * rng.normal(size=C.shape) if is_complex else C)

    expansion = random_expansion(rng, (n_up, n_down), M, n_entries, states, is_complex)
    sets = {"spatial": orbitals("both")}
    if not same_set:
        sets = {"up": orbitals("up"), "down": orbitals("down")}
        expansion = replace(expansion, up_set="up", down_set="down")
    else:
        expansion = replace(expansion, up_set="spatial", down_set="spatial")
    terms = {f"t{k}": random_term(rng, *kinds[rng.integers(len(kinds))], 2) for k in range(factors)}
    potentials = None
    if core:
        potentials = Potentials(
            np.array([1, 1, 1], "i4"), np.array([-1, 0, 1], "i4"), np.array([0, 0, -1], "i4"),
            np.array([1.1, 0.9, 1.4]), np.array([-1.0, 2.0, 1.5]),
        )  # fmt: skip
    system = System(n_up, n_down, ("A", "B"), np.array([6, 6], "i4"), np.array([6.0, 4.0]), NUCLEI)
    return Wavefunction(system, potentials, basis, sets, expansion, terms)


@settings(deadline=None, max_examples=40)
@given(
    seed=st.integers(0, 2**32 - 1), n_up=st.integers(0, 4), n_down=st.integers(0, 4),
    n_entries=st.sampled_from([1, 6, 30]), states=st.integers(1, 2), is_complex=st.booleans(),
    factors=st.integers(0, 3), same_set=st.booleans(),
)  # fmt: skip
def test_moves_follow_evaluation(
    seed: int, n_up: int, n_down: int, n_entries: int, states: int, is_complex: bool, factors: int, same_set: bool
) -> None:
    trial = Trial(random_wavefunction(
        seed, n_up, n_down, n_entries=n_entries, states=states, is_complex=is_complex, factors=factors,
        same_set=same_set,
    ))  # fmt: skip
    rng = np.random.default_rng(seed)
    n = n_up + n_down
    walkers = trial.walkers(1.2 * rng.normal(size=(5, n, 3)))
    for _ in range(12 if n else 0):
        which = int(rng.integers(n))
        places = walkers.electrons[:, which] + rng.normal(size=(5, 3))
        log_abs, sign = walkers.log_abs.copy(), walkers.sign.copy()
        ratio = walkers.ratio(which, places)
        there = walkers.electrons.copy()
        there[:, which] = places
        told_log, told_sign = trial.log(there)
        expected = told_sign / sign * np.exp(told_log - log_abs)
        assert np.allclose(ratio, expected, rtol=1e-7, atol=1e-9)
        accepted = rng.random(5) < 0.6
        walkers.accept(accepted)
        assert np.allclose(walkers.log_abs[:, accepted], told_log[:, accepted], rtol=0, atol=1e-8)
        assert np.array_equal(walkers.log_abs[:, ~accepted], log_abs[:, ~accepted])
        assert np.allclose(walkers.sign[:, accepted], told_sign[:, accepted], atol=1e-8)
    assert walkers.refresh() < 1e-7


@pytest.mark.parametrize("n_entries", [1, 12])
@pytest.mark.parametrize("is_complex", [False, True])
def test_derivatives_are_those_of_the_logarithm(n_entries: int, is_complex: bool) -> None:
    """Gradient and Laplacian of Psi, factors included, against differences of fourth order."""
    smooth = tuple(kind for kind in KINDS if kind[0] in ("pade", "scaled-polynomial"))  # differences see every edge
    trial = Trial(random_wavefunction(
        4, 3, 2, n_entries=n_entries, states=2, is_complex=is_complex, factors=5, kinds=smooth
    ))  # fmt: skip
    x = np.random.default_rng(5).normal(size=(4, 5, 3))
    values = trial.evaluate(x)
    h = 1e-3

    def psi(electrons: np.ndarray) -> np.ndarray:
        log_abs, sign = trial.log(electrons)
        return np.asarray(sign * np.exp(log_abs - values.log_abs) / values.sign)

    for i in range(5):
        laplacian = np.zeros((2, 4), dtype=complex)
        for k in range(3):
            there = {}
            for step in (-2, -1, 1, 2):
                moved = x.copy()
                moved[:, i, k] += step * h
                there[step] = psi(moved)
            slope = (there[-2] - 8 * there[-1] + 8 * there[1] - there[2]) / (12 * h)
            assert np.allclose(values.gradients[:, :, i, k], slope, rtol=1e-6, atol=1e-6)
            laplacian += (-there[-2] + 16 * there[-1] - 30 + 16 * there[1] - there[2]) / (12 * h * h)
        assert np.allclose(values.laplacians[:, :, i], laplacian, rtol=1e-5, atol=1e-4)


def test_projectors_act_on_psi_with_its_factor() -> None:
    """The sum over the sphere done by hand, from ratios of Psi."""
    from qwfx.reference.potential import coulomb, local_part, projected
    from qwfx.reference.sphere import sphere_rule

    for n_entries, factors in ((1, 0), (9, 2)):
        wf = random_wavefunction(8, 2, 2, n_entries=n_entries, factors=factors, core=True)
        trial = Trial(wf, rule=18)
        x = np.random.default_rng(9).normal(size=(3, 4, 3))
        values = trial.evaluate(x)
        assert wf.potentials is not None
        for w in range(3):
            total = float(coulomb(x[w : w + 1], NUCLEI, wf.system.effective_charges)[0])
            total += float(local_part(wf.potentials, NUCLEI, x[w : w + 1])[0])
            for i in range(4):
                ratio = partial(ratio_of, trial, x[w], i)
                total += projected(wf.potentials, NUCLEI, x[w, i], sphere_rule(18), ratio)
            assert values.potential[0, w] == pytest.approx(total, rel=1e-10)


def ratio_of(trial: Trial, walker: np.ndarray, i: int, points: np.ndarray) -> np.ndarray:
    """Psi with electron i at each of the points, over Psi as it is, both from scratch."""
    log_abs, sign = trial.log(walker[None])
    moved = np.repeat(walker[None], len(points), axis=0)
    moved[:, i] = points
    there, there_sign = trial.log(moved)
    return np.asarray((there_sign / sign * np.exp(there - log_abs))[0])


def test_without_the_factor_projectors_act_on_the_determinants_alone() -> None:
    wf = random_wavefunction(8, 2, 2, n_entries=9, factors=2, core=True)
    x = np.random.default_rng(9).normal(size=(3, 4, 3))
    alone, told = Trial(wf, jastrow=False).evaluate(x), Trial(replace(wf, jastrow={})).evaluate(x)
    assert np.array_equal(alone.potential, told.potential)
    assert not np.allclose(alone.potential, Trial(wf).evaluate(x).potential)


def test_rotations_average_to_the_same_and_are_reproducible() -> None:
    trial = Trial(random_wavefunction(8, 2, 1, core=True), rule=6)
    x = np.repeat(np.random.default_rng(3).normal(size=(1, 3, 3)), 4000, axis=0)
    turned = trial.evaluate(x, rotations=np.random.default_rng(1)).potential[0]
    again = trial.evaluate(x, rotations=np.random.default_rng(1)).potential[0]
    assert np.array_equal(turned, again)
    fine = Trial(random_wavefunction(8, 2, 1, core=True), rule=50).evaluate(x[:1]).potential[0, 0]
    assert abs(turned.mean() - fine) < 4 * turned.std() / np.sqrt(len(turned)) + 1e-4
    assert turned.std() > 1e-6
    with pytest.raises(EvaluationError, match="rotations"):
        trial.evaluate(x[:2], rotations=np.eye(3))


def test_walkers_without_a_number_are_named() -> None:
    trial = Trial(random_wavefunction(1, 2, 2))
    x = np.random.default_rng(2).normal(size=(5, 4, 3))
    x[1, 0] = x[1, 1]  # two up electrons at one place
    x[3, 2, 0] = np.nan
    with pytest.warns(TrialWarning, match=r"walkers 1, 3 \(2 of them\)"):
        values = trial.evaluate(x)
    assert [(e.walker, e.state) for e in values.events] == [(1, 0), (3, 0)]
    assert np.isfinite(values.local_energy[0, [0, 2, 4]]).all()
    with pytest.warns(TrialWarning, match="vanishes"):
        log_abs, sign = trial.log(x)
    assert log_abs[0, 1] == -np.inf
    assert sign[0, 1] == 0
    x[1, 0] = x[1, 2]  # unlike spins: Psi is sound, the repulsion is infinite
    with pytest.warns(TrialWarning, match="potential energy"):
        values = trial.evaluate(x[:2])
    assert values.events[0].walker == 1


def test_batches_make_no_difference(monkeypatch: pytest.MonkeyPatch) -> None:
    from qwfx.trial import trial as module

    trial = Trial(random_wavefunction(6, 2, 2, n_entries=9, factors=2, core=True))
    x = np.random.default_rng(7).normal(size=(11, 4, 3))
    whole = trial.evaluate(x)
    monkeypatch.setattr(module, "BATCH_BYTES", 1)
    apart = trial.evaluate(x)
    assert np.allclose(whole.local_energy, apart.local_energy, rtol=1e-12)
    assert trial.evaluate(x[:0]).local_energy.shape == (1, 0)


@pytest.mark.parametrize("shape", [(4, 3), (1, 3, 3), (1, 4, 2)])
def test_electrons_of_another_shape(shape: tuple[int, ...]) -> None:
    with pytest.raises(EvaluationError, match="2 up electrons first"):
        Trial(random_wavefunction(1, 2, 2)).evaluate(np.zeros(shape))


def test_moves_that_cannot_be() -> None:
    walkers = Trial(random_wavefunction(1, 1, 1)).walkers(np.random.default_rng(1).normal(size=(2, 2, 3)))
    with pytest.raises(EvaluationError, match="no move"):
        walkers.accept(True)
    for which, places in ((2, np.zeros((2, 3))), (-1, np.zeros((2, 3))), (0, np.zeros((1, 3)))):
        with pytest.raises(EvaluationError, match="an electron from 0 to 1"):
            walkers.ratio(which, places)


def test_what_has_no_trial_function() -> None:
    wf = random_wavefunction(1, 1, 1)
    for change in ({"basis": None}, {"orbitals": {}}, {"expansion": None}):
        with pytest.raises(UnsupportedError, match="missing"):
            Trial(replace(wf, **change))
    cell = Cell(np.eye(3), np.zeros((1, 3)))
    with pytest.raises(UnsupportedError, match="periodic"):
        Trial(replace(wf, system=replace(wf.system, cell=cell)))
    assert wf.expansion is not None
    with pytest.raises(FormatError, match="up_set"):
        Trial(replace(wf, expansion=replace(wf.expansion, up_set="other")))
    with pytest.raises(EvaluationError, match="a rule of 7 points"):
        Trial(wf, rule=7)
    bad = Expansion("spatial", "spatial", np.array([[3]], "u8"), np.array([[1]], "u8"), np.array([0, 1]),
                    np.array([0]), np.ones((1, 1)))  # fmt: skip
    with pytest.raises(FormatError, match=r"/expansion/up_strings\[0\]"):
        Trial(replace(wf, expansion=bad))
