"""Tier *consistency*: electrons, nuclei, the cell and the unit of length."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.rules.elements import BOHR, COVALENT_RADII, NOBLE, SYMBOLS, element_readings
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Remark, rule
from qwfx.rules.wording import at, every, listed

__all__: list[str] = []

CHARGES = ("/system/atomic_numbers", "/system/effective_charges")
NUCLEI = ("/system/positions", *CHARGES)

SAME_PLACE = 1e-3  # bohr: closer than any nuclei of a calculation, wider than a printing accident
TOO_CLOSE = 0.6  # bohr: less than half the shortest bond (H2, 1.4 bohr)


@rule(
    name="electron-count",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/system",)),
    summary="there is at least one electron",
)
def electron_count(file: Inspection) -> Iterator[Remark]:
    n_up, n_down = file.integer("/system", "n_up"), file.integer("/system", "n_down")
    if n_up + n_down == 0:
        yield Problem("/system@n_up", "at least one electron", "n_up = n_down = 0", "write the numbers of electrons")
    yield Measured(f"n_up = {n_up}, n_down = {n_down}")


@rule(
    name="spin-order",
    tier="consistency",
    severity=Severity.NOTE,
    premise=Premise(members=("/system",), rules=("electron-count",)),
    summary="the majority spin is up",
)
def spin_order(file: Inspection) -> Iterator[Remark]:
    n_up, n_down = file.integer("/system", "n_up"), file.integer("/system", "n_down")
    if n_up < n_down:
        yield Problem(
            "/system@n_up",
            f"n_up >= n_down ({n_down})",
            str(n_up),
            "nothing, if it is meant; else swap the spins of counts, sets and strings together",
        )


@rule(
    name="atomic-numbers",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=CHARGES),
    summary="atomic numbers are 0 to 118, and charges lie between 0 and the atomic number",
)
def atomic_numbers(file: Inspection) -> Iterator[Remark]:
    numbers = file.read("/system/atomic_numbers")
    charges = file.read("/system/effective_charges")
    for i in np.flatnonzero((numbers < 0) | (numbers > len(SYMBOLS))):
        yield Problem(
            at("/system/atomic_numbers", i),
            f"0 to {len(SYMBOLS)}",
            str(numbers[i]),
            "write the atomic number of the element, 0 for a centre that has none",
        )
    for i in np.flatnonzero(~(charges >= 0) | ((charges > numbers) & (numbers > 0))):
        yield Problem(
            at("/system/effective_charges", i),
            f"0 to {numbers[i]}, the atomic number",
            f"{charges[i]:g}",
            "write the atomic number less the electrons in the core potential, 0 for a ghost",
        )
    yield Covered(every(len(numbers), "atom"))


@rule(
    name="element-labels",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/system/labels", "/system/atomic_numbers"), rules=("atomic-numbers",)),
    summary="labels that begin with an element symbol name the element of the atomic number",
)
def element_labels(file: Inspection) -> Iterator[Remark]:
    labels = file.strings("/system/labels")
    for i, (label, number) in enumerate(zip(labels, file.read("/system/atomic_numbers").tolist(), strict=True)):
        readings = element_readings(label)
        if number and readings and number not in readings:
            yield Problem(
                at("/system/labels", i),
                f"a label that suits {SYMBOLS[number - 1]} (Z = {number})",
                repr(label),
                "correct the label or the atomic number: one of them belongs to another atom",
            )
    yield Covered(every(len(labels), "label"))


@rule(
    name="cell-volume",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/system/cell/vectors",)),
    summary="the lattice vectors span a cell",
)
def cell_volume(file: Inspection) -> Iterator[Remark]:
    vectors = file.read("/system/cell/vectors").astype(np.float64)
    volume = float(np.linalg.det(vectors))
    edges = np.linalg.norm(vectors, axis=1)
    if not abs(volume) > 1e-8 * float(np.prod(edges)):
        yield Problem(
            "/system/cell/vectors",
            "three vectors that are linearly independent",
            f"volume {volume:.3g} bohr^3",
            "write the lattice vectors as rows, in bohr",
        )
    elif volume < 0:
        yield Problem(
            "/system/cell/vectors",
            "a right-handed set",
            f"volume {volume:.6g} bohr^3",
            "nothing, if it is meant; else swap two vectors",
            Severity.NOTE,
        )
    yield Measured(f"volume {abs(volume):.6g} bohr^3")


def pair_distances(file: Inspection) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Pairs i < j of centres and their distances in bohr, between nearest images in a cell."""
    positions = file.positions
    i, j = np.triu_indices(len(positions), 1)
    between = positions[j] - positions[i]
    if not file.usable("/system/cell/vectors"):
        return i, j, np.linalg.norm(between, axis=1)
    steps = np.array(np.meshgrid(*[(-1, 0, 1)] * 3)).reshape(3, -1).T
    images = steps @ file.read("/system/cell/vectors")
    return i, j, np.linalg.norm(between[:, None, :] + images, axis=-1).min(axis=1)


MANY_ATOMS = 4000
"""Atoms up to which all pairs are looked at (8 million pairs)."""


def _check_size(file: Inspection) -> None:
    n = file.shape("/system/positions")[0]
    if n > MANY_ATOMS:
        raise PremiseError(f"{n} atoms; pairs of atoms are looked at for up to {MANY_ATOMS}")


