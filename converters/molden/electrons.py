"""Orbitals by spin, and numbers of electrons: what the occupations of a Molden file say, and where they do not."""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.sections import Molden
from qwfx.errors import ConversionError

__all__ = ["Electrons", "OrbitalGroup", "count_electrons", "group_orbitals"]

LEAST_TOLERANCE = 1e-4
"""Electrons; programs leave out the smallest natural occupations."""
SNAP = 1e-9
"""Occupations this near to a whole number are it: 17 printed digits of a computed 2 may end in anything."""


@dataclass(frozen=True)
class OrbitalGroup:
    """Orbitals of one spin, or of both."""

    name: str
    """``spatial``, ``up`` or ``down``."""
    rows: NDArray[np.int64]
    occupations: NDArray[np.float64] | None
    sums: tuple[float, float] | None = None
    """Up and down electrons, where the file has the same orbitals for both spins with occupations of their own."""
    has_energies: bool = True
    """False where up and down energies of the same orbitals differ, so that the one set has none."""


@dataclass(frozen=True)
class Electrons:
    """Numbers of electrons, the groups with occupations to match, and how both were found."""

    n_up: int
    n_down: int
    groups: list[OrbitalGroup]
    notes: tuple[str, ...]


def _occupations(molden: Molden, rows: NDArray[np.int64]) -> NDArray[np.float64] | None:
    """None where the file has none, or nothing but zeros, which is how programs write that they do not know."""
    told = [molden.orbitals.occupations[int(r)] for r in rows]
    values = np.array([0.0 if value is None else value for value in told])
    if not values.any():
        return None
    nearest = np.rint(values)
    return np.where(np.abs(values - nearest) < SNAP, nearest + 0.0, values)


def group_orbitals(molden: Molden) -> tuple[list[OrbitalGroup], list[str]]:
    """Orbitals by spin. Up and down lists with the very same coefficients are one spin-restricted list."""
    spins = np.array(molden.orbitals.spins)
    up, down = np.flatnonzero(spins == "alpha"), np.flatnonzero(spins == "beta")
    if not len(down) or not len(up):
        rows = up if len(up) else down
        return [OrbitalGroup("spatial", rows, _occupations(molden, rows))], []
    a, b = _occupations(molden, up), _occupations(molden, down)
    matrix = molden.orbitals.coefficients
    if len(up) != len(down) or not np.array_equal(matrix[up], matrix[down]):
        return [OrbitalGroup("up", up, a), OrbitalGroup("down", down, b)], []
    notes = ["the up and down orbitals are the same: one spin-restricted set with the sum of the occupations"]
    energies = molden.orbitals.energies
    same = [energies[int(r)] for r in up] == [energies[int(r)] for r in down]
    if not same:
        notes.append("the energies of the up and down orbitals differ: the one set has none")
    if a is None and b is None:
        return [OrbitalGroup("spatial", up, None, has_energies=same)], notes
    a, b = (np.zeros(len(up)) if x is None else x for x in (a, b))
    return [OrbitalGroup("spatial", up, a + b, (float(a.sum()), float(b.sum())), same)], notes


def _tolerance(molden: Molden) -> float:
    """Electrons by which a sum of occupations may miss a whole number: a unit of the last digit of each fraction."""
    fractions = [o for o in molden.orbitals.occupations if o is not None and abs(o - round(o)) > SNAP]
    decimals = max((len(repr(o).partition("e")[0].partition(".")[2]) for o in fractions), default=16)
    return min(max(LEAST_TOLERANCE, len(fractions) * 10.0**-decimals), 0.02)


