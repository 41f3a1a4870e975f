"""Every verb as a user runs it: exit codes, what is said, and what is left on the disk."""

from __future__ import annotations

import json
import os
import pty
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

import qwfx
from qwfx.cli import VERBS, main
from qwfx.storage import load


class Said:
    """What one run printed and how it ended."""

    def __init__(self, code: int, out: str, err: str) -> None:
        self.code, self.out, self.err = code, out, err


@pytest.fixture
def run(capfd: pytest.CaptureFixture[str]) -> Any:
    def call(*arguments: object) -> Said:
        capfd.readouterr()
        with pytest.raises(SystemExit) as stop:
            main([str(a) for a in arguments])
        out, err = capfd.readouterr()
        assert "Traceback" not in out + err
        return Said(int(stop.value.code or 0), out, err)

    return call


@pytest.fixture(scope="session")
def checkpoint(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A converged calculation on water in a small basis."""
    from pyscf import gto, scf

    mol = gto.M(atom="O 0 0 0.1173; H 0 0.7572 -0.4692; H 0 -0.7572 -0.4692", basis="6-31g", verbose=0)
    mf = scf.RHF(mol)
    path = tmp_path_factory.mktemp("cli") / "water.chk"
    mf.chkfile = str(path)
    mf.kernel()
    return path


@pytest.fixture(scope="session")
def water(checkpoint: Path) -> Path:
    from qwfx.conversion import convert

    target = checkpoint.with_suffix(".qwfx")
    convert(checkpoint, target)
    return target


@pytest.mark.parametrize("verb", VERBS)
def test_every_verb_has_help(verb: str, run: Any) -> None:
    said = run(verb, "--help")
    assert said.code == 0
    assert "Usage: qwfx " + verb in said.out


def test_version_and_unknown_verbs(run: Any) -> None:
    assert qwfx.__version__ in run("--version").out
    said = run("shwo")
    assert said.code == 2
    assert "did you mean 'show'" in said.err


def test_convert_says_what_it_did_and_never_overwrites(checkpoint: Path, tmp_path: Path, run: Any) -> None:
    target = tmp_path / "water.qwfx"
    said = run("convert", checkpoint, target)
    assert said.code == 0
    assert "(pyscf) ->" in said.out
    before = target.read_bytes()
    again = run("convert", checkpoint, target)
    assert again.code == 2
    assert "already exists" in again.err
    assert "--force" in again.err
    assert target.read_bytes() == before
    assert run("convert", checkpoint, target, "--force", "--quiet").out == ""
    same = run("convert", target, target.parent / "." / target.name, "--to", "qwfx")
    assert same.code == 2
    assert "the same file" in same.err
    positions = load(target).system.positions
    assert run("convert", target, target, "--to", "qwfx", "--force").code == 0
    assert np.array_equal(load(target).system.positions, positions)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["convert", "{missing}", "{new}.qwfx"], ["cannot be read", "to do:"]),
        (["convert", "{text}", "{new}.qwfx"], ["no known format", "--as"]),
        (["convert", "{empty}", "{new}.qwfx"], ["empty"]),
        (["convert", "{folder}", "{new}.qwfx"], ["is a folder"]),
        (["convert", "{water}", "{new}.xyz"], ["does not tell which format", "--to"]),
        (["convert", "{water}", "{new}.chk", "--as", "nonsense"], ["no converter is called 'nonsense'"]),
        (["convert", "{water}", "{new}.chk", "--set", "colour=red"], ["has no option 'colour'"]),
        (["convert", "{water}", "{new}.chk", "--set", "colour"], ["NAME=VALUE"]),
        (["convert", "{water}", "{folder}/no/such/folder/x.qwfx"], ["cannot be written", "nothing was changed"]),
        (["show", "{missing}"], ["cannot be opened"]),
        (["show", "{text}"], ["not an HDF5 file"]),
        (["diff", "{water}", "{missing}"], ["cannot be opened"]),
        (["outline"], ["either FILE or --schema"]),
        (["outline", "--schema", "nonsense"], ["to do:"]),
        (["explain", "orthonormalitee"], ["orthonormality"]),
        (["roundtrip", "{water}", "--points-file", "{text}"], ["three numbers a line"]),
        (["roundtrip", "{water}", "--through", "nonsense"], ["no converter is called"]),
        (["validate", "{water}", "--rule", "nonsense"], ["nonsense"]),
    ],
)
def test_bad_input_gives_one_clear_error_and_leaves_nothing(
    arguments: list[str], words: list[str], water: Path, tmp_path: Path, run: Any
) -> None:
    (tmp_path / "text.txt").write_text("once upon a time\n")
    (tmp_path / "empty.dat").touch()
    (tmp_path / "folder").mkdir()
    names = {
        "missing": tmp_path / "missing.dat", "text": tmp_path / "text.txt", "empty": tmp_path / "empty.dat",
        "folder": tmp_path / "folder", "new": tmp_path / "new", "water": water,
    }  # fmt: skip
    before = sorted(tmp_path.rglob("*"))
    said = run(*(a.format(**names) for a in arguments))
    assert said.code == 2, said.out + said.err
    for word in words:
        assert word in said.err, said.err
    assert sorted(tmp_path.rglob("*")) == before


def test_show_tells_what_is_in_the_file(water: Path, run: Any) -> None:
    said = run("show", water)
    for words in ("H2O, neutral", "13 functions", "5 up, 5 down", "RHF", "witness", "1 determinant"):
        assert words in said.out
    (document,) = json.loads(run("show", water, "--format", "json").out)
    assert document["content_digest"].startswith(said.out.split("content")[1].split()[0])
    assert len(run("show", water, water).out.split("H2O")) == 3


def test_validate_and_its_formats(water: Path, tmp_path: Path, run: Any) -> None:
    import jsonschema

    from qwfx.schema_check import load_schema

    good = run("validate", water)
    assert good.code == 0
    assert "valid" in good.out
    broken = tmp_path / "broken.qwfx"
    from qwfx.demo import break_on_purpose

    qwfx.save(break_on_purpose(qwfx.load(water)), broken)
    said = run("validate", water, broken)
    assert said.code == 1
    assert "witness-orbitals" in said.out
    report = json.loads(run("validate", water, broken, "--format", "json").out)
    jsonschema.validate(report, load_schema("report"))
    log = json.loads(run("validate", broken, "--format", "sarif").out)
    assert log["version"] == "2.1.0"
    assert "witness-orbitals" in {result["ruleId"] for result in log["runs"][0]["results"]}
    assert run("validate", tmp_path / "absent.qwfx", water).code == 2


def test_explain_lists_and_prints(run: Any) -> None:
    listing = run("explain").out
    assert "orthonormality" in listing
    assert run("explain", "orthonormality").code == 0


def test_roundtrip_through_a_checkpoint(checkpoint: Path, tmp_path: Path, run: Any) -> None:
    said = run("roundtrip", checkpoint, "--keep", tmp_path / "kept", "--region", "nuclei", "--seed", "3")
    assert said.code == 0, said.out + said.err
    assert "the same" in said.out
    assert {p.name for p in (tmp_path / "kept").iterdir()} == {"there.qwfx", "through.chk", "back.qwfx"}
    report = json.loads(run("roundtrip", checkpoint, "--format", "json", "--points", 30).out)
    assert report["same"] is True
    assert report["n_points"] == 30
    assert len(report["sets"][0]["orbitals"]) == 13
    points = tmp_path / "points.txt"
    points.write_text("0.1 0.2 0.3\n1 2 3\n")
    assert json.loads(run("roundtrip", checkpoint, "--format", "json", "--points-file", points).out)["n_points"] == 2
    strict = run("roundtrip", checkpoint, "--tolerance", "0")
    assert strict.code == 1
    assert "DIFFERENT" in strict.out


def test_diff(water: Path, tmp_path: Path, run: Any) -> None:
    import dataclasses

    assert run("diff", water, water).code == 0
    other = tmp_path / "other.qwfx"
    wavefunction = qwfx.load(water)
    system = dataclasses.replace(wavefunction.system, positions=wavefunction.system.positions + 1e-7)
    qwfx.save(dataclasses.replace(wavefunction, system=system), other)
    said = run("diff", water, other)
    assert said.code == 1
    assert "/system/positions" in said.out
    assert run("diff", water, other, "--absolute", "2e-7").code == 0
    assert json.loads(run("diff", water, other, "--format", "json").out)["same"] is False


def test_outline_can_be_checked_by_any_implementation(water: Path, run: Any) -> None:
    import jsonschema

    document = json.loads(run("outline", water).out)
    schema = json.loads(run("outline", "--schema", "qwfx-1.0").out)
    jsonschema.Draft202012Validator(schema).validate(document)
    del document["members"]["system"]["members"]["positions"]
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.Draft202012Validator(schema).validate(document)


def test_the_reader_of_our_output_may_go_away(water: Path) -> None:
    command = f"{sys.executable} -m qwfx outline {water} | head -c 10"
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True)
    assert "Traceback" not in done.stderr
    assert "rror" not in done.stderr


def test_a_fault_of_our_own_is_said_as_such(monkeypatch: pytest.MonkeyPatch, run: Any, water: Path) -> None:
    def fail(*_: object, **__: object) -> None:
        raise ZeroDivisionError("by purpose")

    monkeypatch.setattr("qwfx.summary.summarise", fail)
    said = run("show", water)
    assert said.code == 2
    assert "a fault of qwfx itself" in said.err
    monkeypatch.setenv("QWFX_TRACEBACK", "1")
    with pytest.raises(ZeroDivisionError):
        main(["show", str(water)])


def test_progress_is_for_terminals_only(checkpoint: Path, tmp_path: Path) -> None:
    words = [sys.executable, "-m", "qwfx", "convert", str(checkpoint), str(tmp_path / "a.qwfx")]
    piped = subprocess.run(words, capture_output=True, text=True, check=True)
    assert piped.stderr == ""
    master, terminal = pty.openpty()
    words[-1] = str(tmp_path / "b.qwfx")
    done = subprocess.run(words, stdout=subprocess.PIPE, stderr=terminal, text=True, check=True)
    os.close(terminal)
    os.close(master)
    assert "->" in done.stdout


def test_click_runner_sees_the_group() -> None:
    from qwfx.cli import _qwfx

    result = CliRunner().invoke(_qwfx, ["--help"])
    assert result.exit_code == 0
    assert all(verb in result.output for verb in VERBS)


def test_orbitals_survive_the_file(water: Path, checkpoint: Path) -> None:
    from pyscf import lib

    energies = qwfx.load(water).orbitals["spatial"].energies
    (stored,) = (v for key, v in lib.chkfile.load(str(checkpoint), "scf").items() if key.endswith("_energy"))
    assert np.array_equal(stored, energies)
