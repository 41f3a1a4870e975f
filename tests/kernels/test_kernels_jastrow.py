"""The compiled Jastrow factor against the formulas as they stand, and moves against evaluations."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from jastrow_sizes import sizes
from jastrows import KINDS, random_term

from qwfx.errors import FormatError, QwfxError, UnsupportedError
from qwfx.kernels.jastrow import Jastrow
from qwfx.model import Cell, JastrowTerm, System, Wavefunction
from qwfx.reference.jastrow import evaluate

NUCLEI = np.array([[0.0, 0.0, 0.0], [1.3, -0.4, 0.7], [-0.9, 1.6, 0.2]])


WITH_CUTOFF = [kind for kind in KINDS if kind[0] in ("cutoff-polynomial", "bspline")]


def wavefunction(terms: dict[str, JastrowTerm], n_up: int, n_down: int, cell: Cell | None = None) -> Wavefunction:
    system = System(n_up, n_down, ("A", "B", "C"), np.ones(3, "i4"), np.ones(3), NUCLEI, cell)
    return Wavefunction(system, jastrow=terms)


@settings(deadline=None, max_examples=120)
@given(
    seed=st.integers(0, 2**32 - 1), kinds=st.lists(st.sampled_from(KINDS), min_size=1, max_size=4),
    n_up=st.integers(0, 5), n_down=st.integers(0, 5), spread=st.sampled_from([0.7, 2.0, 5.0]),
)  # fmt: skip
def test_equals_the_formulas(seed: int, kinds: list[tuple[str, str]], n_up: int, n_down: int, spread: float) -> None:
    rng = np.random.default_rng(seed)
    terms = {f"t{k}": random_term(rng, *kind, len(NUCLEI)) for k, kind in enumerate(kinds)}
    electrons = spread * rng.normal(size=(3, n_up + n_down, 3))
    jastrow = Jastrow(wavefunction(terms, n_up, n_down))
    told = evaluate(terms, n_up, NUCLEI, electrons)
    for mine, other, size in zip(jastrow.evaluate(electrons), told, sizes(terms, n_up, NUCLEI, electrons), strict=True):
        assert mine.shape == other.shape
        assert np.all(np.abs(mine - other) <= 1e-12 * size)


@settings(deadline=None, max_examples=120)
@given(
    seed=st.integers(0, 2**32 - 1), kinds=st.lists(st.sampled_from(KINDS), min_size=1, max_size=4),
    n_up=st.integers(0, 4), n_down=st.integers(0, 4), n_places=st.integers(0, 3), far=st.sampled_from([0.0, 4.0, 90.0]),
)  # fmt: skip
def test_a_move_changes_j_by_the_difference(
    seed: int, kinds: list[tuple[str, str]], n_up: int, n_down: int, n_places: int, far: float
) -> None:
    rng = np.random.default_rng(seed)
    terms = {f"t{k}": random_term(rng, *kind, len(NUCLEI)) for k, kind in enumerate(kinds)}
    n = n_up + n_down
    electrons, places = 1.5 * rng.normal(size=(2, n, 3)), 1.5 * rng.normal(size=(2, n_places, 3)) + far
    jastrow = Jastrow(wavefunction(terms, n_up, n_down))
    before, size = evaluate(terms, n_up, NUCLEI, electrons)[0], sizes(terms, n_up, NUCLEI, electrons)[0]
    for which in range(n):
        change = jastrow.change(electrons, which, places)
        assert change.shape == (2, n_places)
        for k in range(n_places):
            moved = electrons.copy()
            moved[:, which] = places[:, k]
            after = evaluate(terms, n_up, NUCLEI, moved)[0]
            allowed = 1e-12 * (size + sizes(terms, n_up, NUCLEI, moved)[0])
            assert np.all(np.abs(change[:, k] - (after - before)) <= allowed)


def cluster(rng: np.random.Generator, kinds: list[tuple[str, str]], n_up: int, n_down: int) -> Jastrow:
    """A factor of electrons and nuclei spread over more than its cutoffs."""
    nuclei = 12 * rng.random((40, 3))
    labels = tuple(f"A{i}" for i in range(len(nuclei)))
    system = System(n_up, n_down, labels, np.ones(40, "i4"), np.ones(40), nuclei)
    terms = {f"t{k}": random_term(rng, *kind, len(nuclei), every=True) for k, kind in enumerate(kinds)}
    return Jastrow(Wavefunction(system, jastrow=terms))


@settings(deadline=None, max_examples=60)
@given(
    seed=st.integers(0, 2**32 - 1),
    kinds=st.lists(st.sampled_from(WITH_CUTOFF), min_size=1, max_size=3),
    n_up=st.integers(1, 150), n_down=st.integers(0, 150), long=st.booleans(),
)  # fmt: skip
def test_moves_among_many(seed: int, kinds: list[tuple[str, str]], n_up: int, n_down: int, long: bool) -> None:
    """What is out of reach is left out of moves, not of evaluations, which know no lists."""
    rng = np.random.default_rng(seed)
    jastrow = cluster(rng, kinds, n_up, n_down)
    electrons = 12 * rng.random((2, n_up + n_down, 3))
    which = int(rng.integers(n_up + n_down))
    places = 12 * rng.random((2, 3, 3)) if long else electrons[:, which, None] + 0.4 * rng.normal(size=(2, 3, 3))
    change = jastrow.change(electrons, which, places)
    before = jastrow.evaluate(electrons)[0]
    for k in range(3):
        moved = electrons.copy()
        moved[:, which] = places[:, k]
        after = jastrow.evaluate(moved)[0]
        assert np.allclose(change[:, k], after - before, rtol=1e-12, atol=1e-12 * (n_up + n_down) ** 2)


@pytest.mark.parametrize("kind", KINDS)
def test_no_number_stays_none(kind: tuple[str, str]) -> None:
    """An electron at no place makes J no number, and moves from or to it, or near it, too: not 0, and no exception."""
    nan = float("nan")
    rng = np.random.default_rng(4)
    jastrow = cluster(rng, [kind], 20, 15)
    electrons, places = 12 * rng.random((1, 35, 3)), 12 * rng.random((1, 2, 3))
    lost = electrons.copy()
    lost[0, 17, 1] = nan
    assert np.isnan(jastrow.evaluate(lost)[0]).all()
    assert np.isnan(jastrow.change(lost, 17, places)).all()
    to_nowhere = places.copy()
    to_nowhere[0, 1, 2] = nan
    change = jastrow.change(electrons, 17, to_nowhere)[0]
    assert np.isnan(change[1])
    assert change[0] == pytest.approx(jastrow.change(electrons, 17, places)[0, 0], rel=1e-12, abs=1e-13)
    if kind[1] != "electron-nucleus":  # there an electron does not see the others
        assert np.isnan(jastrow.change(lost, 3, places)).all()


def test_rows_that_are_not_in_one_piece() -> None:
    rng = np.random.default_rng(5)
    jastrow = cluster(rng, [("cutoff-polynomial", "electron-electron"), ("bspline", "electron-nucleus")], 20, 15)
    electrons, places = 12 * rng.random((2, 35, 3)), 12 * rng.random((2, 2, 3))
    told = jastrow.change(electrons, 4, places)
    assert np.abs(told).min() > 0
    assert np.array_equal(jastrow.change_in_rows(electrons.transpose(0, 2, 1), 4, places), told)
    assert np.array_equal(jastrow.change(np.asfortranarray(electrons), 4, np.asfortranarray(places)), told)


def test_slopes_at_coalescence() -> None:
    """Of each form with the slope that FORMAT.md gives for it."""
    L, C, alpha = 3.0, 3, 0.2
    terms = {
        "a": JastrowTerm("pade", {"body": "electron-electron"}, {
            "channel": np.array(["up_down"]), "a": np.array([0.5]), "b": np.array([1.2])}),
        "b": JastrowTerm("cutoff-polynomial", {"body": "electron-electron", "smoothness": C}, {
            "channel": np.array(["up_up"]), "cutoff": np.array([L]),
            "coefficients": np.array([[alpha, 0.25 / (-L) ** C + alpha * C / L]])}),
        "c": JastrowTerm("scaled-polynomial", {"body": "electron-electron"}, {
            "channel": np.array(["up_up"]), "scale": np.array([2.0]), "powers": np.array([1, 2]),
            "coefficients": np.array([[0.3, 5.0]])}),
        "d": JastrowTerm("bspline", {"body": "electron-electron"}, {
            "channel": np.array(["down_down"]), "cutoff": np.array([4.0]),
            "coefficients": np.array([[1.0, 7.0, 1.4, 2.0]])}),
    }  # fmt: skip
    slopes = Jastrow(wavefunction(terms, 2, 2)).slopes()
    assert slopes["up_down"] == pytest.approx(0.5)
    assert slopes["up_up"] == pytest.approx(0.25 + 0.6)
    assert slopes["down_down"] == pytest.approx((1.4 - 1.0) / 2)


def test_no_terms() -> None:
    jastrow = Jastrow(wavefunction({}, 2, 1))
    assert jastrow.empty
    value, gradient, laplacian = jastrow.evaluate(np.ones((2, 3, 3)))
    assert not value.any()
    assert gradient.shape == (2, 3, 3)
    assert laplacian.shape == (2, 3)


GOOD = {"channel": np.array(["up_down"]), "a": np.array([0.5]), "b": np.array([1.0])}


@pytest.mark.parametrize(
    ("form", "attributes", "members", "where", "words"),
    [
        ("pade", {}, GOOD | {"b": np.array([-1.0])}, "/jastrow/t/b[0]", "pole"),
        ("pade", {}, GOOD | {"channel": np.array(["down_up"])}, "/jastrow/t/channel[0]", "up_down"),
        ("pade", {"body": "electron-nucleus"}, GOOD | {"channel": np.array(["up"])}, "/jastrow/t/atoms", "missing"),
        (
            "pade", {"body": "electron-nucleus"}, GOOD | {"channel": np.array(["up"]), "atoms": np.array([0, 3])},
            "/jastrow/t/atoms[1]", "there are 3 atoms",
        ),
        (
            "bspline", {}, {"channel": GOOD["channel"], "cutoff": np.array([0.0]), "coefficients": np.ones((1, 4))},
            "/jastrow/t/cutoff[0]", "above 0",
        ),
        ("own-form", {}, GOOD, "/jastrow/t", "own-form"),
    ],
)  # fmt: skip
def test_what_is_refused(
    form: str, attributes: dict[str, str], members: dict[str, np.ndarray], where: str, words: str
) -> None:
    term = JastrowTerm(form, {"body": "electron-electron"} | attributes, members)
    with pytest.raises(QwfxError) as caught:
        Jastrow(wavefunction({"t": term}, 1, 1))
    assert isinstance(caught.value, FormatError | UnsupportedError)
    assert caught.value.where == where
    assert words in str(caught.value)


def test_a_periodic_system_is_refused() -> None:
    cell = Cell(np.eye(3), np.zeros((1, 3)))
    with pytest.raises(UnsupportedError, match="periodic"):
        Jastrow(wavefunction({"t": JastrowTerm("pade", {"body": "electron-electron"}, GOOD)}, 1, 1, cell))
