"""Member-by-member differences: found where they are, counted whole, never by a shorter tail."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from qwfx.compare.members import _beyond, compare_files
from qwfx.model import Basis, OrbitalSet, Provenance, System, Wavefunction
from qwfx.storage import save


def small(**changes: object) -> Wavefunction:
    rng = np.random.default_rng(5)
    base = Wavefunction(
        System(1, 1, ("He1", "He2"), np.array([2, 2], "i4"), np.array([2.0, 2.0]), np.array([[0, 0, 0], [0, 0, 3.0]])),
        basis=Basis(
            "gaussian", np.array([0, 1], "i4"), np.array([0, 1], "i4"), np.zeros(2, "i1"), np.array([0, 2, 3]),
            np.array([2.0, 0.5, 0.7]), np.array([0.4, 0.7, 1.0]),
        ),
        orbitals={"spatial": OrbitalSet("both", rng.normal(size=(3, 4)), energies=np.array([-1.0, 0.1, 0.4]))},
    )  # fmt: skip
    return dataclasses.replace(base, **changes)  # type: ignore[arg-type]


def pair(tmp_path: Path, other: Wavefunction) -> tuple[Path, Path]:
    first, second = tmp_path / "a.qwfx", tmp_path / "b.qwfx"
    save(small(), first)
    save(other, second)
    return first, second


def changed_coefficients(change: float, index: tuple[int, int] = (2, 1)) -> Wavefunction:
    base = small()
    coefficients = np.array(base.orbitals["spatial"].coefficients)
    coefficients[index] += change
    return dataclasses.replace(
        base, orbitals={"spatial": dataclasses.replace(base.orbitals["spatial"], coefficients=coefficients)}
    )


def test_a_copy_is_the_same_to_the_bit(tmp_path: Path) -> None:
    result = compare_files(*pair(tmp_path, small()))
    assert result.same
    assert result.n_identical == result.n_same > 10


def test_one_changed_number_is_found_with_its_index(tmp_path: Path) -> None:
    files = pair(tmp_path, changed_coefficients(1e-6))
    result = compare_files(*files)
    assert [d.path for d in result.differences] == ["/orbitals/spatial/coefficients"]
    (difference,) = result.differences
    assert difference.n_different == 1
    assert difference.largest == pytest.approx(1e-6, rel=1e-6)
    assert difference.first.endswith("at [2,1]")
    assert compare_files(*files, absolute=1.1e-6).same
    assert not compare_files(*files, absolute=0.9e-6).same


def test_a_longer_list_is_a_difference_of_shape(tmp_path: Path) -> None:
    base = small().orbitals["spatial"]
    more = np.vstack([np.array(base.coefficients), np.zeros((1, 4))])
    longer = OrbitalSet("both", more, energies=np.append(base.energies, 9.0))
    result = compare_files(*pair(tmp_path, small(orbitals={"spatial": longer})), absolute=1e9)
    assert {(d.path, d.kind) for d in result.differences} == {
        ("/orbitals/spatial/coefficients", "shape"),
        ("/orbitals/spatial/energies", "shape"),
    }


def test_members_and_attributes_of_one_side_only(tmp_path: Path) -> None:
    other = dataclasses.replace(small(), basis=None, orbitals={}, system=dataclasses.replace(small().system, n_up=2))
    result = compare_files(*pair(tmp_path, other))
    found = {(d.path, d.kind) for d in result.differences}
    assert ("/system@n_up", "attribute") in found
    assert ("/basis", "only in first") in found
    assert ("/orbitals/spatial/coefficients", "only in first") in found


def test_provenance_only_on_demand(tmp_path: Path) -> None:
    step = {"activity": "test", "agent": "me", "time": "2026-12-01T00:00:00Z"}
    files = pair(tmp_path, small(provenance=Provenance((step,))))
    assert compare_files(*files).same
    assert any(d.path.startswith("/provenance") for d in compare_files(*files, everything=True).differences)


def test_not_a_number_and_infinity() -> None:
    one = np.array([np.nan, np.inf, -np.inf, np.inf, 1.0])
    two = np.array([np.nan, np.inf, np.inf, 1.0, 1.0])
    bad, _, equal = _beyond(one, two, 1e9, 1e9)
    assert bad.tolist() == [False, False, True, True, False], bad
    assert not equal


def test_big_integers_are_not_compared_as_floats() -> None:
    one = np.array([2**63 + 1, 5], dtype=np.uint64)
    bad, largest, _ = _beyond(one, np.array([2**63, 5], dtype=np.uint64), 1e9, 1.0)
    assert bad.tolist() == [True, False]
    assert largest == 1.0
