"""The sections of a Molden file as they are written: atoms, shells, orbitals. Nothing is interpreted here."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.orbital_lines import count_functions, read_orbitals
from qwfx.converters.molden.text import (
    LARGEST,
    Section,
    Text,
    bad,
    integer,
    lines,
    number,
    open_text,
    sha256,
    split_sections,
)  # fmt: skip
from qwfx.elements import BOHR
from qwfx.errors import UnsupportedError

__all__ = ["Atom", "GaussianShell", "Molden", "SlaterFunction", "WrittenOrbitals", "parse"]

LETTERS = {letter: l for l, letter in enumerate("spdfghi")}
FLAGS = {
    "5d": {2: False}, "5d7f": {2: False, 3: False}, "5d10f": {2: False, 3: True}, "7f": {3: False},
    "9g": {4: False}, "11h": {5: False}, "13i": {6: False}, "6d": {2: True}, "6d10f": {2: True, 3: True},
    "6d7f": {2: True, 3: False}, "10f": {3: True}, "15g": {4: True}, "21h": {5: True},
}  # fmt: skip
USED = {"molden format", "title", "atoms", "gto", "sto", "mo", "core", "pseudo", "nval", "n_atoms", "charge", *FLAGS}

MOST_FUNCTIONS = 30_000
SMALLEST_EXPONENT = 1e-8


@dataclass(frozen=True)
class Atom:
    """One line of [Atoms]."""

    label: str
    number: int
    """The file's own number of the atom."""
    charge: float
    position: NDArray[np.float64]
    """bohr."""
    line: int


@dataclass(frozen=True)
class GaussianShell:
    """One shell of [GTO], coefficients as printed."""

    atom: int
    """Index into the atoms, from 0."""
    l: int
    exponents: NDArray[np.float64]
    coefficients: NDArray[np.float64]
    line: int


@dataclass(frozen=True)
class SlaterFunction:
    """One line of [STO]: ``norm x^i y^j z^k r^n exp(-a r)``."""

    atom: int
    powers: tuple[int, int, int]
    n: int
    exponent: float
    norm: float
    line: int


@dataclass
class WrittenOrbitals:
    """[MO] as it is written, in the file's order of functions."""

    coefficients: NDArray[np.float64]
    """(M, F)."""
    energies: list[float | None]
    occupations: list[float | None]
    spins: list[str]
    """``alpha`` or ``beta``."""
    symmetries: list[str | None]
    decimals: int
    """Decimal places (or significant digits less one, with exponents) of the coefficients."""
    lines: list[int] = field(default_factory=list)
    """Line at which each orbital begins."""


@dataclass
class Molden:
    """A whole file."""

    name: str
    title: str
    atoms: list[Atom]
    shells: list[GaussianShell]
    slater: list[SlaterFunction]
    cartesian: dict[int, bool]
    """l from 2 -> whether its shells are Cartesian."""
    orbitals: WrittenOrbitals
    core: dict[int, int]
    """Atom index -> core electrons, from [Core]."""
    valence: dict[int, int]
    """Atom index -> valence charge, from [Pseudo] or [Nval]."""
    skipped: list[str]
    """Sections that were not used, with their numbers of lines."""
    unit: str
    sha256: str
    """Of the bytes of the file."""
    remarks: list[str]
    """What the user should know of how the file was read."""