@rule(
    name="coincident-nuclei",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=NUCLEI, rules=("atomic-numbers",)),
    cost="all pairs of atoms",
    summary="no two nuclei stand in one place or closer than any bond",
)
def coincident_nuclei(file: Inspection) -> Iterator[Remark]:
    _check_size(file)
    charges = file.read("/system/effective_charges")
    i, j, distance = pair_distances(file)
    real = (charges[i] > 0) & (charges[j] > 0)
    for same, near in ((True, distance < SAME_PLACE), (False, (distance >= SAME_PLACE) & (distance < TOO_CLOSE))):
        for k in np.flatnonzero(near & real):
            yield Problem(
                at("/system/positions", j[k]),
                f"nuclei at least {TOO_CLOSE} bohr apart",
                f"atoms {i[k]} and {j[k]} are {distance[k]:.4g} bohr apart",
                "remove the duplicate atom, or correct its position"
                if same
                else "check the positions and their unit (bohr)",
                None if same else Severity.WARNING,
            )
    for k in np.flatnonzero((distance < SAME_PLACE) & ~real & ((charges[i] > 0) | (charges[j] > 0))):
        yield Problem(
            at("/system/positions", j[k]),
            "a ghost centre away from the nuclei",
            f"centres {i[k]} and {j[k]}, one of them a ghost, share one place",
            "nothing, if two basis sets on one atom are meant",
            Severity.NOTE,
        )
    yield Covered(every(len(i), "pair of atoms"))
    if len(distance):
        yield Measured(f"shortest distance {distance.min():.4g} bohr")


BONDED = (0.80, 1.32)
"""Nearest-neighbour distance over the sum of covalent radii in molecules (common practice; F2 1.24, H2 1.19)."""


@rule(
    name="length-unit",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=NUCLEI, rules=("atomic-numbers", "coincident-nuclei")),
    cost="all pairs of atoms",
    summary="distances look like bohr, not like a length converted once too often or not at all",
)
def length_unit(file: Inspection) -> Iterator[Remark]:
    """Each atom's nearest neighbour, in units of the sum of covalent radii. Where every atom is off by the same known
    factor, and would be in order without it, the unit is the likely cause."""
    _check_size(file)
    numbers = file.read("/system/atomic_numbers").astype(np.int64)
    charges = file.read("/system/effective_charges")
    bonding = (charges > 0) & (numbers > 0) & (numbers <= len(COVALENT_RADII)) & ~np.isin(numbers, list(NOBLE))
    if np.count_nonzero(bonding) < 2:
        raise PremiseError("fewer than two atoms that could be bonded")
    radius = np.zeros(len(numbers))
    radius[bonding] = np.array(COVALENT_RADII)[numbers[bonding] - 1]
    i, j, distance = pair_distances(file)
    keep = bonding[i] & bonding[j]
    ratio = distance[keep] * BOHR / (radius[i[keep]] + radius[j[keep]])
    nearest = np.full(len(numbers), np.inf)
    np.minimum.at(nearest, i[keep], ratio)
    np.minimum.at(nearest, j[keep], ratio)
    nearest = nearest[bonding]
    low, high = BONDED
    yield Measured(f"nearest neighbours at {nearest.min():.2f} to {nearest.max():.2f} sums of covalent radii")
    stories = [(BOHR, "angstrom written as bohr")]
    if len(nearest) > 2 and len(set(numbers[bonding].tolist())) > 1:
        # Chains and dimers of one element are often stretched on purpose.
        stories.append((1 / BOHR, "bohr converted to bohr a second time"))
    for factor, story in stories:
        if np.all((nearest >= low * factor) & (nearest <= high * factor)) and not np.any(
            (nearest >= low) & (nearest <= high)
        ):
            yield Problem(
                "/system/positions",
                f"nearest neighbours at {low} to {high} sums of covalent radii",
                f"{np.median(nearest):.2f} (median); all atoms fit if the lengths are {story}",
                f"divide the positions by {factor:.9f} if that is what happened",
            )
    elements = listed(sorted({SYMBOLS[z - 1] for z in numbers[bonding].tolist()}))
    yield Covered(f"{np.count_nonzero(bonding)} of {len(numbers)} atoms: {elements}")


@rule(
    name="total-charge",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=CHARGES, rules=("electron-count", "atomic-numbers")),
    summary="nuclei and electrons add up to a charge that a molecule may have",
)
def total_charge(file: Inspection) -> Iterator[Remark]:
    charges = file.read("/system/effective_charges")
    if not np.any(charges > 0):
        raise PremiseError("the file has no nuclei")
    electrons = file.integer("/system", "n_up") + file.integer("/system", "n_down")
    total = float(charges.sum()) - electrons
    yield Measured(f"total charge {total:g}")
    cores = float((file.read("/system/atomic_numbers") - charges)[charges > 0].sum())
    if cores > 0 and abs(total + cores) < 1e-6:
        yield Problem(
            "/system/effective_charges",
            f"{charges.sum():g} electrons for a neutral molecule",
            f"{electrons}, which counts the {cores:g} electrons that the core potentials stand for",
            "leave them out of n_up, n_down and the strings, or write the full charges",
        )
    elif not -3 <= total <= max(4.0, 0.5 * float(charges.sum())):
        yield Problem(
            "/system/effective_charges",
            "a total charge of -3 to 4, as molecules have",
            f"{total:g}",
            "check n_up, n_down and the effective charges",
        )
    elif abs(total - round(total)) > 1e-6:
        yield Problem("/system/effective_charges", "a whole total charge", f"{total:g}", "check the effective charges")
