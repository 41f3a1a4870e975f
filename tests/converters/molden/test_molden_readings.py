"""Each way to normalise, written by other code, is told apart by orthonormality alone and gives PySCF's own values."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from molden_cases import CARTESIAN_WATER, WATER, molden_text, orthonormal_orbitals
from pyscf import gto

from qwfx.converters.molden import converter
from qwfx.converters.molden.readings import READINGS
from qwfx.errors import ConversionError
from qwfx.kernels import evaluate_orbitals

GEOMETRY = "O 0.1 -0.2 0.3; H -0.4 1.1 0.9; H 1.2 0.3 -0.5"
RAW = 1.7  # factor by which a contraction is not normalised in the readings "as printed"


def molecule(cart: bool) -> Any:
    basis = {
        "O": [*gto.load("cc-pvdz", "O"), [3, [1.4, 0.6], [0.5, 0.5]], *([] if cart else [[4, [1.1, 1.0]]])],
        "H": gto.load("cc-pvdz", "H"),
    }
    return gto.M(atom=GEOMETRY, basis=basis, cart=cart, verbose=0)


def write(reading: str, cart: bool, reverse: bool = False, digits: int = 16) -> tuple[Any, np.ndarray, str]:
    """A file in a dialect, with the molecule and orbitals that it is of."""
    mol = molecule(cart)
    orbitals = orthonormal_orbitals(mol)
    rules = READINGS[reading]

    def factor(l: int) -> float:
        return 1.0 + 0.2 * l + RAW if not rules.normalised else 1.0

    def coefficients(l: int, exponents: Any, normalised: Any) -> Any:
        # What normalising would undo is arbitrary where the reading normalises.
        printed = normalised * (0.3 + l if rules.normalised else factor(l))
        if rules.factors_included:
            # The primitive x^l exp(-a r^2) of unit norm, by the double factorial.
            odd = np.prod(np.arange(2 * l - 1, 0, -2))
            printed = printed * (2 * exponents / np.pi) ** 0.75 * (4 * exponents) ** (l / 2) / np.sqrt(odd)
        return printed

    def lengths(l: int, norms: Any) -> Any:
        unit = norms[0] if rules.shared or not cart else norms
        return factor(l) / np.broadcast_to(unit, norms.shape)

    def signs(l: int) -> Any:
        m = np.array([0] + [k for k in range(1, l + 1) for _ in (1, -1)])
        return np.where((l > 2) & np.isin(m, (3, 4)), -1.0, 1.0)

    text = molden_text(
        mol, orbitals, coefficients=coefficients, lengths=lengths, flags="" if cart else "[5D]\n[7F]\n[9G]",
        signs=signs if reverse else None, digits=digits,
    )  # fmt: skip
    return mol, orbitals, text


def check_values(mol: Any, orbitals: Any, path: Path, options: dict[str, str], within: float = 1e-11) -> str:
    reading = converter.read(path, options)
    wavefunction = reading.wavefunction
    points = np.random.default_rng(3).normal(size=(20, 3))
    basis = wavefunction.basis
    assert basis is not None
    rows = np.asarray(wavefunction.orbitals["spatial"].coefficients)
    ours = evaluate_orbitals(basis, wavefunction.system.positions, rows, points, derivatives=0)[0]
    theirs = mol.eval_gto("GTOval", points) @ orbitals
    np.testing.assert_allclose(ours, theirs, rtol=0, atol=within * np.abs(theirs).max())
    witness = wavefunction.witness
    assert witness is not None
    again = evaluate_orbitals(basis, wavefunction.system.positions, rows, witness.points, derivatives=2)
    told = witness.orbitals["spatial"]
    np.testing.assert_allclose(again[0], told.values, rtol=0, atol=1e-11 * np.abs(told.values).max())
    np.testing.assert_allclose(again[4], told.laplacians, rtol=0, atol=1e-10 * np.abs(told.laplacians).max())
    return next(note for note in reading.notes if note.startswith("reading "))


def cases() -> list[tuple[str, bool]]:
    return [(name, cart) for name, r in READINGS.items() for cart in (False, True) if cart or not r.shared]


@pytest.mark.parametrize(("name", "cart"), cases())
def test_reading_is_recognised(name: str, cart: bool, tmp_path: Path) -> None:
    mol, orbitals, text = write(name, cart)
    path = tmp_path / "case.molden"
    path.write_text(text)
    note = check_values(mol, orbitals, path, {})
    assert note.split()[1] == name
    assert "reversed" not in note


@pytest.mark.parametrize("name", ["as-printed", "primitive-factors-normalised"])
def test_reversed_signs_are_recognised(name: str, tmp_path: Path) -> None:
    mol, orbitals, text = write(name, cart=False, reverse=True)
    path = tmp_path / "case.molden"
    path.write_text(text)
    note = check_values(mol, orbitals, path, {})
    assert note.split()[1] == name
    assert "signs of m = 3, 4 reversed" in note
    check_values(mol, orbitals, path, {"signs": "reversed-3-4", "reading": name})


def test_named_reading_is_taken_and_its_misfit_said(tmp_path: Path) -> None:
    note = next(n for n in converter.read(CARTESIAN_WATER, {"reading": "as-printed-shared"}).notes if "reading" in n)
    assert note.startswith("reading as-printed-shared")
    assert "does not fit" in note


def test_few_digits_are_enough(tmp_path: Path) -> None:
    mol, orbitals, text = write("contraction-normalised", cart=True, digits=5)
    path = tmp_path / "case.molden"
    path.write_text(text)
    assert check_values(mol, orbitals, path, {}, within=1e-3).split()[1] == "contraction-normalised"


def test_no_reading_fits(tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    wrong = WATER.read_text()
    orbital = re.search(r"Occup= .*\n(?: +\d+ .*\n)+", wrong)
    assert orbital is not None
    doubled = re.sub(r"(?<= )(-?)0\.", r"\g<1>3.", orbital.group())
    path.write_text(wrong.replace(orbital.group(), doubled))
    with pytest.raises(ConversionError, match="orthonormal under no reading") as caught:
        converter.read(path, {})
    assert "--reading" in caught.value.remedy
    assert "as-printed" in caught.value.found


def test_readings_that_differ_and_fit_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    path.write_text(
        "[Molden Format]\n[Atoms] AU\nHe 1 2 0 0 0\n[GTO]\n1 0\nd 1\n1.0 1.0\n\n[6D]\n[MO]\n"
        "Ene= -1\nSpin= Alpha\nOccup= 2\n4 1.0\n"
    )
    # Readings without a difference are no ambiguity: one primitive, xy of unit norm.
    assert any(note.startswith("reading as-printed ") for note in converter.read(path, {}).notes)
    path.write_text(
        "[Molden Format]\n[Atoms] AU\nHe 1 2 0 0 0\n[GTO]\n1 0\ns 2\n1.0 0.5\n2.0 0.5\n\ns 2\n1.0 0.5\n2.0 0.5\n[MO]\n"
        "Ene= -1\nSpin= Alpha\nOccup= 2\n1 1.0\n2 0.0\n"
    )
    # The contraction has the norm 0.9: only normalising it fits, with or without the factors of the primitives inside.
    with pytest.raises(ConversionError, match="more than one reading fits"):
        converter.read(path, {})
    for name in ("contraction-normalised", "primitive-factors-normalised"):
        assert any("chosen by the user" in n for n in converter.read(path, {"reading": name}).notes)


def test_all_readings_are_offered() -> None:
    assert tuple(READINGS) == next(option.choices for option in converter.options if option.name == "reading")