def parse(path: Path) -> Molden:
    """Read `path`. Raises FileError, ConversionError with the line."""
    name = str(path)
    text = open_text(path)
    sections = split_sections(text)
    by_name: dict[str, Section] = {}
    for section in sections:
        if section.name in by_name and section.name in ("atoms", "gto", "sto"):
            raise bad(name, section.line, f"[{section.name}] is there twice", "one such section")
        by_name.setdefault(section.name, section)
    for needed in ("atoms", "mo"):
        if needed not in by_name:
            raise bad(name, 1, f"there is no section [{needed}]", "[Atoms], [GTO] or [STO], and [MO]", "check the file")
    if ("gto" in by_name) == ("sto" in by_name):
        found = "both [GTO] and [STO]" if "gto" in by_name else "neither [GTO] nor [STO]"
        raise bad(name, 1, f"there is {found}", "one of the two", "check the file")
    atoms, unit = _atoms(text, by_name["atoms"], name)
    index = {atom.number: i for i, atom in enumerate(atoms)}
    shells = _gto(text, by_name["gto"], name, index) if "gto" in by_name else []
    slater = _sto(text, by_name["sto"], name, index) if "sto" in by_name else []
    spans = [(section.start, section.end, section.line) for section in sections if section.name == "mo"]
    octets = np.frombuffer(text, np.uint8)
    told = _flags(sections, name)
    cartesian, remarks = _kinds(told, shells, count_functions(octets, spans) if shells else 0)
    _check_kinds(cartesian, shells, name)
    n_functions = len(slater) + _total(shells, cartesian)
    _check_sizes(text, by_name, name, len(atoms), n_functions)
    orbitals = read_orbitals(octets, spans, n_functions, name)
    return Molden(
        name, _title(text, by_name), atoms, shells, slater, cartesian, orbitals, _core(text, by_name, name, index),
        _valence(text, by_name, name, atoms, index), _skipped(text, sections), unit, sha256(text),
        remarks,
    )  # fmt: skip


def _size(l: int, cartesian: dict[int, bool]) -> int:
    return (l + 1) * (l + 2) // 2 if cartesian.get(l, False) else 2 * l + 1


def _check_sizes(text: Text, by_name: dict[str, Section], name: str, n_atoms: int, n_functions: int) -> None:
    announced = lines(text, by_name["n_atoms"]) if "n_atoms" in by_name else []
    if announced and integer(announced[0][1][0], name, announced[0][0], "the number of atoms") != n_atoms:
        raise bad(
            name, announced[0][0], f"[N_Atoms] says {announced[0][1][0]}, but [Atoms] has {n_atoms} lines",
            "the same number", "check whether the file is complete",
        )  # fmt: skip
    if n_functions > MOST_FUNCTIONS:
        raise UnsupportedError(
            f"the file has {n_functions} functions",
            where=name,
            expected=f"at most {MOST_FUNCTIONS}, so that their overlap matrix can be held",
            remedy="convert a smaller calculation",
        )


def _title(text: Text, by_name: dict[str, Section]) -> str:
    section = by_name.get("title")
    words = b"" if section is None else text[section.start : section.end]
    return " ".join(words.decode("latin-1").split())[:200]


def _atoms(text: Text, section: Section, name: str) -> tuple[list[Atom], str]:
    word = section.argument.strip("() \t\r").lower()
    if word.startswith("ang"):
        scale, unit = 1.0 / BOHR, "angstrom"
    elif not word or word.startswith(("au", "a.u", "bohr", "atomic")):
        scale, unit = 1.0, "bohr"  # a wrong guess where there is no unit spoils orthonormality
    else:
        raise bad(name, section.line, f"the unit of [Atoms] is {section.argument!r}", "AU or Angs", "correct the unit")
    atoms = []
    for line, tokens in lines(text, section):
        if len(tokens) < 6:
            raise bad(name, line, f"the line has {len(tokens)} entries", "label number charge x y z")
        position = np.array([number(t, name, line, "a coordinate") for t in tokens[3:6]]) * scale
        charge = number(tokens[2], name, line, "the charge")
        atoms.append(Atom(tokens[0], integer(tokens[1], name, line, "the number of the atom"), charge, position, line))
    if not atoms:
        raise bad(name, section.line, "[Atoms] is empty", "one line for each atom", "check the file")
    numbers = [atom.number for atom in atoms]
    if len(set(numbers)) != len(numbers):
        twice = next(a for a in atoms if numbers.count(a.number) > 1)
        raise bad(name, twice.line, f"two atoms have the number {twice.number}", "a number of its own for each atom")
    return atoms, unit


