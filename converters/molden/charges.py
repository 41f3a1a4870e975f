"""Elements and effective charges: what atom lines, core electrons and the electron count of a Molden file say together.

The charge on an atom line may be that of the nucleus or that of the valence electrons. What decides, in this order: the
user, [Core] and [Pseudo], a line whose charge is below the element's number, and the count of the electrons.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from itertools import product

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.sections import Atom, Molden
from qwfx.elements import SYMBOLS
from qwfx.errors import ConversionError
from qwfx.model import Potentials

__all__ = ["atomic_numbers", "candidates", "cores_of_options", "effective_charges"]

CORES = (2, 10, 18, 28, 36, 46, 54, 60, 68, 78)
"""Closed shells that core potentials replace (common practice)."""
LARGEST_CHARGE = 4
"""A molecule with a larger charge than this is taken for one with core potentials."""
INNERMOST = 0.2
"""The 1s orbital of an atom lies below -0.2 Z^2 hartree; one of the valence shell does not (Z > 2)."""
HYDROGEN = ("D", "T")
GHOST = re.compile(r"^(ghost|gh|bq|xx|x(?!e)|q)[-_:]?", re.IGNORECASE)
"""Words for sites without a nucleus, before the element whose functions they carry (common practice)."""


def candidates(label: str) -> list[int]:
    """Elements that a label such as ``O1``, ``cl`` or ``CA`` may name, the longest symbol first."""
    match = re.match(r"[A-Za-z]*", label)
    word = match.group() if match else ""
    found = []
    for length in (2, 1):
        symbol = word[:length].capitalize()
        if len(symbol) == length and symbol in SYMBOLS[1:]:
            found.append(SYMBOLS.index(symbol))
    return found or ([1] if word.upper() in HYDROGEN else [])


def atomic_numbers(molden: Molden) -> NDArray[np.int32]:
    """(A) elements; 0 for a site that has none. Raises ConversionError where label and charge contradict."""
    return np.array([_atomic_number(molden, atom) for atom in molden.atoms], dtype=np.int32)


def _atomic_number(molden: Molden, atom: Atom) -> int:
    if atom.charge == 0.0:
        named = candidates(GHOST.sub("", atom.label))
        return named[0] if named else 0
    named = candidates(atom.label)
    if atom.charge in named:
        return int(atom.charge)
    if not named and atom.charge == round(atom.charge) and 0 < atom.charge < len(SYMBOLS):
        return int(atom.charge)
    larger = [z for z in named if 0.0 < atom.charge < z]
    usual = [z for z in larger if z - atom.charge in CORES]
    if larger:
        return (usual or larger)[0]
    raise ConversionError(
        f"the atom {atom.label} has the charge {atom.charge:g}",
        where=f"{molden.name}:{atom.line}",
        expected="the atomic number of the element, its number of valence electrons, or 0 for a ghost atom",
        remedy="correct the label or the charge",
    )


def cores_of_options(
    molden: Molden, numbers: NDArray[np.int32], options: Mapping[str, str]
) -> tuple[Potentials | None, dict[int, int], list[str]]:
    """Core potentials from PySCF's library, core electrons by atom, and notes, as the options say."""
    cores: dict[int, int] = {}
    notes: list[str] = []
    real = [i for i, atom in enumerate(molden.atoms) if atom.charge != 0.0 and numbers[i] > 0]
    for key, value in _pairs("core-electrons", options.get("core-electrons"), "I=46").items():
        own = [i for i in real if key.lower() in (molden.atoms[i].label.lower(), SYMBOLS[numbers[i]].lower())]
        core = int(value) if value.isdecimal() and len(value) < 4 else -1
        if not own or core < 0 or any(core >= numbers[i] for i in own):
            raise ConversionError(
                f"{key}={value}" + (" names no atom" if not own else " is no possible core"),
                where="--set core-electrons",
                expected="an element or label of the file, and fewer electrons than the element has",
                remedy="correct the option",
            )
        cores |= dict.fromkeys(own, core)
        notes.append(f"{core} core electrons on {key}, as the user says")
    names = _pairs("core-potential", options.get("core-potential"), "I=stuttgart")
    if not names:
        return None, cores, notes
    from qwfx.converters.pyscf import potentials_from_library

    labels = [atom.label for atom in molden.atoms]
    known = [int(z) if i in real else 0 for i, z in enumerate(numbers)]
    potentials, replaced = potentials_from_library(names, labels, known)
    for i in np.flatnonzero(replaced).tolist():
        told = cores.get(i)
        if told is None and molden.atoms[i].charge < numbers[i]:
            told = round(numbers[i] - molden.atoms[i].charge)
        told = molden.core.get(i, told)
        if told is not None and told != replaced[i]:
            raise ConversionError(
                f"the potential replaces {replaced[i]} electrons of {labels[i]}",
                where="--set core-potential",
                expected=f"{told} electrons, as the file or the option core-electrons has it",
                remedy="name the potential that the calculation used",
            )
        cores[i] = int(replaced[i])
    for key, name in names.items():
        notes.append(f"core potential {name} of {key} from PySCF's library, as the user says")
    return potentials, cores, notes


