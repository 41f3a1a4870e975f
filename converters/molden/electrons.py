"""Electrons and charges: what occupations, atom lines and core electrons of a Molden file say together."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.sections import Molden
from qwfx.elements import SYMBOLS
from qwfx.errors import ConversionError

__all__ = ["Electrons", "OrbitalGroup", "charges", "count_electrons", "group_orbitals"]

WHOLE_WITHIN = 2e-3
"""Occupations are printed to four or five places, and there may be dozens of them."""
CORES = (2, 10, 18, 28, 36, 46, 54, 60, 68, 78)
"""Closed shells that core potentials replace (common practice)."""
LARGEST_CHARGE = 4
"""A molecule with a larger charge than this is taken for one with core potentials."""
GHOST = re.compile(r"^(x|bq|gh|q|ghost)", re.IGNORECASE)


@dataclass(frozen=True)
class OrbitalGroup:
    """Orbitals of one spin, or of both."""

    name: str
    """``spatial``, ``up`` or ``down``."""
    rows: NDArray[np.int64]
    occupations: NDArray[np.float64] | None


@dataclass(frozen=True)
class Electrons:
    """Numbers of electrons and how they were found."""

    n_up: int
    n_down: int
    notes: tuple[str, ...]


def _occupations(molden: Molden, rows: NDArray[np.int64]) -> NDArray[np.float64] | None:
    told = [molden.orbitals.occupations[int(r)] for r in rows]
    if all(value is None for value in told):
        return None
    return np.array([0.0 if value is None else value for value in told])


def group_orbitals(molden: Molden) -> tuple[list[OrbitalGroup], list[str]]:
    """Orbitals by spin. Up and down lists with the very same coefficients are one spin-restricted list."""
    spins = np.array(molden.orbitals.spins)
    up, down = np.flatnonzero(spins == "alpha"), np.flatnonzero(spins == "beta")
    if not len(down) or not len(up):
        rows = up if len(up) else down
        return [OrbitalGroup("spatial", rows, _occupations(molden, rows))], []
    a, b = _occupations(molden, up), _occupations(molden, down)
    matrix = molden.orbitals.coefficients
    if len(up) == len(down) and np.array_equal(matrix[up], matrix[down]):
        both = None if a is None or b is None else a + b
        note = "the up and down orbitals are the same: one spin-restricted set with the sum of the occupations"
        return [OrbitalGroup("spatial", up, both)], [note]
    return [OrbitalGroup("up", up, a), OrbitalGroup("down", down, b)], []


def _atomic_number(label: str, charge: float) -> int:
    """The element that a label such as ``O1`` or ``cl`` names; by the charge where it names none."""
    letters = re.match(r"[A-Za-z]*", label)
    word = letters.group() if letters else ""
    for length in (2, 1):
        symbol = word[:length].capitalize()
        if len(symbol) == length and symbol in SYMBOLS[1:]:
            return SYMBOLS.index(symbol)
    return round(charge) if 0 < charge < len(SYMBOLS) else 0


def _parse_electrons(text: str) -> tuple[int, int]:
    match = re.fullmatch(r"\s*(\d+)\s*,\s*(\d+)\s*", text)
    if match is None:
        raise ConversionError(
            f"{text!r}",
            where="--set electrons",
            expected="UP,DOWN, such as 5,5",
            remedy="give two whole numbers",
        )
    return int(match.group(1)), int(match.group(2))


def count_electrons(
    molden: Molden, groups: list[OrbitalGroup], nuclear: float, named: str | None
) -> Electrons:
    """Up and down electrons, from the option or from the occupations. Raises ConversionError where they do not tell.

    Parameters
    ----------
    nuclear : sum of the charges of the atom lines, to recognise occupations per spin.
    named : the option ``electrons``.
    """
    if named is not None:
        n_up, n_down = _parse_electrons(named)
        return Electrons(n_up, n_down, (f"{n_up} up and {n_down} down electrons, as the user says",))
    sums = [0.0 if g.occupations is None else float(g.occupations.sum()) for g in groups]
    if not any(sums):
        raise _undecided(molden, "the occupations are all zero or missing")
    if len(groups) == 2:
        if any(abs(s - round(s)) > WHOLE_WITHIN for s in sums):
            raise _undecided(molden, f"the occupations add up to {sums[0]:.5f} up and {sums[1]:.5f} down electrons")
        return Electrons(round(sums[0]), round(sums[1]), ())
    total, occupations = sums[0], groups[0].occupations
    assert occupations is not None
    notes = []
    if abs(total - round(total)) > WHOLE_WITHIN:
        raise _undecided(molden, f"the occupations add up to {total:.5f} electrons")
    n = round(total)
    whole = np.abs(occupations - np.round(occupations)) < WHOLE_WITHIN
    if occupations.max() < 1 + WHOLE_WITHIN and whole.all() and abs(2 * n - nuclear) <= 1 and abs(n - nuclear) > 1:
        notes.append("the occupations are those of one spin: doubled")
        return Electrons(n, n, tuple(notes))
    single = int(np.count_nonzero(np.abs(occupations - 1.0) < WHOLE_WITHIN)) if whole.all() else n % 2
    if not whole.all():
        notes.append(
            f"fractional occupations do not tell the spin: taken as {single} unpaired electron{'s' * (single != 1)} "
            "(--set electrons=UP,DOWN decides)"
        )
    return Electrons((n + single) // 2, (n - single) // 2, tuple(notes))


def _undecided(molden: Molden, found: str) -> ConversionError:
    line = molden.orbitals.lines[0] if molden.orbitals.lines else 1
    return ConversionError(
        f"{found}, so the numbers of electrons cannot be told",
        where=f"{molden.name}:{line}",
        expected="occupations that add up to whole numbers",
        remedy="say them with --set electrons=UP,DOWN",
    )


def charges(
    molden: Molden, n_electrons: int, options: Mapping[str, int]
) -> tuple[NDArray[np.int32], NDArray[np.float64], list[str]]:
    """Atomic numbers and effective charges.

    The charge on an atom line may be that of the nucleus or that of the valence electrons. What decides, in this order:
    the user (`options`: label or element -> core electrons), [Core] and [Pseudo], a line whose charge is below the
    element's number, and the count of the electrons.
    """
    numbers = np.array([_atomic_number(a.label, a.charge) for a in molden.atoms], dtype=np.int32)
    written = np.array([a.charge for a in molden.atoms])
    effective = written.copy()
    notes: list[str] = []
    ghosts = (written == 0) | np.array([bool(GHOST.match(a.label)) and a.charge == 0 for a in molden.atoms])
    numbers = np.where(ghosts & (numbers == 0), 0, numbers).astype(np.int32)
    if options:
        _apply_options(molden, numbers, effective, ghosts, options, notes)
    elif molden.core or molden.valence:
        for atom, electrons in molden.core.items():
            effective[atom] = numbers[atom] - electrons
        for atom, charge in molden.valence.items():
            effective[atom] = charge
        notes.append("effective charges by the file's own section on core potentials")
    else:
        low = np.flatnonzero((written < numbers) & ~ghosts)
        if len(low):
            listed = ", ".join(f"{molden.atoms[i].label} {written[i]:g} of {numbers[i]}" for i in low[:4])
            notes.append(f"atom lines carry valence charges ({listed}): a core potential replaces the other electrons")
        else:
            _cores_by_count(molden, numbers, effective, ghosts, n_electrons, notes)
    return numbers, effective, notes


def _apply_options(
    molden: Molden, numbers: NDArray[np.int32], effective: NDArray[np.float64], ghosts: NDArray[np.bool_],
    options: Mapping[str, int], notes: list[str],
) -> None:  # fmt: skip
    for key, core in options.items():
        found = [
            i
            for i, atom in enumerate(molden.atoms)
            if not ghosts[i] and key.lower() in (atom.label.lower(), SYMBOLS[numbers[i]].lower())
        ]
        if not found or any(core >= numbers[i] for i in found):
            raise ConversionError(
                f"{key}={core}" + (" names no atom" if not found else " leaves no charge"),
                where="--set core-electrons",
                expected="an element or label of the file, and fewer electrons than the element has",
                remedy="correct the option",
            )
        for i in found:
            effective[i] = numbers[i] - core
        notes.append(f"{core} core electrons on {key}, as the user says")


def _cores_by_count(
    molden: Molden, numbers: NDArray[np.int32], effective: NDArray[np.float64], ghosts: NDArray[np.bool_],
    n_electrons: int, notes: list[str],
) -> None:  # fmt: skip
    """Nuclear charges everywhere: too few electrons for them mean core potentials that the lines do not tell of."""
    missing = float(effective.sum()) - n_electrons
    if missing <= LARGEST_CHARGE:
        return
    heavy = sorted({int(z) for z, ghost in zip(numbers, ghosts, strict=True) if z > 2 and not ghost})
    counts = {z: int(np.count_nonzero((numbers == z) & ~ghosts)) for z in heavy}
    fits: dict[int, list[dict[int, int]]] = {}
    for cores in product(*[(0, *[c for c in CORES if c < z]) for z in heavy]) if len(heavy) < 6 else ():
        left = missing - sum(core * counts[z] for z, core in zip(heavy, cores, strict=True))
        if abs(left) <= 1 and any(cores):
            fits.setdefault(abs(round(left)), []).append(dict(zip(heavy, cores, strict=True)))
    best = fits[min(fits)] if fits else []
    if len(best) != 1:
        raise ConversionError(
            f"the nuclear charges exceed the {n_electrons} electrons by {missing:g}, and "
            + (f"{len(best)} sets of core electrons explain it" if best else "no core potentials explain it"),
            where=f"{molden.name}:{molden.atoms[0].line}",
            expected="a molecule of small charge, or core electrons that the count determines",
            remedy="say them with --set core-electrons=ELEMENT=NUMBER, or the electrons with --set electrons=UP,DOWN",
        )
    for z, core in best[0].items():
        if core:
            effective[(numbers == z) & ~ghosts] = z - core
            notes.append(
                f"the electron count tells that a core potential replaces {core} electrons of {SYMBOLS[z]} "
                "(--set core-electrons=... decides otherwise)"
            )