def _atom_of(token: str, index: dict[int, int], name: str, line: int) -> int:
    wanted = integer(token, name, line, "the number of an atom")
    if wanted not in index:
        raise bad(name, line, f"there is no atom {wanted}", f"one of the {len(index)} numbers in [Atoms]")
    return index[wanted]


def _gto(text: Text, section: Section, name: str, index: dict[int, int]) -> list[GaussianShell]:
    shells: list[GaussianShell] = []
    rows = lines(text, section)
    atom: int | None = None
    k = 0
    while k < len(rows):
        line, tokens = rows[k]
        k += 1
        kind = tokens[0].lower()
        if kind.isdigit():
            atom = _atom_of(kind, index, name, line)
            continue
        if atom is None:
            raise bad(name, line, f"{tokens[0]!r} stands before the first atom", "the number of an atom")
        if not (kind in LETTERS or kind == "sp") or len(tokens) < 2:
            expected = "a shell: s, p, sp, d, f, g, h or i, and its number of primitives"
            raise bad(name, line, f"{' '.join(tokens)[:40]!r}", expected)
        n = integer(tokens[1], name, line, "the number of primitives")
        scale = number(tokens[2], name, line, "the scale factor") if len(tokens) > 2 else 1.0
        if n < 1 or k + n > len(rows):
            found = f"the shell announces {n} primitives, {len(rows) - k} lines follow"
            raise bad(name, line, found, "that many lines", "the file is cut off or the number is wrong")
        columns = 3 if kind == "sp" else 2
        table = np.empty((n, columns))
        for p in range(n):
            at, numbers = rows[k + p]
            if len(numbers) < columns or not numbers[0].lstrip("+-.")[:1].isdigit():
                expected = f"primitive {p + 1} of {n}: exponent and coefficient"
                raise bad(name, at, f"{' '.join(numbers)[:40]!r}", expected)
            table[p] = [number(t, name, at, "an exponent or coefficient") for t in numbers[:columns]]
            if scale not in (0.0, 1.0):
                table[p, 0] *= scale**2
            if not SMALLEST_EXPONENT < table[p, 0] < LARGEST:
                raise bad(name, at, f"an exponent is {numbers[0]}", "a positive number")
        k += n
        exponents = table[:, 0].copy()
        for column, l in enumerate([0, 1] if kind == "sp" else [LETTERS[kind]]):
            shells.append(GaussianShell(atom, l, exponents, table[:, 1 + column].copy(), line))
    if not shells:
        raise bad(name, section.line, "[GTO] is empty", "the shells of each atom", "check the file")
    return shells


def _sto(text: Text, section: Section, name: str, index: dict[int, int]) -> list[SlaterFunction]:
    functions = []
    for line, tokens in lines(text, section):
        if len(tokens) < 7:
            raise bad(name, line, f"the line has {len(tokens)} entries", "atom kx ky kz kr exponent factor")
        powers = [integer(t, name, line, "a power") for t in tokens[1:5]]
        exponent, norm = (number(t, name, line, "a number") for t in tokens[5:7])
        if exponent <= SMALLEST_EXPONENT:
            raise bad(name, line, f"an exponent is {tokens[5]}", "a positive number")
        if min(powers[:3]) < 0 or sum(powers[:3]) > 6 or powers[3] < 0:
            raise bad(
                name, line, f"the powers are {powers}", "powers of x, y, z from 0 with a sum of at most 6, of r from 0",
                "qwfx does not support other powers, such as the d functions written with negative ones",
            )  # fmt: skip
        atom = _atom_of(tokens[0], index, name, line)
        functions.append(
            SlaterFunction(atom, (powers[0], powers[1], powers[2]), powers[3], exponent, norm, line)
        )
    if not functions:
        raise bad(name, section.line, "[STO] is empty", "the functions of each atom", "check the file")
    return functions


