"""The same wave function in the spellings that files come in, and damage that is refused with its line."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from molden_cases import CARTESIAN_WATER, CORPUS, WATER

from qwfx.converters.molden import converter
from qwfx.converters.registry import recognise
from qwfx.elements import BOHR
from qwfx.errors import ConversionError, QwfxError, UnsupportedError
from qwfx.kernels import evaluate_orbitals
from qwfx.model import Wavefunction

POINTS = np.random.default_rng(5).normal(size=(30, 3))


def values(wavefunction: Wavefunction) -> np.ndarray:
    basis = wavefunction.basis
    assert basis is not None
    parts = [
        evaluate_orbitals(basis, wavefunction.system.positions, np.asarray(s.coefficients), POINTS, derivatives=0)[0]
        for s in wavefunction.orbitals.values()
    ]
    return np.concatenate(parts, axis=1)


def read_text(tmp_path: Path, text: str | bytes, options: dict[str, str] | None = None) -> Wavefunction:
    path = tmp_path / "case.molden"
    path.write_bytes(text.encode("latin-1") if isinstance(text, str) else text)
    assert recognise(path) is converter
    return converter.read(path, options or {}).wavefunction


def section(text: str, name: str) -> str:
    """A section with its heading."""
    match = re.search(rf"^\[{name}\].*?(?=^\[|\Z)", text, re.MULTILINE | re.DOTALL)
    assert match is not None
    return match.group()


def orbital_blocks(text: str) -> list[str]:
    return re.findall(r"Sym=.*?(?=Sym=|\Z)", section(text, "MO"), re.DOTALL)


def angstrom(text: str) -> str:
    def line(match: re.Match[str]) -> str:
        xyz = " ".join(f"{float(x) * BOHR:.17g}" for x in match.group(2).split())
        return f"{match.group(1)} {xyz}"

    atoms = section(text, "Atoms")
    lines = re.sub(r"^(\w+ +\d+ +\d+) +(.*)$", line, atoms, flags=re.MULTILINE)
    return text.replace(atoms, lines.replace("(AU)", "( angstrom )"))


def renumbered(text: str) -> str:
    """Atoms numbered 12, 7, 30, listed in that order."""
    numbers = {"1": "12", "2": "7", "3": "30"}
    atoms, gto = section(text, "Atoms"), section(text, "GTO")
    text = text.replace(
        atoms, re.sub(r"^(\w+ +)(\d+)", lambda m: m.group(1) + numbers[m.group(2)], atoms, flags=re.MULTILINE)
    )
    return text.replace(gto, re.sub(r"^ +(\d)$", lambda m: numbers[m.group(1)] + " 0", gto, flags=re.MULTILINE))


def sparse(text: str) -> str:
    return re.sub(r"^ +\d+ +-?0\.00000000\n", "", text, flags=re.MULTILINE)


def keys_backwards(text: str) -> str:
    def turn(match: re.Match[str]) -> str:
        return "\n".join(match.group().rstrip("\n").split("\n")[::-1]).upper().replace("=", " =  ") + "\n"

    return re.sub(r"(?:^\w+= .*\n){4}", turn, text, flags=re.MULTILINE)


SPELLINGS: dict[str, Callable[[str], str]] = {
    "angstrom": angstrom,
    "carriage returns": lambda t: t.replace("\n", "\r\n"),
    "carriage returns alone": lambda t: t.replace("\n", "\r"),
    "D exponents": lambda t: re.sub(r"(?<=\d)E(?=[+-]\d\d)", "D", t),
    "exponents without a letter": lambda t: re.sub(r"(?<=\d)E(?=[+-]\d\d)", "", t),
    "tabs and blanks": lambda t: re.sub(r"(?<=\S) +", " \t  ", t).replace("\n", "  \n"),
    "blank lines": lambda t: t.replace("\nEne=", "\n\n  \nEne="),
    "lower case": lambda t: t.lower(),
    "upper case": lambda t: t.upper(),
    "flags at the end": lambda t: t.replace("[5D]\n", "") + "[5D7F]\n[9G]\n",
    "scale factors": lambda t: re.sub(r"^( +[spd] +\d+)$", r"\1 1.00", t, flags=re.MULTILINE),
    "renumbered atoms": renumbered,
    "sparse orbitals": sparse,
    "keys in another order": keys_backwards,
    "no final line end": lambda t: t.rstrip("\n"),
    "Latin-1 title": lambda t: t.replace("[Atoms]", "[Title]\nEau salée à 20 °C [sic]\n[Atoms]"),
    "byte order mark": lambda t: "\xef\xbb\xbf" + t,
    "two sections of orbitals": lambda t: t.replace(orbital_blocks(t)[5], "[MO]\n" + orbital_blocks(t)[5]),
    "comments": lambda t: t.replace("[GTO] (AU)\n", "[GTO]\n# functions\n"),
    "negative zero": lambda t: t.replace(" 0.00000000", "-0.00000000"),
    "plus signs": lambda t: re.sub(r" (?=0\.\d{8}$)", "+", t, flags=re.MULTILINE),
    "no unit": lambda t: t.replace("[Atoms] (AU)", "[ATOMS]"),
}


@pytest.mark.parametrize("name", SPELLINGS)
def test_spelling(name: str, tmp_path: Path) -> None:
    text = WATER.read_text()
    spelt = SPELLINGS[name](text)
    assert spelt != text
    plain, other = read_text(tmp_path, text), read_text(tmp_path, spelt)
    np.testing.assert_allclose(values(other), values(plain), rtol=0, atol=1e-13)
    assert other.system.effective_charges.tolist() == [8.0, 1.0, 1.0]
    assert (other.system.n_up, other.system.n_down) == (5, 5)
    assert other.orbitals["spatial"].energies is not None
    assert np.asarray(other.orbitals["spatial"].energies)[0] == -20.55


def test_sp_shells(tmp_path: Path) -> None:
    """An sp shell is an s and a p shell with the same exponents, one after the other."""
    head = "[Molden Format]\n[Atoms] AU\nB 1 3 0.1 0.2 0.3\n[GTO]\n1 0\n"
    separate = "s 2 1.0\n 1.5 0.4\n 0.5 0.7\np 2\n 1.5 0.3\n 0.5 0.8\n"
    joint = "sp 2 1.0\n 1.5 0.4 0.3\n 0.5 0.7 0.8\n"
    tail = "\n[MO]\n" + "".join(f"Ene= {k}\nSpin= Alpha\nOccup= {2 - k}\n{k + 1} 1.0\n" for k in range(2))
    options = {"reading": "contraction-normalised", "core-electrons": "B=2"}
    one, other = (read_text(tmp_path, head + shells + tail, options) for shells in (separate, joint))
    np.testing.assert_array_equal(values(one), values(other))
    assert one.basis is not None
    assert one.basis.shell_l.tolist() == [0, 1]


def test_orbital_without_coefficients_keeps_its_place(tmp_path: Path) -> None:
    text = "[Molden Format]\n[Atoms] AU\nHe 1 2 0 0 0\n[GTO]\n1 0\ns 1\n1.0 1.0\ns 1\n0.3 1.0\n\n[MO]\n"
    text += "Ene= 1\nSpin= Alpha\nOccup= 0\nEne= -1\nSpin= Alpha\nOccup= 2\n1 1.0\n"
    wavefunction = read_text(tmp_path, text, {"reading": "as-printed"})
    np.testing.assert_array_equal(np.asarray(wavefunction.orbitals["spatial"].occupations), [0.0, 2.0])
    np.testing.assert_array_equal(np.asarray(wavefunction.orbitals["spatial"].coefficients)[0], [0.0, 0.0])


def test_forgotten_flags(tmp_path: Path) -> None:
    text = WATER.read_text()
    path = tmp_path / "case.molden"
    path.write_text(text.replace("[5D]\n", ""))
    reading = converter.read(path, {})
    assert any("without a flag" in note for note in reading.notes)
    np.testing.assert_array_equal(values(reading.wavefunction), values(read_text(tmp_path, text)))


def test_unknown_sections_are_said(tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    path.write_text(WATER.read_text().replace("[GTO]", "[FREQ]\n1.0\n2.0\n[GTO]"))
    assert any("[freq] (2 lines)" in note for note in converter.read(path, {}).notes)


DAMAGE = {
    "no orbitals": (lambda t: t[: t.index("[MO]")], "no section"),
    "no atoms": (lambda t: t.replace("[Atoms]", "[Nuclei]"), "no section"),
    "a shell cut off": (lambda t: t.replace("  0.101300000E+01  0.154580054E-01\n", "", 1), "primitive 9 of 9"),
    "an index beyond": (lambda t: t.replace("\n  24 ", "\n  25 ", 1), "function 25"),
    "an index twice": (lambda t: t.replace("\n  24 ", "\n  23 ", 1), "second coefficient of function 23"),
    "a word for a number": (lambda t: t.replace("1.00040031", "1.0004oo31"), "not a number"),
    "a third column": (lambda t: t.replace("1.00040031", "1.00040031 7"), "more behind the coefficient"),
    "a word for a line": (lambda t: t.replace("   2         0.00230987", "   two       0.00230987"), "two"),
    "an unknown shell": (lambda t: t.replace("   d   1", "   q   1", 1), "q 1"),
    "an unknown atom": (lambda t: t.replace("\n   2\n", "\n   5\n", 1), "no atom 5"),
    "an atom too few": (lambda t: t.replace(" 3\n[Atoms]", " 4\n[Atoms]", 1), r"\[N_Atoms\] says 4"),
    "a negative exponent": (lambda t: t.replace("  0.302300000E+00", " -0.302300000E+00"), "exponent is -0.3023"),
    "an endless number": (lambda t: t.replace("0.30000000", "1.0E+999"), "magnitude"),
    "a spin of its own": (lambda t: t.replace("Spin= Alpha", "Spin= Gamma", 1), "Gamma"),
    "another unit": (lambda t: t.replace("(AU)", "(furlong)", 1), "furlong"),
    "label and charge at odds": (lambda t: t.replace("O1          1      8", "O1          1      9"), "charge 9"),
    "the last orbital cut off": (lambda t: t[: t.rindex("\n  12 ") + 5], "expected"),
    "flags at odds": (lambda t: t + "[6D]\n", "contradicts"),
    "half an electron": (lambda t: t.replace("Occup=    2.00000", "Occup=    1.50000", 1), "9.5"),
}  # fmt: skip


@pytest.mark.parametrize("name", DAMAGE)
def test_damage_is_refused(name: str, tmp_path: Path) -> None:
    change, said = DAMAGE[name]
    damaged = change(WATER.read_text())
    assert damaged != WATER.read_text()
    with pytest.raises(ConversionError, match=said) as caught:
        read_text(tmp_path, damaged)
    assert "case.molden" in caught.value.where
    assert caught.value.expected
    assert caught.value.remedy


def test_line_of_the_damage_is_right(tmp_path: Path) -> None:
    text = CARTESIAN_WATER.read_text()
    lines = text.split("\n")
    number = next(k for k, line in enumerate(lines) if k > 300 and re.match(r" +7 ", line))
    lines[number] = lines[number].replace(".", "x")
    with pytest.raises(ConversionError) as caught:
        read_text(tmp_path, "\n".join(lines))
    assert caught.value.where.endswith(f"case.molden:{number + 1}")


def test_limits(tmp_path: Path) -> None:
    text = "[Molden Format]\n[Atoms] AU\nHe 1 2 0 0 0\n[GTO]\n1 0\nh 1\n1.0 1.0\n\n[MO]\nEne= -1\nOccup= 2\n1 1.0\n"
    with pytest.raises(ConversionError, match="Cartesian shell beyond g"):
        read_text(tmp_path, text)
    many = text.replace("h 1\n1.0 1.0\n", "g 1\n1.0 1.0\n" * 2001)
    with pytest.raises(UnsupportedError, match="30015 functions"):
        read_text(tmp_path, many)


FUZZED = [
    WATER, CARTESIAN_WATER, CORPUS / "A/s_h2o_uhf_cation_631gs_sym/case.molden",
    CORPUS / "C/f_hi_rhf_stuttgart_ecp/case.molden", CORPUS / "F/a_h2o_rhf_ccpvdz/case.molden",
]  # fmt: skip

EXTREMES = [b"1e308", b"-1e308", b"nan", b"inf", b"1e-300", b"0", b"-1", b"99999999999", b"1.5", b"1e11", b""]
WORDS = [b"[GTO]", b"[MO]", b"[STO]", b"[5D]", b"[6D]", b"[Core]", b"sp 2", b"i 1", b"="]


@st.composite
def mutations(draw: st.DrawFn) -> bytes:
    """A real file cut off, with bytes replaced, lines left out, doubled or exchanged, or numbers made extreme."""
    data = draw(st.sampled_from(FUZZED)).read_bytes()
    for _ in range(draw(st.integers(1, 3))):
        lines = data.split(b"\n")
        # Half of the time near the beginning, where most of the grammar is.
        top = draw(st.sampled_from([len(lines) - 1, min(80, len(lines) - 1)]))
        at = draw(st.integers(0, top))
        kind = draw(st.sampled_from(["cut", "byte", "drop", "double", "exchange", "extreme", "word"]))
        words = lines[at].split()
        if kind == "cut":
            lines = lines[: at + 1]
            lines[-1] = lines[-1][: draw(st.integers(0, 12))]
        elif kind == "byte" and lines[at]:
            place = draw(st.integers(0, len(lines[at]) - 1))
            lines[at] = lines[at][:place] + draw(st.binary(min_size=1, max_size=2)) + lines[at][place + 1 :]
        elif kind == "drop":
            del lines[at]
        elif kind == "double":
            lines.insert(at, lines[at])
        elif kind == "exchange":
            other = draw(st.integers(0, len(lines) - 1))
            lines[at], lines[other] = lines[other], lines[at]
        elif kind == "extreme" and words:
            words[draw(st.integers(0, len(words) - 1))] = draw(st.sampled_from(EXTREMES))
            lines[at] = b" ".join(words)
        elif kind == "word":
            lines[at] = draw(st.sampled_from(WORDS))
        data = b"\n".join(lines)
    return data


@given(data=mutations())
@settings(max_examples=250, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_only_our_own_errors_come_out(data: bytes, tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    path.write_bytes(data)
    error = None
    try:
        wavefunction = converter.read(path, {}).wavefunction
    except QwfxError as raised:
        error = raised
    if error is None:
        assert np.isfinite(values(wavefunction)).all()
    else:
        assert error.where.startswith((str(path), "--set"))
        assert error.expected
        assert error.remedy
