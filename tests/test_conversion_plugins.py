"""Third parties' converters: what they make is checked, where they fail they are named."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from qwfx.conversion import convert, read_any
from qwfx.converters import registry
from qwfx.converters.plugin import Reading, Writing
from qwfx.errors import ConversionError
from qwfx.model import Basis, OrbitalSet, System, Wavefunction
from qwfx.storage import load


class Tides:
    """Reads what its attribute says, or fails as it says."""

    name, title, suffixes, options = "tides", "tide table", (".tide",), ()
    columns = 1
    fault: Exception | None = None
    recognition: Exception | None = None

    def recognises(self, path: Path, head: bytes) -> bool:
        if self.recognition:
            raise self.recognition
        return head.startswith(b"TIDES")

    def read(self, path: Path, options: Mapping[str, str], progress: Any = None) -> Reading:
        if self.fault:
            raise self.fault
        zero, one = np.zeros(1, "i4"), np.ones(1)
        system = System(1, 0, ("H",), np.ones(1, "i4"), one, np.zeros((1, 3)))
        basis = Basis("gaussian", zero, zero, zero.astype("i1"), np.array([0, 1]), one, one)
        return Reading(Wavefunction(system, basis=basis, orbitals={"a": OrbitalSet("up", np.ones((1, self.columns)))}))

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Any = None
    ) -> Writing:
        raise KeyError("tide")


@pytest.fixture
def tides(monkeypatch: pytest.MonkeyPatch) -> Tides:
    found, failed = registry.available()
    plugin = Tides()
    monkeypatch.setattr(registry, "_load", lambda: ({**found, "tides": plugin}, failed))
    return plugin


@pytest.fixture
def file(tmp_path: Path) -> Path:
    (tmp_path / "x.tide").write_text("TIDES\n")
    return tmp_path / "x.tide"


def test_origin_is_added(tides: Tides, file: Path, tmp_path: Path) -> None:
    convert(file, tmp_path / "x.qwfx")
    (step,) = load(tmp_path / "x.qwfx").provenance.steps
    assert step["activity"] == "read by the converter tides"
    assert step["used"][0]["entity"] == "x.tide"
    assert len(step["used"][0]["sha256"]) == 64


def test_orbitals_over_another_basis_are_refused(tides: Tides, file: Path, tmp_path: Path) -> None:
    tides.columns = 2
    with pytest.raises(ConversionError, match=r"'tides' made orbitals 'a' of shape \(1, 2\)"):
        convert(file, tmp_path / "x.qwfx")
    assert not (tmp_path / "x.qwfx").exists()


def test_a_plug_in_that_fails_is_named(tides: Tides, file: Path, tmp_path: Path) -> None:
    tides.fault = ValueError("low water")
    with pytest.raises(ConversionError, match=r"the converter 'tides' .* failed: ValueError: low water"):
        read_any(file)
    tides.fault = None
    with pytest.raises(ConversionError, match="failed: KeyError"):
        convert(file, tmp_path / "y.tide")


def test_a_plug_in_that_cannot_recognise_does_not_stop_the_others(tides: Tides, file: Path, tmp_path: Path) -> None:
    tides.recognition = RuntimeError("no moon")
    (tmp_path / "h.fcidump").write_text("&FCI NORB=1,NELEC=2,MS2=0 /\n0.7 1 1 1 1\n-1.2 1 1 0 0\n0.5 0 0 0 0\n")
    assert read_any(tmp_path / "h.fcidump")[0] == "fcidump"
    with pytest.raises(ConversionError, match="converters that failed: tides"):
        read_any(file)
