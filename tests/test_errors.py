"""Errors say where, what was found, what was expected and what to do, and travel between processes."""

from __future__ import annotations

import pickle

import pytest

from qwfx import errors


@pytest.mark.parametrize("name", errors.__all__)
def test_every_error_keeps_its_parts_when_pickled(name: str) -> None:
    kind = getattr(errors, name)
    error = kind("it is torn", where="a.molden:12", expected="a whole one", remedy="mend it")
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is kind
    assert (again.where, again.found, again.expected, again.remedy) == (
        "a.molden:12", "it is torn", "a whole one", "mend it",
    )  # fmt: skip
    assert str(again) == "a.molden:12: it is torn; expected: a whole one; to do: mend it"
    assert isinstance(error, errors.QwfxError)


def test_parts_that_are_not_given_are_not_said() -> None:
    assert str(errors.FileError("is absent")) == "is absent"
