"""A determinant from occupations, where they are those of one."""

from __future__ import annotations

import numpy as np
import pytest

from qwfx.converters.determinant import bit_string, single_determinant
from qwfx.model import OrbitalSet


def orbitals(spin: str, occupations: list[float] | None) -> OrbitalSet:
    n = len(occupations) if occupations is not None else 3
    told = None if occupations is None else np.array(occupations)
    return OrbitalSet(spin, np.eye(n), occupations=told)  # type: ignore[arg-type]


def test_restricted_and_open_shell() -> None:
    found = single_determinant({"spatial": orbitals("both", [2, 1, 2, 0])}, 3, 2)
    assert found is not None
    assert found.up_strings.tolist() == [[0b0111]]
    assert found.down_strings.tolist() == [[0b0101]]
    assert (found.up_set, found.down_set) == ("spatial", "spatial")


def test_one_set_for_each_spin() -> None:
    found = single_determinant({"up": orbitals("up", [1, 0, 1]), "down": orbitals("down", [0, 1, 0])}, 2, 1)
    assert found is not None
    assert found.up_strings.tolist() == [[0b101]]
    assert found.down_strings.tolist() == [[0b010]]


@pytest.mark.parametrize(
    ("up", "down"), [(None, [1.0, 0.0]), ([1.0, 0.0], None), (None, None), ([0.5, 0.5], [1, 0]), ([1, 1], [1, 0])]
)
def test_no_determinant(up: list[float] | None, down: list[float] | None) -> None:
    assert single_determinant({"up": orbitals("up", up), "down": orbitals("down", down)}, 1, 1) is None


def test_two_words() -> None:
    assert bit_string(np.array([0, 63, 64, 127]), 128).tolist() == [[(1 << 63) | 1, (1 << 63) | 1]]
    assert bit_string(np.array([], dtype=np.int64), 0).tolist() == [[0]]
