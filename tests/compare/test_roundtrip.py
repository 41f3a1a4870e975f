"""Round trips: the same through every format, different where something was really changed, and freedoms said."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qwfx.compare.roundtrip import compare_integrals, compare_orbitals, compare_witness, roundtrip
from qwfx.converters import registry
from qwfx.converters.plugin import Reading, Writing
from qwfx.converters.pyscf import from_pyscf, with_hamiltonian
from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.model import OrbitalSet, Wavefunction
from qwfx.points import probe_points
from qwfx.storage import load, save


@pytest.fixture(scope="module")
def nitrogen() -> Wavefunction:
    """N2: its pi orbitals come in degenerate pairs."""
    from pyscf import gto, scf

    mf = scf.RHF(gto.M(atom="N 0 0 0; N 0.3 0.5 0.93", basis="6-31g", verbose=0))
    mf.conv_tol = 1e-12
    mf.kernel()
    return with_hamiltonian(from_pyscf(mf))


@pytest.fixture
def file(nitrogen: Wavefunction, tmp_path: Path) -> Path:
    path = tmp_path / "nitrogen.qwfx"
    save(nitrogen, path)
    return path


@pytest.mark.parametrize("through", ["qwfx", "molden", "pyscf", "fcidump"])
def test_the_same_through_every_format(through: str, file: Path, tmp_path: Path) -> None:
    result = roundtrip(file, tmp_path, through=through, n_points=60)
    assert result.same
    assert result.worst < 1e-12
    assert result.through == through
    carries_orbitals = through != "fcidump"
    assert bool(result.sets) == carries_orbitals
    assert bool(result.integrals) == (through in ("qwfx", "fcidump"))
    assert any("orbital set" in part for part in result.missing) == (not carries_orbitals)
    assert result.witness["spatial"] < 1e-12


def changed(wavefunction: Wavefunction, matrix: np.ndarray[Any, Any]) -> Wavefunction:
    s = wavefunction.orbitals["spatial"]
    return dataclasses.replace(wavefunction, orbitals={"spatial": dataclasses.replace(s, coefficients=matrix)})


def compare(one: Wavefunction, two: Wavefunction) -> Any:
    points = probe_points(one.system.positions, 90, np.random.default_rng(1))
    (agreement,) = compare_orbitals(one, two, points, 1e-9)
    return agreement


def test_signs_orders_and_rotations_are_freedoms(nitrogen: Wavefunction) -> None:
    matrix = np.array(nitrogen.orbitals["spatial"].coefficients)
    energies = np.array(nitrogen.orbitals["spatial"].energies)
    pair = int(np.flatnonzero(np.diff(energies) < 1e-9)[0])
    other = matrix.copy()
    other[0] *= -1
    other[[1, 2]] = matrix[[2, 1]]
    c, s = np.cos(0.7), np.sin(0.7)
    other[pair], other[pair + 1] = c * matrix[pair] + s * matrix[pair + 1], c * matrix[pair + 1] - s * matrix[pair]
    agreement = compare(nitrogen, changed(nitrogen, other))
    assert agreement.worst < 1e-9
    words = [o.freedom for o in agreement.orbitals]
    assert words[0] == "sign"
    assert words[1:3] == ["order (was 2)", "order (was 1)"]
    assert words[pair] == words[pair + 1] == f"rotation within {{{pair}, {pair + 1}}}"


@pytest.mark.parametrize("size", [1e-3, 1e-7])
def test_a_real_difference_is_found_with_its_size(nitrogen: Wavefunction, size: float) -> None:
    matrix = np.array(nitrogen.orbitals["spatial"].coefficients)
    matrix[3] += size * matrix[9]
    agreement = compare(nitrogen, changed(nitrogen, matrix))
    worst = max(agreement.orbitals, key=lambda o: max(o.relative))
    assert worst.index == 3
    assert 0.05 * size < agreement.worst < 50 * size
    assert sum(max(o.relative) > 1e-9 for o in agreement.orbitals) == 1


def test_sets_that_do_not_come_back(nitrogen: Wavefunction) -> None:
    s = nitrogen.orbitals["spatial"]
    renamed = dataclasses.replace(nitrogen, orbitals={"other": s})
    assert "did not come back (sets there: other)" in compare(nitrogen, renamed).problem
    fewer = changed(nitrogen, np.asarray(s.coefficients)[:5])
    assert "18 orbitals went out, 5 came back" in compare(nitrogen, fewer).problem


def test_integrals_are_compared_dense_and_sparse(nitrogen: Wavefunction) -> None:
    h = nitrogen.hamiltonian
    assert h is not None
    values = np.array(h.two_body["both"].values)
    place = np.flatnonzero(values)
    sparse = dataclasses.replace(h.two_body["both"], values=values[place], index=place.astype("u8"))
    same, missing = compare_integrals(h, dataclasses.replace(h, two_body={"both": sparse}))
    assert max(same.values()) == 0.0
    assert not missing
    for one, two in ((sparse, sparse), (h.two_body["both"], sparse), (sparse, h.two_body["both"])):
        less = dataclasses.replace(two, values=np.where(np.arange(len(two.values)) == 5, 0, np.asarray(two.values)))
        pair = (dataclasses.replace(h, two_body={"both": part}) for part in (one, less))
        assert compare_integrals(*pair)[0]["two-body both"] == pytest.approx(abs(np.asarray(two.values)[5]))
    values[17] += 1e-6
    other = dataclasses.replace(h.two_body["both"], values=values)
    found, _ = compare_integrals(h, dataclasses.replace(h, two_body={"both": other}, core_energy=h.core_energy + 1e-3))
    assert found["two-body both"] == pytest.approx(1e-6)
    assert found["core energy"] == pytest.approx(1e-3)
    assert compare_integrals(h, None)[1] == ["the Hamiltonian"]
    fewer = dataclasses.replace(h, n_orbitals=h.n_orbitals - 1)
    assert compare_integrals(h, fewer)[0]["one-body both"] == np.inf


class _Careless:
    """A third party's converter that writes p functions in another order: the round trip must notice."""

    name, title, suffixes, options = "careless", "careless format", (".careless",), ()

    def recognises(self, path: Path, head: bytes) -> bool:
        return False

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Any = None
    ) -> Writing:
        from qwfx.demo import break_on_purpose

        save(break_on_purpose(wavefunction), path)
        return Writing(("written",))

    def read(self, path: Path, options: Mapping[str, str], progress: Any = None) -> Reading:
        return Reading(load(path))


