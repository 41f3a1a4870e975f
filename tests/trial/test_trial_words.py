"""What `qwfx validate` finds and what `Trial` refuses: the same member, index and words."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pyscf import gto, mcscf, scf

from qwfx.converters.pyscf import from_pyscf
from qwfx.errors import FormatError
from qwfx.model import JastrowTerm, Wavefunction
from qwfx.storage import save
from qwfx.trial import Trial
from qwfx.validate import validate


@pytest.fixture(scope="module")
def sound() -> Wavefunction:
    mf = scf.RHF(gto.M(atom="Li 0 0 0; H 0 0 1.6", basis="6-31g", verbose=0)).run()
    return from_pyscf(mcscf.CASCI(mf, 4, 2).run())


def expansion(**changes: Any) -> Any:
    def changed(wf: Wavefunction) -> Wavefunction:
        assert wf.expansion is not None
        made = {name: change(np.array(getattr(wf.expansion, name))) for name, change in changes.items()}
        return replace(wf, expansion=replace(wf.expansion, **made))

    return changed


def put(index: int, value: int) -> Any:
    def change(array: np.ndarray) -> np.ndarray:
        array[index] = value
        return array

    return change


def term(form: str, body: str, **members: Any) -> Any:
    told: dict[str, Any] = {"body": body} | ({"smoothness": 3} if form == "cutoff-polynomial" else {})
    arrays = {name: np.array(value) for name, value in members.items()}
    return lambda wf: replace(wf, jastrow={"t": JastrowTerm(form, told, arrays)})


def smaller(wf: Wavefunction) -> Wavefunction:
    s = wf.orbitals["spatial"]
    return replace(wf, orbitals={"spatial": replace(
        s, coefficients=np.asarray(s.coefficients)[:4], energies=None, occupations=None, roles=None, irreps=None
    )})  # fmt: skip


CASES = {
    "wrong count": (expansion(up_strings=put(2, 0b111)), "/expansion/up_strings[2]"),
    "wrong order": (expansion(down_strings=lambda a: a[::-1]), "/expansion/down_strings[1]"),
    "no such column": (expansion(columns=put(3, 99)), "/expansion/columns[3]"),
    "set too small": (smaller, "/expansion/up_strings[3]"),
    "no such atom": (
        term("pade", "electron-nucleus", channel=["up"], atoms=np.array([0, 2], "i4"), a=[0.1], b=[1.0]),
        "/jastrow/t/atoms[1]",
    ),
    "pole": (term("pade", "electron-electron", channel=["up_down"], a=[0.5], b=[-0.4]), "/jastrow/t/b[0]"),
    "no length": (
        term("bspline", "electron-electron", channel=["up_down"], cutoff=[-1.0], coefficients=np.ones((1, 5))),
        "/jastrow/t/cutoff[0]",
    ),
    "not symmetric": (
        term("cutoff-polynomial", "three-body", channel=["up_up"], atoms=np.array([0], "i4"), cutoff=[3.0],
             coefficients=np.arange(8.0).reshape(1, 2, 2, 2)),
        "/jastrow/t/coefficients[0,0,1,0]",
    ),
    "negative scale": (
        term("scaled-polynomial", "electron-electron", channel=["up_down"], scale=[-1.0],
             powers=np.array([1], "i4"), coefficients=np.ones((1, 1))),
        "/jastrow/t/scale[0]",
    ),
    "channel twice": (
        term("pade", "electron-electron", channel=["up_up", "up_up"], a=[0.2, 0.2], b=[1.0, 1.0]),
        "/jastrow/t/channel[1]",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_the_same_words(name: str, sound: Wavefunction, tmp_path: Path) -> None:
    change, where = CASES[name]
    broken = replace(change(sound), witness=None)
    with pytest.raises(FormatError) as caught:
        Trial(broken)
    save(broken, tmp_path / "x.qwfx")
    findings = {(f.where, f.expected, f.found, f.remedy) for f in validate(tmp_path / "x.qwfx").findings}
    error = caught.value
    assert error.where == where
    assert (error.where, error.expected, error.found, error.remedy) in findings


def test_the_sound_one_is_sound(sound: Wavefunction) -> None:
    Trial(sound)
