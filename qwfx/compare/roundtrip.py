"""Convert, convert back, and compare: the same orbital values, or here is what differs and by how much."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.compare.alignment import align
from qwfx.conversion import QWFX, read_any, target_of, write_any
from qwfx.converters.plugin import Progress, Reading
from qwfx.converters.registry import by_name
from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.model import Basis, Hamiltonian, OrbitalSet, Wavefunction
from qwfx.points import REGIONS, probe_points
from qwfx.storage import load, save

__all__ = ["OrbitalAgreement", "RoundTrip", "SetAgreement", "roundtrip"]

QUANTITIES = ("value", "gradient", "Laplacian")


@dataclass(frozen=True)
class OrbitalAgreement:
    """How one orbital came back."""

    index: int
    freedom: str
    """What had to be undone before comparing: ``none``, ``sign``, ``order (was 4)``, ``rotation within {5, 6}``."""
    scale: tuple[float, float, float]
    """Largest magnitude of value, gradient and Laplacian over the points."""
    absolute: tuple[float, float, float]
    """Largest difference of value, gradient and Laplacian."""

    @property
    def relative(self) -> tuple[float, float, float]:
        """The differences in units of the orbital's own scale."""
        a, b, c = (d / s if s > 0 else d for d, s in zip(self.absolute, self.scale, strict=True))
        return a, b, c


@dataclass(frozen=True)
class SetAgreement:
    """How one set of orbitals, or one part of the Hamiltonian, came back."""

    name: str
    orbitals: tuple[OrbitalAgreement, ...] = ()
    problem: str = ""
    """Why the set could not be compared at all, or empty."""

    @property
    def worst(self) -> float:
        """Largest relative difference of the set."""
        return max((max(o.relative) for o in self.orbitals), default=0.0)


@dataclass(frozen=True)
class RoundTrip:
    """The outcome of a round trip."""

    source: str
    source_format: str
    through: str
    n_points: int
    regions: str
    tolerance: float
    sets: tuple[SetAgreement, ...]
    integrals: Mapping[str, float]
    """Part of the Hamiltonian -> largest difference, hartree; empty without a Hamiltonian."""
    witness: Mapping[str, float]
    """Orbital set -> largest relative difference between qwfx and the witness's evaluator at the witness points."""
    missing: tuple[str, ...]
    """Parts of the source that did not come back."""
    notes: tuple[str, ...]

    @property
    def worst(self) -> float:
        """Largest relative difference of any orbital, or absolute difference of any integral."""
        figures = [s.worst for s in self.sets] + list(self.integrals.values()) + list(self.witness.values())
        return max(figures, default=0.0)

    @property
    def same(self) -> bool:
        """Whether everything that was compared came back within the tolerance."""
        return not any(s.problem for s in self.sets) and bool(self.worst <= self.tolerance)


def _evaluate(basis: Basis, positions: NDArray[np.float64], s: OrbitalSet, points: NDArray[np.float64]) -> Any:
    from qwfx.kernels import evaluate_orbitals

    return evaluate_orbitals(basis, positions, np.asarray(s.coefficients), points)


def _per_orbital(
    first: NDArray[Any], second: NDArray[Any], freedom: tuple[str, ...]
) -> tuple[OrbitalAgreement, ...]:
    """Agreement of two fields (5, n_points, M) orbital by orbital."""
    parts = (slice(0, 1), slice(1, 4), slice(4, 5))
    scale = [np.abs(first[part]).max(axis=(0, 1), initial=0.0) for part in parts]
    worst = [np.abs(first[part] - second[part]).max(axis=(0, 1), initial=0.0) for part in parts]
    return tuple(
        OrbitalAgreement(
            p,
            freedom[p],
            (float(scale[0][p]), float(scale[1][p]), float(scale[2][p])),
            (float(worst[0][p]), float(worst[1][p]), float(worst[2][p])),
        )
        for p in range(first.shape[2])
    )


def compare_orbitals(
    first: Wavefunction, second: Wavefunction, points: NDArray[np.float64], tolerance: float
) -> tuple[SetAgreement, ...]:
    """Every orbital set of `first` against the set of the same name in `second`, at `points` (N, 3) bohr."""
    results = []
    for name, a in first.orbitals.items():
        b = second.orbitals.get(name)
        if b is None:
            there = ", ".join(second.orbitals) or "none"
            results.append(SetAgreement(name, problem=f"the set did not come back (sets there: {there})"))
        elif a.n_orbitals != b.n_orbitals:
            results.append(
                SetAgreement(name, problem=f"{a.n_orbitals} orbitals went out, {b.n_orbitals} came back")
            )
        elif first.basis is None or second.basis is None:
            results.append(SetAgreement(name, problem="there is no basis to evaluate the orbitals with"))
        else:
            x = _evaluate(first.basis, first.system.positions, a, points)
            y = _evaluate(second.basis, second.system.positions, b, points)
            aligned = align(x, y, a.energies, tolerance)
            results.append(SetAgreement(name, _per_orbital(x, aligned.fields, aligned.freedom)))
    return tuple(results)


