"""How a Molden file normalises its functions: each way is tried, and the one that makes the orbitals orthonormal taken.

The description of the format says that coefficients refer to normalised primitives, and no more. Programs differ in
whether the contraction is then normalised, whether Cartesian components share one factor, and whether the printed
coefficients contain the primitives' factors already. A wrong reading spoils orthonormality by 1e-3 to 100; the printed
digits by their own size.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import prod

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.order import shell_order
from qwfx.converters.molden.sections import Molden
from qwfx.errors import ConversionError
from qwfx.kernels import overlap
from qwfx.model import Basis
from qwfx.reference.harmonics import monomial_powers
from qwfx.reference.norms import gaussian_norm, monomial_norm

__all__ = ["READINGS", "Choice", "Reading", "choose", "file_order"]


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


READINGS = {
    r.name: r
    for r in (
        Reading("as-printed", False, False, False, "contractions as printed over normalised primitives"),
        Reading("as-printed-shared", False, False, True,
                "contractions as printed over normalised primitives, Cartesian components sharing the factor of xx..x"),
        Reading("normalised", False, True, False, "printed contractions over normalised primitives, then normalised"),
        Reading("normalised-shared", False, True, True,
                "the same, Cartesian components sharing the factor of xx..x"),
        Reading("with-factors", True, False, False, "coefficients that contain the factors of the primitives"),
        Reading("with-factors-shared", True, False, True,
                "coefficients that contain the factors of the primitives, Cartesian components sharing one"),
        Reading("with-factors-normalised", True, True, False,
                "coefficients that contain the factors of the primitives, contractions then normalised"),
        Reading("with-factors-normalised-shared", True, True, True,
                "the same, Cartesian components sharing the factor of xx..x"),
    )
}  # fmt: skip

SAMPLE = 48
"""Orbitals that every reading is tried on; the one that is chosen is tried on all."""
CLEARLY = 0.02
"""A reading is chosen over others that fit within the printed digits only if it fits this much better."""


@dataclass(frozen=True)
class Choice:
    """The reading that was chosen, and what follows from it."""

    reading: Reading
    basis: Basis
    factors: NDArray[np.float64]
    """(F) factor of each function, in our order: the orbital coefficients are divided into file order by it."""
    residual: float
    """Largest deviation of C S C+ from 1, over all orbitals of one spin."""
    note: str


def file_order(molden: Molden) -> NDArray[np.int64]:
    """``order[k]``: place in the file's list of functions of our function k."""
    parts, start = [], 0
    for shell in molden.shells:
        own = shell_order(shell.l, _monomial(molden, shell.l))
        parts.append(start + own)
        start += len(own)
    return np.concatenate(parts)


def _monomial(molden: Molden, l: int) -> bool:
    """s and p functions are the same either way; they go with the rest of the file."""
    if l < 2:
        return all(molden.cartesian.get(shell.l, True) for shell in molden.shells if shell.l > 1) and any(
            shell.l > 1 for shell in molden.shells
        )
    return molden.cartesian[l]


def _basis(molden: Molden, factors_included: bool) -> Basis:
    """The shells with the primitives' factors, as printed otherwise."""
    coefficients = []
    for shell in molden.shells:
        if factors_included:
            # The factor of the primitive x^l is inside; a solid function has another angular constant.
            monomial = _monomial(molden, shell.l)
            angular = 1.0 if monomial else float(gaussian_norm(shell.l, 1.0) / monomial_norm(shell.l, 0, 0, 1.0))
            coefficients.append(shell.coefficients * angular)
        elif _monomial(molden, shell.l):
            norms = np.array([monomial_norm(shell.l, 0, 0, float(a)) for a in shell.exponents])
            coefficients.append(shell.coefficients * norms)
        else:
            norms = np.array([gaussian_norm(shell.l, float(a)) for a in shell.exponents])
            coefficients.append(shell.coefficients * norms)
    sizes = [len(shell.exponents) for shell in molden.shells]
    return Basis(
        "gaussian",
        np.array([shell.atom for shell in molden.shells], dtype=np.int32),
        np.array([shell.l for shell in molden.shells], dtype=np.int32),
        np.array([_monomial(molden, shell.l) for shell in molden.shells], dtype=np.int8),
        np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64),
        np.concatenate([shell.exponents for shell in molden.shells]),
        np.concatenate(coefficients),
    )


def _component_factors(basis: Basis) -> NDArray[np.float64]:
    """(F) what makes each Cartesian component as long as xx..x: sqrt((2l-1)!! / ((2i-1)!! (2j-1)!! (2k-1)!!))."""

    def odd(n: int) -> int:
        return prod(range(2 * n - 1, 0, -2))

    parts = []
    for l, monomial in zip(basis.shell_l.tolist(), basis.shell_monomial.tolist(), strict=True):
        powers = monomial_powers(l) if monomial else ()
        own = [np.sqrt(odd(l) / (odd(i) * odd(j) * odd(k))) for i, j, k in powers]
        parts.append(np.array(own) if monomial else np.ones(2 * l + 1))
    return np.concatenate(parts)


