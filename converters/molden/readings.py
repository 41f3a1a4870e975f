"""How a Molden file normalises its functions: each way is tried, and the one that makes the orbitals orthonormal taken.

The description of the format says that coefficients refer to normalised primitives, and no more. Programs differ in
whether the contraction is then normalised, whether Cartesian components share one factor, and whether the printed
coefficients contain the primitives' factors already. A few reverse the signs of spherical functions with m = 3, 4 (from
memory). A wrong reading spoils orthonormality by 1e-3 to 100; the printed digits by their own size.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.functions import Trial
from qwfx.converters.molden.sections import Molden
from qwfx.errors import ConversionError
from qwfx.model import Basis

__all__ = ["READINGS", "SIGNS", "Choice", "Reading", "choose"]


@dataclass(frozen=True)
class Reading:
    """One way to read the coefficients."""

    name: str
    factors_included: bool
    """Printed coefficients contain the factors of the primitives."""
    normalised: bool
    """Each contraction is then normalised."""
    shared: bool
    """Cartesian components share the factor of xx..x; otherwise each has unit norm."""
    meaning: str
    reversed_signs: bool = False
    """Spherical functions of l >= 3 with m = 3, -3, 4, -4 have the opposite sign."""


_SHARED = ", Cartesian components sharing the factor of xx..x"
_PRINTED = "contractions as printed over normalised primitives"
_FACTORS = "coefficients that contain the factors of the primitives"

READINGS = {
    r.name: r
    for r in (
        Reading("as-printed", False, False, False, _PRINTED),
        Reading("contraction-normalised", False, True, False, _PRINTED + ", then normalised"),
        Reading("as-printed-shared", False, False, True, _PRINTED + _SHARED),
        Reading("contraction-normalised-shared", False, True, True, _PRINTED + ", then normalised" + _SHARED),
        Reading("primitive-factors-included", True, False, False, _FACTORS),
        Reading("primitive-factors-normalised", True, True, False, _FACTORS + ", contractions then normalised"),
        Reading("primitive-factors-included-shared", True, False, True, _FACTORS + _SHARED),
        Reading("primitive-factors-normalised-shared", True, True, True,
                _FACTORS + ", contractions then normalised" + _SHARED),
    )
}  # fmt: skip
"""In order of preference, where several give the same functions."""

SIGNS = ("standard", "reversed-3-4")

SAMPLE = 16
"""Orbitals that every reading is tried on; those that fit are tried on all."""
CLEARLY = 0.02
"""A reading that fits this much better than another is no rival of it, though both fit within the printed digits."""
FLOOR = 1e-6
"""Deviation that is always allowed: thresholds of the programs, and the digits of their length of an angstrom."""
SAFETY = 4.0
ROUNDING = 1e-12
"""Deviations that are rounding alone: no reason to prefer one reading to an earlier one."""
LARGEST_TOLERANCE = 0.02


@dataclass(frozen=True)
class Choice:
    """The reading that was chosen, and what follows from it."""

    reading: Reading
    basis: Basis
    factors: NDArray[np.float64]
    """(F) in our order: the orbital coefficients of the file are multiplied with it."""
    residual: float
    """Largest deviation of C S C+ from 1, over all orbitals of one spin."""
    note: str


class _Candidate:
    """A reading with the factors of its functions; its residuals are computed once, on the sample or on all."""

    def __init__(self, reading: Reading, trial: Trial, sets: list[NDArray[np.float64]]) -> None:
        self.reading, self.trial, self.sets = reading, trial, sets
        self.scale = trial.function_scale(reading.normalised, reading.shared, reading.reversed_signs)
        self.residual = np.inf

    def measure(self, rows: list[NDArray[np.int64]]) -> float:
        """Largest deviation of some rows of C S C+ from 1, S over the functions of this reading."""
        self.residual = 0.0
        for matrix, own in zip(self.sets, rows, strict=True):
            for part in np.array_split(own, max(1, len(own) // 128)):
                gram = ((matrix[part] * self.scale) @ self.trial.overlap * self.scale) @ matrix.T
                gram[np.arange(len(part)), part] -= 1.0
                deviation = float(np.abs(gram).max(initial=0.0))
                self.residual = max(self.residual, deviation if np.isfinite(deviation) else np.inf)
        return self.residual


def choose(
    molden: Molden,
    positions: NDArray[np.float64],
    sets: list[NDArray[np.float64]],
    named: str | None = None,
    signs: str | None = None,
) -> Choice:
    """Choose the reading under which the orbitals are orthonormal.

    Parameters
    ----------
    positions : (A, 3) bohr.
    sets : orbitals of one spin each, (M, F) in the file's values and our order of functions.
    named, signs : a reading and signs (`SIGNS`) that the user named, or None.

    Raises ConversionError if none fits, or several that are not the same to the printed digits.
    """
    rng = np.random.default_rng(0)
    samples = [np.sort(rng.permutation(len(c))[:SAMPLE]) for c in sets]
    wanted = [READINGS[named]] if named else list(READINGS.values())
    if molden.slater:
        wanted = [r for r in wanted if not r.factors_included and not r.shared] or wanted
    trials = {kind: Trial(molden, positions, kind) for kind in sorted({r.factors_included for r in wanted})}
    tried: list[_Candidate] = []
    tolerance = FLOOR
    with np.errstate(all="ignore"):
        for reversed_signs in [signs == SIGNS[1]] if signs else [False, True]:
            if reversed_signs and not any(s.l > 2 and not molden.cartesian[s.l] for s in molden.shells):
                continue
            for kind, trial in trials.items():
                for reading in (r for r in wanted if r.factors_included == kind):
                    candidate = _Candidate(replace(reading, reversed_signs=reversed_signs), trial, sets)
                    if not any(c.trial is trial and np.array_equal(c.scale, candidate.scale) for c in tried):
                        candidate.measure(samples)
                        tolerance = tolerance if tried else _tolerance(molden, candidate, samples)
                        tried.append(candidate)
                trial.release()  # only one matrix at a time: it takes less time to compute than it takes memory
            if any(c.residual <= tolerance for c in tried):
                break  # unusual signs are tried only where usual ones do not fit
        every = [np.arange(len(c)) for c in sets]
        for candidate in tried:
            if candidate.residual <= tolerance or named:
                candidate.measure(every)
        return _decide(molden, tried, tolerance, bool(named))


def _decide(molden: Molden, tried: list[_Candidate], tolerance: float, named: bool) -> Choice:
    if not tried:
        raise ConversionError(
            "the file has no spherical functions beyond d, whose signs could be reversed",
            where="--set signs",
            expected="such functions",
            remedy="leave the option out",
        )
    least = min(c.residual for c in tried)
    best = next(c for c in tried if not c.residual > 10.0 * least + ROUNDING)
    if not named:
        _check(molden, best, tried, tolerance)
    reading = best.reading
    basis, factors = best.trial.final(reading.normalised, reading.shared, reading.reversed_signs)
    signs = ", signs of m = 3, 4 reversed" if reading.reversed_signs else ""
    note = f"reading {reading.name} ({reading.meaning}{signs}): orbitals orthonormal to {best.residual:.1e}"
    note += f", where the printed digits allow {tolerance:.0e}"
    if named:
        note += "; chosen by the user" + ("" if best.residual <= tolerance else ", though it does not fit")
    return Choice(reading, basis, factors, best.residual, note)


def _tolerance(molden: Molden, candidate: _Candidate, samples: list[NDArray[np.int64]]) -> float:
    """What the rounding of the printed digits explains of C S C+ - 1.

    With every orbital coefficient wrong by at most e, an element is wrong by at most ``2 e sum_m |(S C+)_mq|``; with
    every contraction wrong by the fraction f, by at most ``2 f |C_p| |S C+_q|`` (Cauchy and Schwarz). Both are to be
    had from any reading that is near enough, so the first will do.
    """
    error = 0.5 * 10.0**-molden.orbitals.decimals
    fraction = 0.5 * 10.0 ** (1 - _contraction_digits(molden))
    size = 0.0
    for matrix, rows in zip(candidate.sets, samples, strict=True):
        own = matrix[rows] * candidate.scale
        image = own @ candidate.trial.overlap
        lengths = [np.linalg.norm(x, axis=1).max(initial=0.0) for x in (own, image)]
        size = max(size, 2 * error * float(np.abs(image).sum(axis=1).max(initial=0.0)) * max(1.0, np.abs(own).max()))
        size = max(size, 2 * fraction * float(lengths[0] * lengths[1]))
    size = size if np.isfinite(size) else 0.0
    return min(FLOOR + SAFETY * size, LARGEST_TOLERANCE)


def _contraction_digits(molden: Molden) -> int:
    """Significant digits of the contraction coefficients, as many as the longest of them needs."""
    most = 0
    for shell in molden.shells:
        for value in shell.coefficients.tolist() if len(shell.coefficients) > 1 else ():
            digits = repr(abs(value)).split("e")[0].replace(".", "").strip("0")
            most = max(most, len(digits))
    return most or 16


def _distance(one: _Candidate, other: _Candidate) -> float:
    """Largest change of an orbital, as a fraction of its functions' size, if one reading replaces another."""
    lengths = np.diff(one.trial.basis.primitive_start)
    weight = np.max([np.abs(c).max(axis=0, initial=0.0) for c in one.sets], axis=0)
    weight = weight * np.abs(one.scale) * one.trial.lengths
    first = one.trial.basis.primitive_start[:-1].astype(np.intp)
    a, b = one.trial.basis.coefficients, other.trial.basis.coefficients
    worst = 0.0
    for component in range(int(one.trial.basis.shell_size.max())):
        # All shells at once, each with its function of this number where it has so many.
        there = one.trial.basis.shell_size > component
        function = np.where(there, one.trial.basis.function_start[:-1] + component, 0)
        ours, theirs = (
            c.scale[function].repeat(lengths) * values for c, values in ((one, a), (other, b))
        )
        change = np.maximum.reduceat(np.abs(ours - theirs), first) / np.maximum.reduceat(np.abs(ours), first)
        worst = max(worst, float(np.where(there, change * weight[function], 0.0).max()))
    return worst


def _check(molden: Molden, best: _Candidate, tried: list[_Candidate], tolerance: float) -> None:
    """Raise ConversionError where no reading fits, or another one too and gives other functions."""
    listed = ", ".join(
        f"{c.reading.name}{' with signs reversed' if c.reading.reversed_signs else ''} {c.residual:.1e}"
        for c in sorted(tried, key=lambda c: c.residual)
    )
    if not best.residual <= tolerance:
        raise ConversionError(
            f"the orbitals are orthonormal under no reading (deviations: {listed})",
            where=molden.name,
            expected=f"a deviation below {tolerance:.0e}, which the printed digits allow",
            remedy="check the unit, the flags and the completeness of the file, or decide with --reading NAME",
        )
    rivals = [c for c in tried if c is not best and c.residual <= tolerance and best.residual > CLEARLY * c.residual]
    if any(_distance(best, c) > tolerance for c in rivals):
        raise ConversionError(
            f"more than one reading fits (deviations: {listed})",
            where=molden.name,
            expected="one that fits clearly better than the others",
            remedy="decide with --reading NAME",
        )