def compare_integrals(first: Hamiltonian | None, second: Hamiltonian | None) -> tuple[dict[str, float], list[str]]:
    """Largest difference of each part of two Hamiltonians, hartree, and the parts that did not come back."""
    if first is None:
        return {}, []
    if second is None:
        return {}, ["the Hamiltonian"]
    largest = {"core energy": abs(first.core_energy - second.core_energy)}
    for what in ("one_body", "two_body"):
        ones, twos = getattr(first, what), getattr(second, what)
        for key, one in ones.items():
            name = f"{what.replace('_', '-')} {key}"
            if key not in twos or first.n_orbitals != second.n_orbitals:
                largest[name] = float("inf")  # came back as integrals of something else
                continue
            largest[name] = _largest_difference(one, twos[key])
    return largest, []


def _largest_difference(one: Any, two: Any) -> float:
    if hasattr(one, "values") and hasattr(one, "index"):  # packed two-body integrals, dense or sparse
        return _packed_difference(one, two)
    return float(np.abs(np.asarray(one) - np.asarray(two)).max(initial=0.0))


def _packed_difference(one: Any, two: Any) -> float:
    if one.index is None and two.index is None:
        return float(np.abs(np.asarray(one.values) - np.asarray(two.values)).max(initial=0.0))
    places = []
    for part in (one, two):
        values = np.asarray(part.values)
        index = np.arange(len(values), dtype=np.uint64) if part.index is None else np.asarray(part.index)
        places.append((index, values))
    every = np.union1d(places[0][0], places[1][0])
    dense = [np.zeros(len(every), dtype=values.dtype) for _, values in places]
    for target, (index, values) in zip(dense, places, strict=True):
        target[np.searchsorted(every, index)] = values
    return float(np.abs(dense[0] - dense[1]).max(initial=0.0))


def compare_witness(wavefunction: Wavefunction) -> dict[str, float]:
    """Largest relative difference between qwfx's evaluation and the witness, per orbital set."""
    witness, basis = wavefunction.witness, wavefunction.basis
    if witness is None or basis is None:
        return {}
    worst = {}
    for name, told in witness.orbitals.items():
        if name in wavefunction.orbitals:
            ours = _evaluate(basis, wavefunction.system.positions, wavefunction.orbitals[name], witness.points)
            theirs = np.concatenate(
                [told.values[None], np.moveaxis(told.gradients, -1, 0), told.laplacians[None]]
            )
            agreement = _per_orbital(theirs, ours, ("none",) * theirs.shape[2])
            worst[name] = max((max(o.relative) for o in agreement), default=0.0)
    return worst


def _default_through(source_format: str, wavefunction: Wavefunction) -> str:
    if source_format != QWFX:
        return source_format
    return "molden" if wavefunction.orbitals else "fcidump"


def roundtrip(
    source: Path,
    workdir: Path,
    *,
    source_format: str | None = None,
    options: Mapping[str, str] | None = None,
    through: str | None = None,
    n_points: int = 600,
    seed: int = 1,
    regions: tuple[str, ...] = REGIONS,
    points: NDArray[np.float64] | None = None,
    tolerance: float = 1e-9,
    progress: Progress | None = None,
) -> RoundTrip:
    """Take `source` into a .qwfx file, out through another format and back, and compare.

    Parameters
    ----------
    source : a file of any known format.
    workdir : an existing folder for the files made on the way.
    through : name of the format to go through; by default that of the source.
    n_points, seed, regions : choice of the points, see `qwfx.points.probe_points`.
    points : (N, 3) bohr, instead of chosen points.
    tolerance : allowed difference relative to the scale of each orbital; for integrals in hartree.

    Raises QwfxError where the source cannot be read or the target cannot hold it.
    """
    name, reading = read_any(source, source_format, options, progress)
    first_path = workdir / "there.qwfx"
    save(reading.wavefunction, first_path, overwrite=True)
    first = load(first_path)
    via = through or _default_through(name, first)
    suffix = ".qwfx" if via == QWFX else (by_name(via).suffixes or (f".{via}",))[0]
    foreign = workdir / f"through{suffix}"
    _, writing = write_any(Reading(first), foreign, target_of(foreign, via), overwrite=True, progress=progress)
    _, returned = read_any(foreign, via, progress=progress)
    second_path = workdir / "back.qwfx"
    save(returned.wavefunction, second_path, overwrite=True)
    second = load(second_path)
    if not first.orbitals and first.hamiltonian is None:
        raise EvaluationError(
            "there are neither orbitals nor a Hamiltonian to compare",
            where=str(source),
            expected="at least one of them",
            remedy="use `qwfx diff` for other members",
        )
    if points is None:
        points = probe_points(first.system.positions, n_points, np.random.default_rng(seed), regions)
        where = f"seed {seed}: {', '.join(regions)}"
    else:
        where = "given by the user"
    carries_orbitals = bool(second.orbitals) or not second.hamiltonian
    sets = compare_orbitals(first, second, points, tolerance) if carries_orbitals else ()
    integrals, missing = compare_integrals(first.hamiltonian, second.hamiltonian)
    missing += [f"the orbital set {s}" for s in first.orbitals if not carries_orbitals]
    if not sets and not integrals:
        raise UnsupportedError(
            f"nothing that {via} carries can be compared with the source",
            where=str(source),
            expected="orbitals or a Hamiltonian on both sides",
            remedy="choose another format with --through",
        )
    notes = tuple(f"reading: {n}" for n in reading.notes) + tuple(f"writing: {n}" for n in writing.notes)
    return RoundTrip(
        str(source), name, via, len(points), where, tolerance, sets, integrals, compare_witness(first),
        tuple(missing), notes + tuple(f"reading back: {n}" for n in returned.notes),
    )  # fmt: skip