def _scaled(basis: Basis, per_shell: NDArray[np.float64]) -> Basis:
    from dataclasses import replace

    lengths = np.diff(basis.primitive_start)
    return replace(basis, coefficients=basis.coefficients * np.repeat(per_shell, lengths))


class _Trial:
    """One way of forming primitives, with its overlap matrix; the readings scale rows and columns of it."""

    def __init__(self, molden: Molden, positions: NDArray[np.float64], factors_included: bool) -> None:
        self.basis = _basis(molden, factors_included)
        self.overlap = overlap(self.basis, positions)
        first = self.basis.function_start[:-1]
        diagonal = np.diag(self.overlap)[first]
        # The first function of a monomial shell is x^l; all functions of a solid shell have the same norm.
        self.shell_scale = 1.0 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0))
        self.components = _component_factors(self.basis)

    def function_scale(self, reading: Reading) -> NDArray[np.float64]:
        """(F) factor of every function under a reading, relative to the primitives as they are in `basis`."""
        per_shell = self.shell_scale if reading.normalised else np.ones_like(self.shell_scale)
        scale = np.repeat(per_shell, self.basis.shell_size)
        return scale if reading.shared else scale * self.components


def _residual(matrix: NDArray[np.float64], s: NDArray[np.float64], rows: NDArray[np.int64]) -> float:
    """Largest deviation of some rows of C S C+ from 1."""
    gram = (matrix[rows] @ s) @ matrix.T
    gram[np.arange(len(rows)), rows] -= 1.0
    return float(np.abs(gram).max(initial=0.0))


def choose(
    molden: Molden, positions: NDArray[np.float64], sets: list[NDArray[np.float64]], named: str | None
) -> Choice:
    """Choose the reading under which the orbitals are orthonormal.

    Parameters
    ----------
    positions : (A, 3) bohr.
    sets : orbitals of one spin each, (M, F) in the file's values and our order of functions.
    named : a reading that the user named, or None.

    Raises ConversionError if none fits, or several that are not the same to the printed digits.
    """
    trials = {False: _Trial(molden, positions, False)}
    tolerance = _tolerance(molden)
    rng = np.random.default_rng(0)
    samples = [np.sort(rng.permutation(len(c))[:SAMPLE]) for c in sets]
    residuals: dict[str, float] = {}
    scales: dict[str, NDArray[np.float64]] = {}
    wanted = [READINGS[named]] if named else list(READINGS.values())
    for reading in wanted:
        included = reading.factors_included
        if included not in trials:
            if not named and min(residuals.values()) <= tolerance * CLEARLY:
                continue  # a reading over normalised primitives fits far within the digits already
            trials[included] = _Trial(molden, positions, included)
        scale = trials[included].function_scale(reading)
        scales[reading.name] = scale
        residuals[reading.name] = max(
            _residual(c * scale, trials[included].overlap, rows) for c, rows in zip(sets, samples, strict=True)
        )
    least = min(residuals.values())
    # Readings that fit equally well are the same functions to the printed digits (checked below): the first will do.
    best = next(READINGS[name] for name, size in residuals.items() if least >= CLEARLY * size or size == least)
    if not named:
        _check_choice(molden, best, residuals, scales, tolerance)
    trial, scale = trials[best.factors_included], scales[best.name]
    s = trial.overlap * scale[:, None] * scale
    residual = max(_residual(c, s, np.arange(len(c))) for c in sets)
    per_shell = trial.shell_scale if best.normalised else np.ones_like(trial.shell_scale)
    components = np.ones_like(scale) if best.shared else trial.components
    note = f"reading {best.name} ({best.meaning}): orbitals orthonormal to {residual:.1e}"
    if named:
        note += ", chosen by the user"
        if residual > tolerance:
            note += f"; the printed digits would allow {tolerance:.0e}, so this reading does not fit"
    return Choice(best, _scaled(trial.basis, per_shell), components, residual, note)


def _tolerance(molden: Molden) -> float:
    """What the rounding of the printed digits explains, with room for coordinates of as many digits."""
    return max(200.0 * 10.0 ** -molden.orbitals.decimals, 1e-6)


def _check_choice(
    molden: Molden, best: Reading, residuals: dict[str, float], scales: dict[str, NDArray[np.float64]], tolerance: float
) -> None:
    listed = ", ".join(f"{name} {size:.1e}" for name, size in sorted(residuals.items(), key=lambda item: item[1]))
    if not residuals[best.name] <= tolerance:
        raise ConversionError(
            f"the orbitals are orthonormal under no reading (deviations: {listed})",
            where=molden.name,
            expected=f"a deviation below {tolerance:.0e}, which the {molden.orbitals.decimals} printed decimals allow",
            remedy="check units, flags and completeness of the file, or decide with --reading NAME",
        )
    for name, size in residuals.items():
        other = READINGS[name]
        if name == best.name or size > tolerance or residuals[best.name] <= CLEARLY * size:
            continue
        same = other.factors_included == best.factors_included and np.allclose(
            scales[name], scales[best.name], rtol=tolerance, atol=0.0
        )
        if not same:
            raise ConversionError(
                f"more than one reading fits (deviations: {listed})",
                where=molden.name,
                expected="one that fits clearly better than the others",
                remedy="decide with --reading NAME",
            )
