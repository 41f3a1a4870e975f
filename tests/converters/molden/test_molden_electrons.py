"""Electrons from occupations in every way they are written, and charges of nuclei, cores and ghosts."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from molden_cases import CORPUS, WATER

from qwfx.converters.molden import converter
from qwfx.converters.plugin import Reading
from qwfx.errors import ConversionError, UnsupportedError


def text(
    occupations: list[object],
    atoms: str = "He 1 2 0 0 0",
    spins: str | None = None,
    energies: list[float] | None = None,
    extra: str = "",
    different: bool = True,
) -> str:
    """A file in which each orbital is one s function."""
    n = len(occupations)
    spins = spins or "A" * n
    n_functions = max(spins.count("A"), spins.count("B"))
    exponents = [1e-3 * 10.0**k for k in range(n_functions)]
    out = ["[Molden Format]", "[Atoms] AU", atoms, *([extra] if extra else []), "[GTO]", "1 0"]
    for a in exponents:
        out += ["s 1", f"{a} 1.0"]
    out += ["", "[MO]"]
    seen = {"A": 0, "B": 0}
    for k, (spin, occupation) in enumerate(zip(spins, occupations, strict=True)):
        own = seen[spin]
        seen[spin] += 1
        if different and spin == "B":
            own = n_functions - 1 - own
        out += [f"Ene= {energies[k] if energies else -10.0 + k}", f"Spin= {'Alpha' if spin == 'A' else 'Beta'}"]
        out += [] if occupation is None else [f"Occup= {occupation}"]
        out += [f"{own + 1} 1.0"]
    return "\n".join(out) + "\n"


def read(tmp_path: Path, content: str, **options: str) -> Reading:
    path = tmp_path / "case.molden"
    path.write_text(content)
    named = {"reading": "as-printed", **{key.replace("_", "-"): value for key, value in options.items()}}
    return converter.read(path, named)


def counts(reading: Reading) -> tuple[int, int]:
    return reading.wavefunction.system.n_up, reading.wavefunction.system.n_down


def occupations(reading: Reading, name: str = "spatial") -> list[float]:
    found = reading.wavefunction.orbitals[name].occupations
    assert found is not None
    return found.tolist()


@pytest.mark.parametrize(
    ("written", "atoms", "wanted"),
    [
        ([2, 0], "He 1 2 0 0 0", (1, 1)),
        ([2, 1, 1, 0], "Be 1 4 0 0 0", (3, 1)),
        (["2.00000", "1.95000", "0.04999"], "Be 1 4 0 0 0", (2, 2)),
        (["0.20000000000000001E+01", "-1e-17"], "He 1 2 0 0 0", (1, 1)),
        ([1, 0], "He 1 2 0 0 0", (1, 0)),
    ],
)
def test_one_list(written: list[object], atoms: str, wanted: tuple[int, int], tmp_path: Path) -> None:
    assert counts(read(tmp_path, text(written, atoms))) == wanted


def test_two_lists(tmp_path: Path) -> None:
    reading = read(tmp_path, text([1, 1, 0, 1, 0, 0], "Li 1 3 0 0 0", "AAABBB"))
    assert counts(reading) == (2, 1)
    assert occupations(reading, "up") == [1.0, 1.0, 0.0]
    assert occupations(reading, "down") == [1.0, 0.0, 0.0]
    assert reading.wavefunction.expansion is not None


def test_the_same_list_twice(tmp_path: Path) -> None:
    reading = read(tmp_path, text([1, 1, 0, 1, 0, 0], "Li 1 3 0 0 0", "AAABBB", [-3, -2, -1] * 2, different=False))
    assert counts(reading) == (2, 1)
    assert occupations(reading) == [2.0, 1.0, 0.0]
    assert reading.wavefunction.orbitals["spatial"].energies is not None
    other = read(tmp_path, text([1, 1, 0, 1, 0, 0], "Li 1 3 0 0 0", "AAABBB", different=False))
    assert other.wavefunction.orbitals["spatial"].energies is None
    assert any("energies" in note for note in other.notes)


def test_one_spin_for_both(tmp_path: Path) -> None:
    """One list with occupation 1 in a neutral closed shell."""
    reading = read(tmp_path, text([1, 1, 0], "Be 1 4 0 0 0"))
    assert counts(reading) == (2, 2)
    assert occupations(reading) == [2.0, 2.0, 0.0]
    assert any("doubled" in note for note in reading.notes)


@pytest.mark.parametrize("written", [[0, 0], [None, None], ["1.3", "0.2"], [3, 0]])
def test_undecided(written: list[object], tmp_path: Path) -> None:
    with pytest.raises(ConversionError, match="cannot be told") as caught:
        read(tmp_path, text(written))
    assert "--set electrons=UP,DOWN" in caught.value.remedy


def test_named_electrons_fill_by_energy(tmp_path: Path) -> None:
    reading = read(tmp_path, text([0, 0, 0], "Li 1 3 0 0 0", energies=[5.0, -1.0, -3.0]), electrons="2,1")
    assert counts(reading) == (2, 1)
    assert occupations(reading) == [0.0, 1.0, 2.0]
    assert any("order of the energies" in note for note in reading.notes)
    assert reading.wavefunction.expansion is not None


def test_named_electrons_fill_each_spin(tmp_path: Path) -> None:
    reading = read(tmp_path, text([0] * 4, "Li 1 3 0 0 0", "AABB"), electrons="2,1")
    assert occupations(reading, "up") == [1.0, 1.0]
    assert occupations(reading, "down") == [1.0, 0.0]


def test_named_electrons_that_the_occupations_contradict(tmp_path: Path) -> None:
    reading = read(tmp_path, text([2, 1, 0], "Li 1 3 0 0 0"), electrons="1,1")
    assert reading.wavefunction.orbitals["spatial"].occupations is None
    assert any("left out" in note for note in reading.notes)
    assert counts(read(tmp_path, text([1, 1, 0]), electrons="1,1")) == (1, 1)


@pytest.mark.parametrize("option", ["5", "a,b", "-1,2", "1,1,1", "9,1"])
def test_bad_electrons(option: str, tmp_path: Path) -> None:
    with pytest.raises(ConversionError) as caught:
        read(tmp_path, text([2, 0]), electrons=option)
    assert caught.value.where == "--set electrons"


@pytest.mark.parametrize(
    ("line", "extra", "number", "charge"),
    [
        ("CA 1 6 0 0 0", "", 6, 6.0),
        ("cl2 1 17 0 0 0", "", 17, 17.0),
        ("Cl 1 7 0 0 0", "", 17, 7.0),
        ("C 1 4 0 0 0", "", 6, 4.0),
        ("D 1 1 0 0 0", "", 1, 1.0),
        ("atom 1 8 0 0 0", "", 85, 8.0),
        ("*1 1 8.0 0 0 0", "", 8, 8.0),
        ("Bq 1 0 0 0 0", "", 0, 0.0),
        ("Bq-O1 1 0 0 0 0", "", 8, 0.0),
        ("Xe 1 0 0 0 0", "", 54, 0.0),
        ("N 1 0 0 0 0", "", 7, 0.0),
        ("Fe 1 26 0 0 0", "[Core]\n1 : 10", 26, 16.0),
        ("Fe 1 26 0 0 0", "[Pseudo]\nFe 1 16", 26, 16.0),
        ("Fe 1 26 0 0 0", "[Nval]\nFe 16", 26, 16.0),
    ],
)
def test_atoms(line: str, extra: str, number: int, charge: float, tmp_path: Path) -> None:
    content = text([0] * 10, line, extra=extra)
    half = int(charge) // 2
    system = read(tmp_path, content, electrons=f"{int(charge) - half},{half}").wavefunction.system
    assert system.atomic_numbers.tolist() == [number]
    assert system.effective_charges.tolist() == [charge]


def test_core_by_count(tmp_path: Path) -> None:
    system = read(tmp_path, text([2] * 4, "I 1 53 0 0 0")).wavefunction.system
    assert system.effective_charges.tolist() == [7.0]
    with pytest.raises(ConversionError, match="no core potentials explain it"):
        read(tmp_path, text([2] * 3, "Kr 1 36 0 0 0"))
    assert read(
        tmp_path, text([2] * 3, "Kr 1 36 0 0 0"), core_electrons="Kr=28"
    ).wavefunction.system.effective_charges.tolist() == [8.0]


def test_small_core_by_the_orbital_energies(tmp_path: Path) -> None:
    """Carbon with four electrons: a double cation with its 1s orbital, or a neutral atom without."""
    low = read(tmp_path, text([2, 2], "C 1 6 0 0 0", energies=[-12.0, -1.0])).wavefunction.system
    high = read(tmp_path, text([2, 2], "C 1 6 0 0 0", energies=[-0.7, -0.4])).wavefunction.system
    assert low.effective_charges.tolist() == [6.0]
    assert high.effective_charges.tolist() == [4.0]


@pytest.mark.parametrize("option", ["I", "I=", "Xx=2", "O=9", "O=-1", "O=two"])
def test_bad_core_electrons(option: str) -> None:
    with pytest.raises(ConversionError) as caught:
        converter.read(WATER, {"core-electrons": option})
    assert caught.value.where == "--set core-electrons"


def test_core_potential_of_the_library() -> None:
    reading = converter.read(CORPUS / "A/f_hi_rhf_def2svp_ecp/case.molden", {"core-potential": "I=def2-svp"})
    potentials = reading.wavefunction.potentials
    assert potentials is not None
    assert set(np.asarray(potentials.center).tolist()) == {0}
    with pytest.raises(UnsupportedError):
        converter.read(WATER, {"core-potential": "O=no-such-potential"})


def test_energies_that_are_occupations_are_left_out() -> None:
    reading = converter.read(CORPUS / "A/g_n2_casscf66_ccpvdz/case.molden", {})
    assert reading.wavefunction.orbitals["spatial"].energies is None
