"""The table method against the sum of determinants as it stands."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from expansions import bits, random_expansion
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp
from numpy.typing import NDArray

from qwfx.errors import EvaluationError, FormatError
from qwfx.kernels import expansion as module
from qwfx.kernels.expansion import Determinants, Values
from qwfx.kernels.strings import SpinStrings
from qwfx.model import Expansion
from qwfx.reference.determinants import determinant_sum, evaluate_determinants


def plain(expansion: Expansion, phi_up: NDArray[Any], phi_down: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """(S, W) D, and the sum of the magnitudes of its terms, each determinant by LAPACK."""
    total = determinant_sum(expansion, phi_up.shape[1], phi_down.shape[1])
    D, size = [], []
    for up, down in zip(phi_up, phi_down, strict=True):
        a = np.array([np.linalg.det(up[:, s]) if len(s) else 1.0 for s in total.up])
        b = np.array([np.linalg.det(down[:, s]) if len(s) else 1.0 for s in total.down])
        terms = total.coefficients * a[total.rows] * b[total.columns]
        D.append(terms.sum(axis=1))
        size.append(np.abs(terms).sum(axis=1))
    return np.array(D).T, np.array(size).T


def made(expansion: Expansion, phi_up: NDArray[Any], phi_down: NDArray[Any]) -> tuple[Determinants, Values]:
    found = Determinants(expansion, phi_up.shape[1], phi_down.shape[1], phi_up.shape[2], phi_down.shape[2])
    return found, found.evaluate(phi_up[:, :, found.used_up], phi_down[:, :, found.used_down])


def random_phi(rng: np.random.Generator, shape: tuple[int, ...], is_complex: bool) -> NDArray[Any]:
    phi = rng.normal(size=shape)
    return phi + 1j * rng.normal(size=shape) if is_complex else phi


@settings(deadline=None, max_examples=60)
@given(
    seed=st.integers(0, 2**32 - 1),
    n_up=st.integers(0, 8), n_down=st.integers(0, 8), more=st.integers(0, 4),
    n_entries=st.sampled_from([1, 2, 7, 60]), states=st.integers(1, 3), n_walkers=st.sampled_from([1, 2, 8, 9, 20]),
    complex_orbitals=st.booleans(), complex_coefficients=st.booleans(), many_orbitals=st.booleans(),
)  # fmt: skip
def test_equals_the_sum_of_determinants(
    seed: int, n_up: int, n_down: int, more: int, n_entries: int, states: int, n_walkers: int,
    complex_orbitals: bool, complex_coefficients: bool, many_orbitals: bool,
) -> None:  # fmt: skip
    rng = np.random.default_rng(seed)
    M = 70 if many_orbitals else max(n_up, n_down, 1) + more
    expansion = random_expansion(rng, (n_up, n_down), M, n_entries, states, complex_coefficients)
    phi_up = random_phi(rng, (n_walkers, n_up, M), complex_orbitals)
    phi_down = random_phi(rng, (n_walkers, n_down, M), complex_orbitals)
    D, size = plain(expansion, phi_up, phi_down)
    found, values = made(expansion, phi_up, phi_down)
    allowed = 1e-10 * size
    assert (np.abs(values.sign * np.exp(values.log_abs) - D) <= allowed).all()
    # D with the row of one electron replaced
    for spin, phi, gamma, used in (
        (0, phi_up, values.gamma_up, found.used_up), (1, phi_down, values.gamma_down, found.used_down)
    ):  # fmt: skip
        assert gamma.shape == (states, n_walkers, len(used), phi.shape[1])
        for i in range(phi.shape[1]):
            row = random_phi(rng, (n_walkers, M), complex_orbitals)
            changed = phi.copy()
            changed[:, i] = row
            there, there_size = plain(expansion, *((changed, phi_down) if spin == 0 else (phi_up, changed)))
            ratio = np.einsum("wp,swp->sw", row[:, used], gamma[..., i])
            lost = (there_size + size) / np.abs(D)
            assert (np.abs(ratio - there / D) <= 1e-9 * (lost + np.abs(ratio)) * lost.clip(1)).all()


def test_gradients_are_those_of_the_plain_sum() -> None:
    rng = np.random.default_rng(3)
    expansion = random_expansion(rng, (3, 2), 6, 12, 2)
    phi_up, phi_down = rng.normal(size=(5, 3, 6)), rng.normal(size=(5, 2, 6))
    told = evaluate_determinants(determinant_sum(expansion, 3, 2), phi_up, phi_down)
    found, values = made(expansion, phi_up[0][None], phi_down[0][None])
    assert np.allclose(values.log_abs[:, 0], told.log_abs, rtol=0, atol=1e-12)
    assert np.allclose(values.sign[:, 0], told.sign)
    for k in range(3):
        up = np.einsum("ip,spi->si", phi_up[k + 1][:, found.used_up], values.gamma_up[:, 0])
        down = np.einsum("ip,spi->si", phi_down[k + 1][:, found.used_down], values.gamma_down[:, 0])
        assert np.allclose(np.concatenate([up, down], axis=1), told.gradients[:, :, k], rtol=1e-11)


@pytest.mark.parametrize("nearly", [0.0, 1e-14, 1e-9, 1e-5])
def test_a_reference_that_vanishes_at_a_walker(nearly: float) -> None:
    """The weightiest determinant has two equal rows; the others do not."""
    rng = np.random.default_rng(5)
    expansion = random_expansion(rng, (4, 4), 8, 60, 2)
    phi_up, phi_down = rng.normal(size=(3, 4, 8)), rng.normal(size=(3, 4, 8))
    for phi, spin in ((phi_up, 0), (phi_down, 1)):
        strings = Determinants(expansion, 4, 4, 8, 8).spins[spin]
        reference = strings.used[strings.reference]
        phi[1, 2, reference] = phi[1, 1, reference] + nearly * rng.normal(size=4)
    D, size = plain(expansion, phi_up, phi_down)
    found, values = made(expansion, phi_up, phi_down)
    assert (np.abs(values.sign * np.exp(values.log_abs) - D) <= 1e-10 * size).all()
    row = rng.normal(size=8)
    changed = phi_up.copy()
    changed[:, 0] = row
    there, _ = plain(expansion, changed, phi_down)
    ratio = np.einsum("p,swp->sw", row[found.used_up], values.gamma_up[..., 0])
    assert np.allclose(ratio, there / D, rtol=1e-8)


def test_minors_that_vanish_have_the_right_cofactors() -> None:
    """Whole blocks of orbitals are zero at the electrons, so that eliminations meet pivots of zero."""
    rng = np.random.default_rng(6)
    occupied = np.array([[0, 1, 2, 3], [4, 5, 6, 7], [0, 5, 6, 7], [3, 4, 5, 6]])
    expansion = Expansion(
        "a", "a", bits(occupied, 8), bits(np.zeros((1, 0), dtype=np.int64), 8),
        np.arange(5), np.zeros(4, dtype=np.int64), rng.normal(size=(1, 4)),
    )  # fmt: skip
    order = np.argsort([sum(1 << int(p) for p in row) for row in occupied])
    expansion = Expansion("a", "a", bits(occupied[order], 8), *list(vars(expansion).values())[3:7])
    phi = rng.normal(size=(2, 4, 8))
    phi[1, :, 4] = phi[1, :, 0]  # a unit column of the table: zeros where pivots are looked for
    phi[1, :, 5] = phi[1, :, 0] + phi[1, :, 1]
    phi[1, :, 6] = phi[1, :, 1]
    nothing = np.zeros((2, 0, 8))
    D, _ = plain(expansion, phi, nothing)
    _, values = made(expansion, phi, nothing)
    assert np.allclose(values.sign * np.exp(values.log_abs), D, rtol=1e-11)
    for i in range(4):
        row = rng.normal(size=(2, 8))
        changed = phi.copy()
        changed[:, i] = row
        there, _ = plain(expansion, changed, nothing)
        assert np.allclose(np.einsum("wp,swp->sw", row, values.gamma_up[..., i]), there / D, rtol=1e-9, atol=1e-10)


@pytest.mark.parametrize("n_entries", [1, 30])
def test_derivatives_of_orbitals_that_are_known_to_many_digits(n_entries: int) -> None:
    """Gaussians times plane waves; D of F12 and its derivatives along an electron by mpmath, in 40 digits."""
    rng = np.random.default_rng(11)
    M, n = 6, (3, 2)
    decay, wave, places = rng.uniform(0.3, 2, M), rng.normal(size=(M, 3)), rng.normal(size=(1, 5, 3))
    expansion = random_expansion(rng, n, M, n_entries)
    total = determinant_sum(expansion, *n)

    def exactly(points: list[list[Any]]) -> Any:
        def matrix(first: int, string: NDArray[np.int64]) -> Any:
            m = mp.matrix(len(string))
            for i in range(len(string)):
                r = points[first + i]
                for k, p in enumerate(string.tolist()):
                    phase = mp.fdot([mp.mpf(x) for x in wave[p].tolist()], r)
                    m[i, k] = mp.exp(-mp.mpf(float(decay[p])) * mp.fdot(r, r)) * mp.cos(phase)
            return mp.det(m)

        up, down = [matrix(0, s) for s in total.up], [matrix(n[0], s) for s in total.down]
        entries = zip(total.rows, total.columns, total.coefficients[0].tolist(), strict=True)
        return mp.fsum(mp.mpf(c) * up[i] * down[j] for i, j, c in entries)

    r2, phase = (places**2).sum(axis=2)[..., None], places @ wave.T
    g, c, s = np.exp(-decay * r2), np.cos(phase), np.sin(phase)
    slope = -2 * decay * places[..., None] * (g * c)[:, :, None] - (g * s)[:, :, None] * wave.T
    inner = places @ wave.T
    bend = g * (c * (4 * decay**2 * r2 - 6 * decay - (wave**2).sum(axis=1)) + 4 * decay * inner * s)
    phi = g * c
    found = Determinants(expansion, *n, M, M)
    values = found.evaluate(phi[:, :3, found.used_up], phi[:, 3:, found.used_down])
    with mp.workdps(40):
        start = [[mp.mpf(float(x)) for x in r] for r in places[0]]
        D = exactly(start)
        assert abs(values.sign[0, 0] * mp.exp(mp.mpf(float(values.log_abs[0, 0]))) / D - 1) < 1e-13
        for i in (1, 3):
            used, gamma = (found.used_up, values.gamma_up) if i < 3 else (found.used_down, values.gamma_down)
            row = gamma[0, 0, :, i - (0 if i < 3 else 3)]
            curvature = mp.mpf(0)
            for axis in range(3):

                def along(t: Any, i: int = i, axis: int = axis) -> Any:
                    there = [list(r) for r in start]
                    there[i][axis] += t
                    return exactly(there)

                h = mp.mpf("1e-10")
                ahead, behind = along(h), along(-h)
                curvature += (ahead - 2 * D + behind) / h**2
                assert np.isclose(slope[0, i, axis, used] @ row, float((ahead - behind) / (2 * h) / D), rtol=1e-11)
            assert np.isclose(bend[0, i, used] @ row, float(curvature / D), rtol=1e-11)


@pytest.mark.parametrize("nearly", [1e-3, 1e-5, 1e-9])
def test_digits_that_are_left_beside_a_node_of_the_reference(nearly: float) -> None:
    """Every determinant in 50 digits: D keeps its own, whatever the reference loses."""
    rng = np.random.default_rng(12)
    expansion = random_expansion(rng, (3, 0), 6, 20)
    phi = rng.normal(size=(8, 3, 6))
    reference = Determinants(expansion, 3, 0, 6, 6).spins[0].reference
    phi[:, 2, reference] = phi[:, 1, reference] + nearly * rng.normal(size=(8, 3))
    found, values = made(expansion, phi, np.zeros((8, 0, 6)))
    total = determinant_sum(expansion, 3, 0)
    with mp.workdps(50):
        for w in range(8):

            def exactly(rows: NDArray[Any]) -> Any:
                terms = zip(total.up, total.coefficients[0].tolist(), strict=True)
                return mp.fsum(mp.mpf(c) * mp.det(mp.matrix(rows[:, string].tolist())) for string, c in terms)

            D = exactly(phi[w])
            assert abs(values.sign[0, w] * mp.exp(mp.mpf(float(values.log_abs[0, w]))) / D - 1) < 1e-11
            for p in found.used_up.tolist():
                unit = phi[w].copy()
                unit[1] = np.eye(6)[p]
                gamma = values.gamma_up[0, w, found.used_up.searchsorted(p), 1]
                assert abs(gamma - exactly(unit) / D) < 1e-9 * np.abs(values.gamma_up[0, w]).max()


def test_signs_of_excitations_are_parities_of_permutations() -> None:
    """Particles put in the places of holes, one for one: sorting that list is a permutation of the sign's parity."""
    rng = np.random.default_rng(13)
    strings = SpinStrings(random_expansion(rng, (5, 0), 11, 400).up_strings, 5, rng.random(400)[:21])
    for reference in (strings.reference, np.array([1, 4, 6, 9, 10])):
        seen = 0
        for c in strings.classes(reference):
            for string, holes, particles, sign in zip(c.string, c.holes, c.particles, c.sign, strict=True):
                occupied = reference.copy()
                occupied[holes] = particles
                assert np.array_equal(np.sort(occupied), strings.occupied[string])
                swaps = sum(occupied[a] > occupied[b] for a in range(5) for b in range(a + 1, 5))
                assert sign == (-1) ** swaps
                assert c.rank == len(set(strings.occupied[string].tolist()) - set(reference.tolist()))
                seen += 1
        assert seen == strings.n_strings