def _flags(sections: list[Section], name: str) -> dict[int, bool]:
    """l -> whether its shells are Cartesian, as far as flags say it."""
    told: dict[int, bool] = {}
    for section in sections:
        for l, cartesian in FLAGS.get(section.name.replace(" ", ""), {}).items():
            if told.get(l, cartesian) != cartesian:
                found = f"[{section.name}] contradicts an earlier flag"
                raise bad(name, section.line, found, "one kind of shell per l")
            told[l] = cartesian
    if any(section.name == "5d" for section in sections):
        told.setdefault(3, False)  # [5D] is short for [5D7F], unless another flag says what f functions are
    return told


def _kinds(told: dict[int, bool], shells: list[GaussianShell], listed: int) -> tuple[dict[int, bool], list[str]]:
    """Which shells are Cartesian: those without a flag, as the format has it; h and i go with the rest of the file.

    Where the first orbital lists another number of functions (`listed`), and just as many as there are if the shells
    without a flag are spherical, programs have forgotten a flag.
    """
    any_spherical = any(not cartesian for cartesian in told.values())
    # The format has no flag beyond g: such shells are spherical where others of the file are.
    kinds = {l: told.get(l, not any_spherical if l > 4 else True) for l in range(2, 7)}
    spherical = {l: told.get(l, False) for l in range(2, 7)}
    if listed and listed != _total(shells, kinds) and listed == _total(shells, spherical):
        return spherical, ["shells without a flag are spherical, as the number of orbital coefficients shows"]
    return kinds, []


def _total(shells: list[GaussianShell], cartesian: dict[int, bool]) -> int:
    return sum(_size(shell.l, cartesian) for shell in shells)


def _check_kinds(cartesian: dict[int, bool], shells: list[GaussianShell], name: str) -> None:
    for shell in shells:
        if shell.l > 4 and cartesian[shell.l]:
            raise bad(
                name, shell.line, "a Cartesian shell beyond g, for which the format defines no order",
                "spherical functions ([5D], [7F], [9G])", "write the file with spherical functions",
            )  # fmt: skip


def _core(text: Text, by_name: dict[str, Section], name: str, index: dict[int, int]) -> dict[int, int]:
    """Core electrons by atom: lines ``number : electrons`` of [Core]."""
    core: dict[int, int] = {}
    for line, tokens in lines(text, by_name["core"]) if "core" in by_name else ():
        parts = " ".join(tokens).replace(":", " ").split()
        if len(parts) < 2:
            raise bad(name, line, f"{' '.join(tokens)!r}", "number : core electrons")
        core[_atom_of(parts[0], index, name, line)] = integer(parts[1], name, line, "the number of core electrons")
    return core


def _valence(
    text: Text, by_name: dict[str, Section], name: str, atoms: list[Atom], index: dict[int, int]
) -> dict[int, int]:
    """Valence charges by atom: lines ``label number charge`` of [Pseudo], or ``label charge`` of [Nval]."""
    valence: dict[int, int] = {}
    for line, tokens in lines(text, by_name["nval"]) if "nval" in by_name else ():
        own = [i for i, atom in enumerate(atoms) if atom.label.lower() == tokens[0].lower()]
        if len(tokens) < 2 or not own:
            raise bad(name, line, f"{' '.join(tokens)!r}", "the label of an atom and a valence charge")
        valence |= dict.fromkeys(own, integer(tokens[1], name, line, "the valence charge"))
    for line, tokens in lines(text, by_name["pseudo"]) if "pseudo" in by_name else ():
        if len(tokens) < 3:
            raise bad(name, line, f"{' '.join(tokens)!r}", "label number valence-charge")
        valence[_atom_of(tokens[1], index, name, line)] = integer(tokens[2], name, line, "the valence charge")
    return valence


def _skipped(text: Text, sections: list[Section]) -> list[str]:
    unused = [s for s in sections if s.name not in USED and s.name.replace(" ", "") not in FLAGS]
    return [f"[{s.name}] ({len(lines(text, s))} lines)" for s in unused]
