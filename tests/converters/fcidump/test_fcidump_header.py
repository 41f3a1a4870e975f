"""The namelist in every spelling, made from a grammar."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx.converters.fcidump import converter
from qwfx.converters.fcidump.header import read_header
from qwfx.converters.plugin import Reading
from qwfx.errors import ConversionError

BODY = "0.7 1 1 1 1\n0.1 2 1 2 1\n-1.2 1 1 0 0\n-0.5 2 2 0 0\n0.4 0 0 0 0\n"


def read(tmp_path: Path, text: str, **options: str) -> Reading:
    path = tmp_path / "x.fcidump"
    path.write_text(text, "utf-8", newline="")
    assert converter.recognises(path, path.read_bytes())
    return converter.read(path, options)


@st.composite
def namelists(draw: st.DrawFn) -> tuple[str, dict[str, int | bool | None], list[int]]:
    """Text, what it says, the values of ORBSYM."""
    n = draw(st.integers(1, 20))
    said: dict[str, int | bool | None] = {"NORB": n, "NELEC": draw(st.integers(0, 2 * n))}
    said["MS2"] = draw(st.none() | st.integers(-5, 5))
    said["ISYM"] = draw(st.none() | st.integers(0, 8))
    said["UHF"] = draw(st.none() | st.booleans())
    symmetry = draw(st.lists(st.integers(0, 8), min_size=n, max_size=n) | st.just([]))
    blank = st.sampled_from(["", " ", "  ", "\t", "\n", "\r\n  ", " ! a comment, with = and /\n "])
    comma = st.sampled_from([",", " ", " , ", ",\n", ",\r\n\t", " ! half\n,"])

    def number(value: int) -> str:
        return draw(st.sampled_from([f"{value}", f"{value:+d}", f"{value:02d}" if value >= 0 else f"{value}"]))

    def case(word: str) -> str:
        return draw(st.sampled_from([word.upper(), word.lower(), word.capitalize()]))

    assignments = []
    for key, value in said.items():
        if value is None:
            continue
        if key == "UHF":
            words = [".TRUE.", "T", ".t.", "true", "1"] if value else [".FALSE.", "F", ".f.", "false", "0"]
            text = draw(st.sampled_from(words))
        else:
            text = number(int(value))
        assignments.append(f"{case(key)}{draw(blank)}={draw(blank)}{text}")
    if symmetry:
        tokens, k = [], 0
        while k < len(symmetry):
            run = 1
            while draw(st.booleans()) and k + run < len(symmetry) and symmetry[k + run] == symmetry[k]:
                run += 1
            tokens.append(f"{run}*{symmetry[k]}" if run > 1 or draw(st.booleans()) else number(symmetry[k]))
            k += run
        text = tokens[0]
        for token in tokens[1:]:
            text += draw(comma) + token
        assignments.append(f"{case('ORBSYM')}{draw(st.sampled_from(['', '(1)']))} = {text}")
    if draw(st.booleans()):
        assignments.append(draw(st.sampled_from(["TREL=.FALSE.", "NPROP = 0, 1, 2", "title='a name'", "ST=3*0"])))
    assignments = draw(st.permutations(assignments))
    mark = draw(st.sampled_from("&$"))
    text = draw(st.sampled_from(["", "\n", " \r\n\n", "! first\n"])) + f"{draw(st.sampled_from(['', ' ']))}{mark}"
    text += case("fci") + draw(st.sampled_from([" ", "\n", "\t"])) + assignments[0]
    for assignment in assignments[1:]:
        text += draw(comma) + assignment
    text += draw(st.sampled_from(["", ",", " ,"])) + draw(st.sampled_from([" ", "\n", "\r\n "]))
    text += draw(st.sampled_from(["/", mark + case("end"), mark + case("end") + "  ! done"]))
    return text + "\n", said, symmetry


@given(namelists())
@settings(max_examples=300, deadline=None)
def test_every_spelling(case: tuple[str, dict[str, int | bool | None], list[int]]) -> None:
    text, said, symmetry = case
    header = read_header((text + BODY).encode(), "x")
    assert header.n_orbitals == said["NORB"]
    assert header.n_electrons == said["NELEC"]
    assert header.ms2 == said["MS2"]
    assert header.state_symmetry == said["ISYM"]
    assert header.spin_resolved == bool(said["UHF"])
    assert list(header.orbital_symmetry) == symmetry
    assert (text + BODY).encode()[header.end :].strip() == BODY.strip().encode()


@pytest.mark.parametrize(
    ("header", "up", "down", "note"),
    [
        ("NELEC=3,MS2=1", 2, 1, None), ("NELEC=3,MS2=-1", 1, 2, None), ("NELEC=3", 2, 1, "no MS2"),
        ("NELEC=2", 1, 1, "no MS2"), ("NELEC=0,MS2=0", 0, 0, None), ("NELEC=2,MS2=2", 2, 0, None),
    ],
)  # fmt: skip
def test_electrons(tmp_path: Path, header: str, up: int, down: int, note: str | None) -> None:
    reading = read(tmp_path, f"&FCI NORB=2,{header} /\n{BODY}")
    assert (reading.wavefunction.system.n_up, reading.wavefunction.system.n_down) == (up, down)
    assert any(note in text for text in reading.notes) if note else not any("MS2" in text for text in reading.notes)


@pytest.mark.parametrize(
    ("orbsym", "isym", "option", "orbitals", "state"),
    [
        ("1,2", "1", None, [0, 1], 0), ("1,2", "2", None, [0, 1], 1), ("0,1", "1", None, [0, 1], 1),
        ("0,1", "0", None, [0, 1], 0), ("1,2", "0", None, [0, 1], 0), ("1,2", "1", "from-0", [0, 1], 1),
        ("0,1", "1", "from-1", [0, 1], 0), ("1,1", "0", None, [0, 0], 0), ("0,0", "1", None, [0, 0], 0),
        ("1,2", None, None, [0, 1], None), ("8,1", "8", None, [7, 0], 7), ("7,0", "7", None, [7, 0], 7),
        ("1,2", "9", None, [0, 1], None), ("1,9", "1", None, None, None), (None, "1", None, None, None),
    ],
)  # fmt: skip
def test_irreps(
    tmp_path: Path, orbsym: str | None, isym: str | None, option: str | None, orbitals: list[int] | None,
    state: int | None,
) -> None:  # fmt: skip
    keys = [f"ORBSYM={orbsym}"] if orbsym else []
    keys += [f"ISYM={isym}"] if isym else []
    reading = read(tmp_path, f"&FCI NORB=2,NELEC=2,{','.join(keys)} /\n{BODY}", **({"isym": option} if option else {}))
    h = reading.wavefunction.hamiltonian
    assert h is not None
    found = None if h.orbital_symmetry is None else np.asarray(h.orbital_symmetry).tolist()
    assert (found, h.state_symmetry) == (orbitals, state)


def test_irreps_are_tried_on_the_integrals(tmp_path: Path) -> None:
    """Numbers 1, 2, 3, 4: with 0 as the first, 4 = 1 x 2 x 3 is allowed; with 1 as the first, 0 x 1 x 2 x 3 is."""
    head = "&FCI NORB=4,NELEC=4,MS2=0,ORBSYM={} /\n"
    one = "".join(f"-1 {i} {i} 0 0\n" for i in range(1, 5)) + "1.5 0 0 0 0\n"

    def irreps(numbers: str, two: str) -> list[int] | None:
        h = read(tmp_path, head.format(numbers) + two + one).wavefunction.hamiltonian
        assert h is not None
        return None if h.orbital_symmetry is None else np.asarray(h.orbital_symmetry).tolist()

    assert irreps("1,2,3,4", "0.1 1 2 3 4\n") == [0, 1, 2, 3]
    assert irreps("2,4,6,1", "0.1 1 2 3 3\n") is None  # a pair of different irreps with a symmetric pair
    assert irreps("1,3,5,7", "0.1 1 2 3 4\n") == [0, 2, 4, 6]  # 0^2^4^6 = 0
    assert irreps("1,2,4,7", "0.1 1 2 3 4\n") == [1, 2, 4, 7]  # 0^1^3^6 is not 0, but 1^2^4^7 is


def test_logical_keys_decide_nothing_else(tmp_path: Path) -> None:
    for text in ("UHF=.FALSE.", "IUHF=0"):
        h = read(tmp_path, f"&FCI NORB=2,NELEC=2,{text} /\n{BODY}").wavefunction.hamiltonian
        assert h is not None
        assert not h.spin_resolved


@pytest.mark.parametrize("text", ["&FCI &END\n", "&FCI /\n", "$FCI\n$END\n", "&FCI ,, &END\n", "&FCI NORB=, /\n"])
def test_an_empty_namelist(text: str) -> None:
    with pytest.raises(ConversionError, match="has no NORB"):
        read_header(text.encode(), "x")


def test_quoted_text_is_no_part_of_the_form() -> None:
    header = read_header(b"&FCI NORB=2,NELEC=2,TITLE='a / b &END MS2=4' ! NELEC=7\n/\n", "x")
    assert (header.n_orbitals, header.n_electrons, header.ms2) == (2, 2, None)


def test_garbage_in_the_namelist() -> None:
    with pytest.raises(ConversionError, match="before the first key"):
        read_header(b"&FCI 12 NORB=1,NELEC=1 /\n", "x")
    with pytest.raises(ConversionError, match="UHF is"):
        read_header(b"&FCI NORB=1,NELEC=1,UHF=2 /\n", "x")
    with pytest.raises(ConversionError, match="more than 8192"):
        read_header(b"&FCI NORB=1,NELEC=1,ORBSYM=999999*1 /\n", "x")