def test_one_determinant_needs_no_table() -> None:
    rng = np.random.default_rng(14)
    phi_up, phi_down = rng.normal(size=(3, 4, 4)), rng.normal(size=(3, 3, 4))
    expansion = Expansion(
        "a", "a", np.array([[15]], "u8"), np.array([[13]], "u8"), np.array([0, 1]), np.array([0]), np.array([[-2.0]])
    )
    found, values = made(expansion, phi_up, phi_down)
    assert found.single
    assert found.used_down.tolist() == [0, 2, 3]
    assert np.array_equal(values.gamma_up[0], np.linalg.inv(phi_up))
    D = -2 * np.linalg.det(phi_up) * np.linalg.det(phi_down[:, :, [0, 2, 3]])
    assert np.allclose(values.sign[0] * np.exp(values.log_abs[0]), D, rtol=1e-13)


def test_little_room_and_one_thread_change_no_digit_that_counts(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(15)
    expansion = random_expansion(rng, (3, 3), 7, 40, 2)
    phi = rng.normal(size=(2, 21, 3, 7))
    found, values = made(expansion, *phi)
    used = phi[0][..., found.used_up], phi[1][..., found.used_down]
    monkeypatch.setattr(module, "ROOM", 0)
    for other in (found.evaluate(*used, threads=1), found.evaluate(*used, threads=3)):
        assert np.allclose(other.log_abs, values.log_abs, rtol=0, atol=1e-11)
        assert np.allclose(other.gamma_up, values.gamma_up, rtol=1e-9, atol=1e-9)
    assert found.evaluate(*used, gammas=False).gamma_up.size == 0


def test_arrays_of_another_shape_are_refused() -> None:
    expansion = random_expansion(np.random.default_rng(16), (2, 1), 5, 4)
    found = Determinants(expansion, 2, 1, 5, 5)
    up, down = np.ones((3, 2, len(found.used_up))), np.ones((3, 1, len(found.used_down)))
    for phi_up, phi_down, where in (
        (up[:, :, :-1], down, "phi_up"), (up[:, :1], down, "phi_up"), (up[0], down, "phi_up"),
        (up, down[:2], "phi_down"),
    ):  # fmt: skip
        with pytest.raises(EvaluationError) as caught:
            found.evaluate(phi_up, phi_down)
        assert caught.value.where == where


def test_where_it_is_no_number() -> None:
    """Told by the numbers themselves, without an exception, and the other walkers are as ever."""
    rng = np.random.default_rng(7)
    for n_entries in (1, 9):
        expansion = random_expansion(rng, (2, 2), 5, n_entries)
        phi_up, phi_down = rng.normal(size=(4, 2, 5)), rng.normal(size=(4, 2, 5))
        _, sound = made(expansion, phi_up, phi_down)
        phi_up[1] = 0.0
        phi_up[2, 0, :] = np.nan
        _, values = made(expansion, phi_up, phi_down)
        assert values.log_abs[0, 1] == -np.inf
        assert values.sign[0, 1] == 0
        assert not np.isfinite(values.log_abs[0, 2])
        assert values.singular.tolist() == [False, True, True, False]
        for w in (0, 3):
            assert values.log_abs[0, w] == sound.log_abs[0, w]
            assert np.array_equal(values.gamma_up[0, w], sound.gamma_up[0, w])


@pytest.mark.parametrize(
    ("change", "where", "words"),
    [
        ({"up_strings": np.array([[3], [5], [8]], dtype="u8")}, "/expansion/up_strings[2]", "2 occupied orbitals"),
        ({"down_strings": np.array([[1], [1 << 9]], dtype="u8")}, "/expansion/down_strings[1]", "bits 0 to 4"),
        ({"up_strings": np.array([[3], [6], [5]], dtype="u8")}, "/expansion/up_strings[2]", "a string above"),
        ({"up_strings": np.array([[3], [3], [5]], dtype="u8")}, "/expansion/up_strings[1]", "same string"),
        ({"columns": np.array([0, 2, 0, 1])}, "/expansion/columns[1]", "there are 2 down strings"),
        ({"columns": np.array([1, 0, 0, 1])}, "/expansion/columns[1]", "more than 1"),
        ({"row_start": np.array([0, 2, 3])}, "/expansion/row_start", "4 offsets"),
        ({"coefficients": np.ones(4)}, "/expansion/coefficients", "(states, 4)"),
    ],
)
def test_what_is_refused(change: dict[str, Any], where: str, words: str) -> None:
    sound: dict[str, Any] = {
        "up_strings": np.array([[3], [5], [6]], dtype="u8"), "down_strings": np.array([[1], [2]], dtype="u8"),
        "row_start": np.array([0, 2, 3, 4]), "columns": np.array([0, 1, 0, 1]), "coefficients": np.ones((1, 4)),
    }  # fmt: skip
    Determinants(Expansion("a", "a", **sound), 2, 1, 5, 5)
    with pytest.raises(FormatError) as caught:
        Determinants(Expansion("a", "a", **(sound | change)), 2, 1, 5, 5)
    assert caught.value.where == where
    assert words in str(caught.value)
