"""Tables for plausibility, against PySCF's."""

from __future__ import annotations

import pytest

from qwfx.rules.elements import BOHR, COVALENT_RADII, SYMBOLS, element_readings


def test_symbols_are_those_of_pyscf() -> None:
    from pyscf.data.elements import ELEMENTS

    assert list(SYMBOLS) == ELEMENTS[1:119]


def test_bohr() -> None:
    from pyscf.data.nist import BOHR as PYSCF_BOHR

    assert pytest.approx(PYSCF_BOHR, rel=1e-8) == BOHR


def test_covalent_radii_are_those_of_pyscf_within_what_the_rule_needs() -> None:
    from pyscf.data.radii import COVALENT

    assert len(COVALENT_RADII) == 96
    for ours, theirs in zip(COVALENT_RADII, COVALENT[1:97], strict=True):
        assert ours == pytest.approx(theirs * BOHR, abs=0.25)


@pytest.mark.parametrize(
    ("label", "numbers"),
    [("C1", {6}), ("CA", {6, 20}), ("Cl2", {6, 17}), ("GHOST-O", {8}), ("X_He", {1, 2}), ("12", set()), ("Q", set()),
     ("h", {1}), ("SI3", {16, 14})],
)  # fmt: skip
def test_readings_of_labels(label: str, numbers: set[int]) -> None:
    assert element_readings(label) == numbers
