"""``qwfx amend``: what it puts in, what it refuses, and that a refusal changes nothing."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pyscf import gto, scf

from qwfx.cli import main
from qwfx.converters.pyscf import from_pyscf
from qwfx.kernels.jastrow import Jastrow
from qwfx.model import WitnessConfigurations
from qwfx.storage import load, save
from qwfx.validate import validate

PAIRS = """
[pairs]
form = "pade"
body = "electron-electron"
channel = ["up_up", "up_down", "down_down"]
a = [0.25, 0.5, 0.25]
b = [1, 1.2, 1.0]
"""
NUCLEI = """
[nuclei]
form = "cutoff-polynomial"
body = "electron-nucleus"
smoothness = 3
channel = ["up", "down"]
atoms = [0]
cutoff = [4.0, 4.0]
coefficients = [[0.01, 0.0075], [0.01, 0.0075]]
"""


@pytest.fixture
def file(tmp_path: Path) -> Path:
    wf = from_pyscf(scf.RHF(gto.M(atom="Li 0 0 0; H 0 0 1.6", basis="sto-3g", verbose=0)).run())
    assert wf.witness is not None
    none = np.zeros((1, 1))
    configurations = WitnessConfigurations(
        np.ones((1, 4, 3)), none, none + 1, np.zeros((1, 1, 4, 3)), none, none, none
    )
    save(replace(wf, witness=replace(wf.witness, configurations=configurations)), tmp_path / "lih.qwfx")
    return tmp_path / "lih.qwfx"


def amend(capsys: pytest.CaptureFixture[str], *arguments: object) -> tuple[int, str, str]:
    with pytest.raises(SystemExit) as left:
        main(["amend", *map(str, arguments)])
    said = capsys.readouterr()
    return int(left.value.code or 0), said.out, said.err


def written(tmp_path: Path, text: str, name: str = "terms.toml") -> Path:
    (tmp_path / name).write_text(text)
    return tmp_path / name


def test_terms_go_in(file: Path, tmp_path: Path, capsys: Any) -> None:
    code, out, _ = amend(capsys, file, "--jastrow", written(tmp_path, PAIRS + NUCLEI))
    assert code == 0
    assert "'pairs' put in: pade" in out
    assert "local energy of the witness removed" in " ".join(out.split())
    wf = load(file)
    assert sorted(wf.jastrow) == ["nuclei", "pairs"]
    assert wf.jastrow["nuclei"].members["atoms"].dtype == np.int32
    assert wf.witness is not None
    assert wf.witness.configurations is not None
    assert wf.witness.configurations.local_energy is None
    step = wf.provenance.steps[-1]
    assert step["activity"] == "amended"
    assert len(step["used"][0]["sha256"]) == 64
    assert Jastrow(wf).slopes() == {"up_up": 0.25, "up_down": 0.5, "down_down": 0.25}


def test_to_another_file_and_in_the_place_of_others(file: Path, tmp_path: Path, capsys: Any) -> None:
    before, other = file.read_bytes(), tmp_path / "other.qwfx"
    terms = written(tmp_path, PAIRS)
    assert amend(capsys, file, "--jastrow", terms, "--output", other)[0] == 0
    assert file.read_bytes() == before
    code, _, err = amend(capsys, file, "--jastrow", terms, "--output", other)
    assert (code, "already exists" in err) == (2, True)
    code, _, err = amend(capsys, other, "--jastrow", terms)
    assert (code, "--replace" in err) == (2, True)
    code, out, _ = amend(capsys, other, "--jastrow", written(tmp_path, PAIRS.replace("1.2", "0.7")), "--replace")
    assert (code, "replaced" in out) == (0, True)
    assert load(other).jastrow["pairs"].members["b"][1] == 0.7


def test_a_factor_to_start_from_fulfils_the_cusps(file: Path, capsys: Any) -> None:
    assert amend(capsys, file, "--start-jastrow")[0] == 0
    slopes = Jastrow(load(file)).slopes()
    assert slopes == pytest.approx({"up_up": 0.25, "up_down": 0.5, "down_down": 0.25})
    assert not [f for f in validate(file).findings if "jastrow" in f.rule]


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[pairs\n", "is no TOML"), ("", "there are no terms"), ("pairs = 3\n", "a table with form"),
        (PAIRS.replace('"pade"', '"own"'), "the form 'own'"), (PAIRS.replace("b =", "c ="), "pairs/b"),
        (PAIRS.replace("[1, 1.2, 1.0]", "[-1, 1.2, 1.0]"), "pairs/b[0]"),
        (PAIRS.replace("b = [1, 1.2, 1.0]", "b = [1]"), "b"),
        (PAIRS.replace("[1, 1.2, 1.0]", '["x", "y", "z"]'), "numbers"),
        (NUCLEI.replace("[0]", "[5]"), "nuclei/atoms[0]"),
        (NUCLEI.replace("[0]", "[0.5]"), "whole numbers"),
        (NUCLEI.replace("0.01, 0.0075], [", "0.01], ["), "one length"),
        (NUCLEI.replace("smoothness = 3", "smoothness = true"), "smoothness"),
        (NUCLEI.replace("atoms = [0]\n", ""), "atoms"), (PAIRS.replace('"up_up"', '"up"'), "channel"),
    ],
)  # fmt: skip
def test_what_is_refused_changes_nothing(file: Path, tmp_path: Path, capsys: Any, text: str, words: str) -> None:
    before = file.read_bytes()
    code, _, err = amend(capsys, file, "--jastrow", written(tmp_path, text))
    assert code == 2
    assert words in " ".join(err.split())
    assert "terms.toml" in err
    assert file.read_bytes() == before


def test_determinants_go_in(file: Path, tmp_path: Path, capsys: Any) -> None:
    listed = written(tmp_path, "0.95 | 1 2 | 1 2\n-0.3 | 1 3 | 1 3\n", "list.txt")
    code, _, err = amend(capsys, file, "--determinants", listed)
    assert (code, "--replace" in err) == (2, True)
    code, out, _ = amend(capsys, file, "--determinants", listed, "--replace")
    assert (code, "2 determinants" in out) == (0, True)
    wf = load(file)
    assert wf.expansion is not None
    assert np.asarray(wf.expansion.up_strings).tolist() == [[3], [5]]
    assert wf.witness is not None
    assert wf.witness.configurations is None
    for text, words in (("1 | 1 | 1 2\n", "2, the up electrons"), ("1 | 1 9 | 1 2\n", "1 to 6")):
        code, _, err = amend(capsys, file, "--determinants", written(tmp_path, text, "bad.txt"), "--replace")
        assert (code, words in err) == (2, True)
    code, _, err = amend(capsys, file, "--determinants", listed, "--replace", "--sets", "a,b")
    assert (code, "no orbital set 'a'" in err) == (2, True)
    assert amend(capsys, file, "--determinants", listed, "--sets", "a")[0] == 2


def test_nothing_to_put_in(file: Path, tmp_path: Path, capsys: Any) -> None:
    code, _, err = amend(capsys, file)
    assert (code, "nothing to put in" in err) == (2, True)
    code, _, err = amend(capsys, file, "--jastrow", tmp_path / "absent.toml")
    assert (code, "cannot be read" in err) == (2, True)
