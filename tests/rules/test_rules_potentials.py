"""Published core potentials, as PySCF's library has them, raise no alarm; the same with a slip do."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from corpus.valid import carbon

from qwfx.findings import Severity
from qwfx.model import Potentials, System, Wavefunction
from qwfx.storage import save
from qwfx.validate import validate

RULES = ["core-charges", "potential-pole", "potential-terms"]
LIBRARY = """ccecp H, ccecp C, ccecp Fe, bfd He, bfd Cl, lanl2dz Cu, sbkjc Br, crenbl Pb, stuttgartrsc Au, lanl08 Zn"""
CASES = [tuple(case.split()) for case in LIBRARY.split(", ")]


def molecule(library: str, element: str) -> Wavefunction:
    """The atom with a potential of PySCF's library, whose terms of r^(n-2) stand at index n."""
    from pyscf.data.elements import charge
    from pyscf.gto.basis import load_ecp

    cores, channels = load_ecp(library, element)
    rows = [(l, n - 2, *term) for l, powers in channels for n, terms in enumerate(powers) for term in terms]
    channel, power, exponent, coefficient = (np.array(column) for column in zip(*rows, strict=True))
    number = charge(element)
    potentials = Potentials(
        np.zeros(len(rows), dtype=np.int32), channel.astype(np.int32), power.astype(np.int32), exponent, coefficient
    )
    atom = System(1, 1, (element,), np.array([number], "i4"), np.array([float(number - cores)]), np.zeros((1, 3)))
    return replace(carbon(), system=atom, potentials=potentials)


def alarms(whole: Wavefunction, folder: Path) -> list[str]:
    save(whole, folder / "a.qwfx")
    report = validate(folder / "a.qwfx", rules=RULES)
    ran = [r for r in report.results if r.rule in RULES and r.outcome.value in ("passed", "found")]
    assert len(ran) >= 2
    return [
        f"{f.severity.value} {f.rule}" for f in report.findings if f.severity is not Severity.NOTE and f.rule in RULES
    ]


@pytest.mark.parametrize(("library", "element"), CASES)
def test_published_potentials_pass(library: str, element: str, tmp_path: Path) -> None:
    assert alarms(molecule(library, element), tmp_path) == []


@pytest.mark.parametrize(("library", "element"), [c for c in CASES if c[1] not in ("H", "He")])
def test_full_charge_with_them_is_an_error(library: str, element: str, tmp_path: Path) -> None:
    whole = molecule(library, element)
    full = replace(whole.system, effective_charges=whole.system.atomic_numbers.astype(np.float64))
    assert "error core-charges" in alarms(replace(whole, system=full), tmp_path)


@pytest.mark.parametrize(("library", "element"), [("ccecp", "C"), ("bfd", "Cl")])
def test_powers_shifted_by_two_are_noticed(library: str, element: str, tmp_path: Path) -> None:
    """Tables of n in r^(n-2) stored as n: the term that cancels the pole is gone, and r^1 terms stand at r^-1 - 2."""
    whole = molecule(library, element)
    assert whole.potentials is not None
    shifted = replace(whole.potentials, power=whole.potentials.power - 2)
    assert alarms(replace(whole, potentials=shifted), tmp_path)