def _parse_electrons(text: str) -> tuple[int, int]:
    match = re.fullmatch(r"\s*(\d{1,6})\s*,\s*(\d{1,6})\s*", text)
    if match is None:
        raise ConversionError(
            f"the option is {text!r}",
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
    tolerance = _tolerance(molden)
    if named is not None:
        return _named(molden, groups, _parse_electrons(named), tolerance)
    if all(g.occupations is None for g in groups):
        raise _undecided(molden, "the occupations are all zero or missing")
    largest = 2.0 if groups[0].name == "spatial" else 1.0
    for group in groups:
        if group.occupations is not None and group.occupations.max() > largest + 0.1:
            found = f"an orbital of the spin {group.name} has the occupation {group.occupations.max():g}"
            raise _undecided(molden, found)
    if len(groups) == 2 or groups[0].sums is not None:
        sums = groups[0].sums or [0.0 if g.occupations is None else float(g.occupations.sum()) for g in groups]
        if any(abs(s - round(s)) > tolerance for s in sums):
            raise _undecided(molden, f"the occupations add up to {sums[0]:.6g} up and {sums[1]:.6g} down electrons")
        return Electrons(round(sums[0]), round(sums[1]), groups, ())
    occupations = groups[0].occupations
    assert occupations is not None
    total = float(occupations.sum())
    if abs(total - round(total)) > tolerance:
        raise _undecided(molden, f"the occupations add up to {total:.6g} electrons")
    n = round(total)
    whole = bool(np.all(np.abs(occupations - np.rint(occupations)) < SNAP))
    if whole and occupations.max() == 1.0 and abs(2 * n - nuclear) <= 1 and abs(n - nuclear) > 1:
        doubled = replace(groups[0], occupations=2.0 * occupations)
        return Electrons(n, n, [doubled], ("the occupations are those of one spin, as the charges show: doubled",))
    single = int(np.count_nonzero(occupations == 1.0)) if whole else n % 2
    notes = () if whole else (
        f"fractional occupations do not tell the spin: taken as {single} unpaired electron{'s' * (single != 1)} "
        "(--set electrons=UP,DOWN decides)",
    )  # fmt: skip
    return Electrons((n + single) // 2, (n - single) // 2, groups, notes)


def _named(molden: Molden, groups: list[OrbitalGroup], counts: tuple[int, int], tolerance: float) -> Electrons:
    """The numbers that the user gave, and occupations that add up to them where the file's do not."""
    notes = [f"{counts[0]} up and {counts[1]} down electrons, as the user says"]
    found = []
    for index, group in enumerate(groups):
        wanted = counts if group.name == "spatial" else (counts[index], 0)
        if max(wanted) > len(group.rows):
            raise ConversionError(
                f"{max(wanted)} electrons of one spin in {len(group.rows)} orbitals",
                where="--set electrons",
                expected="at most as many electrons of each spin as there are orbitals",
                remedy="correct the option",
            )
        occupations, note = _to_match(molden, group, wanted, tolerance)
        notes += [note] if note else []
        found.append(replace(group, occupations=occupations))
    return Electrons(counts[0], counts[1], found, tuple(notes))


def _to_match(
    molden: Molden, group: OrbitalGroup, wanted: tuple[int, int], tolerance: float
) -> tuple[NDArray[np.float64] | None, str]:
    """Occupations of one group that add up to the electrons, and what was done to have them."""
    given, n = group.occupations, sum(wanted)
    if given is None:
        order = _filling_order(molden, group)
        filled = np.zeros(len(group.rows))
        for count in wanted:
            filled[order[:count]] += 1.0
        how = "of the file" if np.array_equal(order, np.arange(len(order))) else "of the energies"
        return filled, f"the {group.name} orbitals are filled in the order {how}, since it has no occupations"
    if abs(given.sum() - n) <= tolerance:
        return given, ""
    squares = np.where((given > 0.0) & (given < 1.0), 2.0 * given**2, given)
    if group.name == "spatial" and abs(squares.sum() - n) <= 10 * tolerance:
        return squares, "occupations below 1 are read as the square root of half the number of electrons, which fits"
    return None, f"the occupations of the {group.name} orbitals add up to {given.sum():.6g} and are left out"


def _filling_order(molden: Molden, group: OrbitalGroup) -> NDArray[np.int64]:
    """By energy where the file has energies of all, else in the order of the file."""
    told = [molden.orbitals.energies[int(r)] for r in group.rows]
    energies = np.array([0.0 if e is None else e for e in told])
    if any(e is None for e in told) or not energies.any():
        return np.arange(len(told))
    return np.argsort(energies, kind="stable")


def _undecided(molden: Molden, found: str) -> ConversionError:
    line = molden.orbitals.lines[0] if molden.orbitals.lines else 1
    return ConversionError(
        f"{found}, so the numbers of electrons cannot be told",
        where=f"{molden.name}:{line}",
        expected="occupations that add up to whole numbers, at most 2 in an orbital and 1 for each spin",
        remedy="say them with --set electrons=UP,DOWN",
    )
