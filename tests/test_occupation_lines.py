"""Lists of determinants: what they mean, and what is refused with its line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from expansions import random_expansion
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from qwfx.errors import ConversionError, FileError
from qwfx.occupation_lines import read_list, write_list
from qwfx.reference.determinants import determinant_sum


def read(tmp_path: Path, text: str, n: tuple[int, int] = (8, 8)) -> object:
    (tmp_path / "list.txt").write_text(text)
    return read_list(tmp_path / "list.txt", n, ("a", "b"))


def test_the_sign_is_that_of_the_order(tmp_path: Path) -> None:
    """The value of the determinant as it is written: columns in the order of the line."""
    text = "# a comment\n\n0.9 | 1-3 | 2 1\n-0.2 0 | \n"
    with pytest.raises(ConversionError, match=r"list.txt:4"):
        read(tmp_path, text)
    text = "0.9  0.1 | 1-2,3 | 2, 1  # here too\n-2D-1 0.5| 4 1 3 | 1 3\n0.25 0 | 5 2 1 | 3 2\n"
    expansion = read(tmp_path, text)
    rng = np.random.default_rng(1)
    up, down = rng.normal(size=(3, 8)), rng.normal(size=(2, 8))
    told = np.zeros(2)
    for c, i, j in (([0.9, 0.1], [0, 1, 2], [1, 0]), ([-0.2, 0.5], [3, 0, 2], [0, 2]), ([0.25, 0], [4, 1, 0], [2, 1])):
        told += np.array(c) * np.linalg.det(up[:, i]) * np.linalg.det(down[:, j])
    total = determinant_sum(expansion, 3, 2)  # type: ignore[arg-type]
    mine = sum(
        total.coefficients[:, e] * np.linalg.det(up[:, total.up[i]]) * np.linalg.det(down[:, total.down[j]])
        for e, (i, j) in enumerate(zip(total.rows, total.columns, strict=True))
    )
    assert np.allclose(mine, told)


@settings(deadline=None, max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    seed=st.integers(0, 2**32 - 1), n_up=st.integers(0, 4), n_down=st.integers(0, 4), states=st.integers(1, 3),
    n_entries=st.sampled_from([1, 9, 50]), is_complex=st.booleans(), many=st.booleans(),
)  # fmt: skip
def test_what_is_written_is_read_again(
    tmp_path: Path, seed: int, n_up: int, n_down: int, states: int, n_entries: int, is_complex: bool, many: bool
) -> None:
    M = 70 if many else 7
    expansion = random_expansion(np.random.default_rng(seed), (n_up, n_down), M, n_entries, states, is_complex)
    (tmp_path / "x").write_text(write_list(expansion, n_up, n_down))
    again = read_list(tmp_path / "x", (M, M), ("spatial", "spatial"))
    for name, value in vars(expansion).items():
        assert np.array_equal(np.asarray(getattr(again, name)), np.asarray(value)) or value is None


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "there are no determinants"), ("0.9 | 1\n", "coefficients | up"), ("| 1 | 1\n", "coefficients | up"),
        ("x | 1 | 1\n", "the coefficient 'x'"), ("nan | 1 | 1\n", "nan"), ("1,2,3 | 1 | 1\n", "re,im"),
        ("1 | 0 | 1\n", "1 to 8"), ("1 | 9 | 1\n", "1 to 8"), ("1 | 3-1 | 1\n", "'3-1'"), ("1 | a | 1\n", "'a'"),
        ("1 | 1 1 | 1\n", "twice"), ("1 | 1 | 1\n0.5 | 1 2 | 1\n", ":2: 1 coefficients, 2 up"),
        ("1 | 1 2 | 1\n0.5 | 2 1 | 1\n", "the determinant of line 1"), ("1 2 | 1 | 1\n1 | 2 | 1\n", ":2:"),
    ],
)  # fmt: skip
def test_what_is_refused(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(ConversionError) as caught:
        read(tmp_path, text)
    assert words in str(caught.value)


def test_a_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="cannot be read"):
        read_list(tmp_path / "absent", (1, 1), ("a", "a"))
