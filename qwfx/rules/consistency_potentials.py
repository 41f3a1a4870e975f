"""Tier *consistency*: effective charges against core potentials."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, Problem, Remark, rule
from qwfx.rules.wording import at, every, figure

__all__: list[str] = []

CHARGES = ("/system/atomic_numbers", "/system/effective_charges")


@rule(
    name="potential-terms",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/potentials",)),
    summary="terms of core potentials have a known channel, a power of -2 or more and a positive exponent",
)
def potential_terms(file: Inspection) -> Iterator[Remark]:
    for member, low, words in (
        ("/potentials/channel", -1, "-1 for the local part, else the angular momentum l >= 0"),
        ("/potentials/power", -2, "the power of r as it enters the formula, -2 or more"),
    ):
        values = file.read(member)
        for i in np.flatnonzero(values < low):
            yield Problem(at(member, i), words, str(values[i]), "see FORMAT.md, effective core potential")
    exponents = file.read("/potentials/exponent")
    for i in np.flatnonzero(~(exponents > 0)):
        yield Problem(
            at("/potentials/exponent", i),
            "a positive exponent: the term must decay",
            f"{exponents[i]:g}",
            "correct the exponent, or remove the term",
        )
    yield Covered(every(len(exponents), "term"))


def _local_pole(file: Inspection) -> np.ndarray:
    """(A) sum of the coefficients of the local r^-1 terms: at the nucleus the potential goes like (that - Zeff)/r."""
    pole = np.zeros(file.shape("/system/effective_charges")[0])
    if file.has("/potentials"):
        terms = (file.read("/potentials/channel") == -1) & (file.read("/potentials/power") == -1)
        center = file.read("/potentials/center")
        np.add.at(pole, center[terms], file.read("/potentials/coefficient")[terms])
    return pole


def _terms_of_atoms(file: Inspection) -> np.ndarray:
    """(A) number of potential terms on each atom."""
    n_atoms = file.shape("/system/effective_charges")[0]
    if not file.has("/potentials"):
        return np.zeros(n_atoms, dtype=np.int64)
    return np.bincount(file.read("/potentials/center"), minlength=n_atoms)


@rule(
    name="core-charges",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=CHARGES, rules=("atomic-numbers", "atom-indices", "potential-terms")),
    summary="an atom has a reduced charge exactly where it has a core potential",
)
def core_charges(file: Inspection) -> Iterator[Remark]:
    if file.has("/potentials") and not file.usable("/potentials", "atom-indices", "potential-terms"):
        return
    numbers = file.read("/system/atomic_numbers")
    charges = file.read("/system/effective_charges").astype(np.float64)
    terms, pole = _terms_of_atoms(file), _local_pole(file)
    member = "/system/effective_charges"
    mild = None if file.purpose == "trial" else Severity.WARNING
    for i, (number, charge, n_terms) in enumerate(zip(numbers.tolist(), charges.tolist(), terms.tolist(), strict=True)):
        cores = number - charge
        if n_terms and charge == 0:
            yield Problem(
                at(member, i),
                "a charge: the atom has a core potential",
                "0, as for a ghost",
                "write the effective charge, or remove the potential",
            )
        elif n_terms and cores == 0 and abs(pole[i] - charge) > 1e-6 * charge:
            # A full charge with a potential is right only where the potential softens the nucleus (as for H and He).
            hint = f"; the local part belongs to charge {pole[i]:g}" if 0 < pole[i] < charge else ""
            yield Problem(
                at(member, i),
                "a charge reduced by the electrons in the core potential",
                f"{charge:g}, the full charge, with {n_terms} potential terms{hint}",
                "write the effective charge, or remove the potential",
            )
        elif not n_terms and number and 0 < charge < number:
            yield Problem(
                at(member, i),
                "a core potential on the atom, or the full charge",
                f"{charge:g} of {number}, without a potential",
                "add the terms of the potential to /potentials, or write the full charge",
                mild,
            )
        elif charge > 0 and (abs(cores - round(cores)) > 1e-9 or round(cores) % 2):
            yield Problem(
                at(member, i),
                "a core of an even number of electrons",
                f"{cores:g} core electrons",
                "check the effective charge against the source of the potential",
                Severity.WARNING,
            )
    yield Covered(every(len(numbers), "atom"))
    yield Measured(f"atoms with core potentials: {np.count_nonzero(terms)}")


@rule(
    name="potential-pole",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=(*CHARGES, "/potentials"), rules=("core-charges",)),
    summary="repulsive local r^-1 terms, where there are any, cancel the pole of the effective charge",
)
def potential_pole(file: Inspection) -> Iterator[Remark]:
    charges = file.read("/system/effective_charges").astype(np.float64)
    pole = _local_pole(file)
    # Sums below 0 are those of potentials that keep the pole, as many do; only a sum above 0 is meant to cancel it.
    chosen = np.flatnonzero((pole > 0) & (charges > 0))
    for i in chosen:
        if abs(pole[i] - charges[i]) > 1e-6 * charges[i]:
            yield Problem(
                at("/system/effective_charges", i),
                f"{pole[i]:g}, the sum of the local r^-1 coefficients",
                f"{charges[i]:g}, so that the potential diverges at the nucleus",
                "check charge and potential against their source; power is that of r, not of r^2 V",
            )
    if len(chosen):
        yield Measured(f"largest deviation {figure(np.abs(pole - charges)[chosen].max())}")
    yield Covered(f"atoms with repulsive local r^-1 terms: {len(chosen)}")