def test_a_converter_that_is_wrong_is_caught(file: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    found, failed = registry._load()
    monkeypatch.setattr(registry, "_load", lambda: ({**found, "careless": _Careless()}, failed))
    result = roundtrip(file, tmp_path, through="careless", n_points=60)
    assert not result.same
    assert result.worst > 0.1
    assert result.witness["spatial"] < 1e-12, "the source itself was read rightly"
    assert "writing: written" in result.notes


def test_what_cannot_be_compared_is_said(nitrogen: Wavefunction, tmp_path: Path) -> None:
    bare = tmp_path / "bare.qwfx"
    save(Wavefunction(nitrogen.system), bare)
    with pytest.raises(UnsupportedError):
        roundtrip(bare, tmp_path, through="molden")
    with pytest.raises(EvaluationError, match="neither"):
        roundtrip(bare, tmp_path, through="qwfx")


def test_a_witness_without_a_basis_is_not_compared(nitrogen: Wavefunction) -> None:
    assert nitrogen.witness is not None
    assert compare_witness(dataclasses.replace(nitrogen, basis=None)) == {}
    assert compare_witness(dataclasses.replace(nitrogen, witness=None)) == {}
    assert compare_witness(nitrogen)["spatial"] < 1e-11


def test_unrestricted_sets_keep_their_names(tmp_path: Path) -> None:
    from pyscf import gto, scf

    mf = scf.UHF(gto.M(atom="O 0 0 0; H 0.3 0.4 0.83", basis="sto-3g", spin=1, verbose=0)).run()
    path = tmp_path / "oh.qwfx"
    save(from_pyscf(mf), path)
    result = roundtrip(path, tmp_path, through="molden", n_points=30)
    assert result.same
    assert {s.name for s in result.sets} == {"up", "down"}
    assert all(isinstance(s, OrbitalSet) for s in load(tmp_path / "back.qwfx").orbitals.values())