def _pairs(option: str, text: str | None, example: str) -> dict[str, str]:
    """``I=46,Br=28`` as a mapping."""
    found = {}
    for part in text.split(",") if text is not None else ():
        key, _, value = (word.strip() for word in part.partition("="))
        if not key or not value:
            raise ConversionError(
                f"the option is {text!r}",
                where=f"--set {option}",
                expected=f"ELEMENT=VALUE, such as {example}, more of them separated by commas",
                remedy="correct the option",
            )
        found[key] = value
    return found


def effective_charges(
    molden: Molden, numbers: NDArray[np.int32], cores: Mapping[int, int], n_electrons: int
) -> tuple[NDArray[np.float64], list[str]]:
    """(A) charges that the electrons feel, and notes. Raises ConversionError where nothing tells them.

    Parameters
    ----------
    cores : core electrons by atom that the user named; see `cores_of_options`.
    """
    effective = np.array([atom.charge for atom in molden.atoms])
    told = {**{i: int(numbers[i]) - v for i, v in molden.valence.items()}, **molden.core, **cores}
    notes = []
    for i, core in told.items():
        if core < 0 or (core >= numbers[i] and effective[i] != 0.0):
            raise ConversionError(
                f"{core} core electrons of {molden.atoms[i].label}, which has {numbers[i]} in all",
                where=f"{molden.name}:{molden.atoms[i].line}",
                expected="fewer core electrons than electrons",
                remedy="correct [Core] or [Pseudo]",
            )
        if effective[i] != 0.0:
            effective[i] = numbers[i] - core
    if told.keys() - cores.keys():
        notes.append("effective charges by the file's own section on core potentials")
    low = [i for i in np.flatnonzero((effective < numbers) & (effective != 0.0)).tolist() if i not in told]
    if low:
        listed = ", ".join(f"{molden.atoms[i].label} {effective[i]:g} of {numbers[i]}" for i in low[:4])
        notes.append(f"atom lines carry valence charges ({listed}): a core potential replaces the other electrons")
    if not told and not low:
        notes += _cores_by_count(molden, numbers, effective, n_electrons)
    return effective, notes


def _lacks_innermost(molden: Molden, numbers: NDArray[np.int32]) -> bool:
    """Whether the orbital energies show that the heaviest atom has no 1s electrons."""
    energies = [e for e in molden.orbitals.energies if e is not None and e < 0.0]
    heaviest = int(np.max(numbers, initial=0))
    return bool(energies) and heaviest > 2 and min(energies) > -INNERMOST * heaviest**2


def _cores_by_count(
    molden: Molden, numbers: NDArray[np.int32], effective: NDArray[np.float64], n_electrons: int
) -> list[str]:
    """Nuclear charges everywhere: too few electrons for them mean core potentials that the lines do not tell of."""
    missing = float(effective.sum()) - n_electrons
    if missing <= (1 if _lacks_innermost(molden, numbers) else LARGEST_CHARGE):
        return []
    real = effective != 0.0
    heavy = sorted({int(z) for z in numbers[real] if z > 2})
    counts = {z: int(np.count_nonzero((numbers == z) & real)) for z in heavy}
    fits: dict[int, list[dict[int, int]]] = {}
    for cores in product(*[(0, *[c for c in CORES if c < z]) for z in heavy]) if len(heavy) < 6 else ():
        left = missing - sum(core * counts[z] for z, core in zip(heavy, cores, strict=True))
        if abs(left) <= 1 and any(cores):
            fits.setdefault(abs(round(left)), []).append(dict(zip(heavy, cores, strict=True)))
    best = fits[min(fits)] if fits else []
    if len(best) != 1 and missing <= LARGEST_CHARGE:
        return [f"the molecule is taken to have the charge {missing:+g}: no core potentials explain it"]
    if len(best) != 1:
        raise ConversionError(
            f"the nuclear charges exceed the {n_electrons} electrons by {missing:g}, and "
            + (f"{len(best)} sets of core electrons explain it" if best else "no core potentials explain it"),
            where=f"{molden.name}:{molden.atoms[0].line}",
            expected="a molecule of small charge, or core electrons that the count determines",
            remedy="say them with --set core-electrons=ELEMENT=NUMBER, or the electrons with --set electrons=UP,DOWN",
        )
    notes = []
    for z, core in best[0].items():
        if core:
            effective[(numbers == z) & real] = z - core
            notes.append(
                f"the electron count tells that a core potential replaces {core} electrons of {SYMBOLS[z]} "
                "(--set core-electrons=... decides otherwise)"
            )
    return notes
