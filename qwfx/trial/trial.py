"""Psi for batches of walkers."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from qwfx.errors import EvaluationError, FormatError, UnsupportedError
from qwfx.kernels.contract import contract
from qwfx.kernels.expansion import Determinants
from qwfx.kernels.jastrow import Jastrow
from qwfx.kernels.potential import Potential
from qwfx.kernels.tables import Table
from qwfx.model import Expansion, OrbitalSet, Wavefunction
from qwfx.reference.sphere import random_rotations
from qwfx.trial.orbitals import SpinOrbitals
from qwfx.trial.values import TrialValues, events_of, warn
from qwfx.trial.walkers import Walkers

__all__ = ["Trial"]

BATCH_BYTES = 1 << 26
"""Walkers are taken in batches whose orbital values take about this much."""


class Trial:
    """The trial function of a file, ``Psi_s = D_s exp(J)`` for each state s (FORMAT.md, F12 to F29).

    Parameters
    ----------
    wavefunction : with basis, orbitals and expansion; a Jastrow factor and core potentials if it has them.
    rule : points of the spherical quadrature of the core potentials: 6, 12, 18, 26 or 50.
    jastrow : False leaves the Jastrow factor out: Psi is then D alone, for projectors too.
    threads : number of threads; None takes all processors.

    Raises
    ------
    FormatError : the parts do not fit together: in the words that `qwfx validate` uses for the same fault.
    UnsupportedError : a periodic cell, or no basis, orbitals or expansion.
    """

    def __init__(
        self, wavefunction: Wavefunction, *, rule: int = 12, jastrow: bool = True, threads: int | None = None
    ) -> None:
        if not jastrow:
            wavefunction = replace(wavefunction, jastrow={})
        expansion = _expansion(wavefunction)
        assert wavefunction.basis is not None
        self.wavefunction = wavefunction
        self.threads = threads
        self.n_up, self.n_down = wavefunction.system.n_up, wavefunction.system.n_down
        up, down = (_orbital_set(wavefunction, spin, expansion) for spin in ("up", "down"))
        self.determinants = Determinants(expansion, self.n_up, self.n_down, up.n_orbitals, down.n_orbitals)
        self.jastrow = Jastrow(wavefunction)
        self.potential = Potential(wavefunction, rule=rule)
        self._orbitals = tuple(
            SpinOrbitals(wavefunction.basis, wavefunction.system, np.asarray(s.coefficients)[used], threads)
            for s, used in ((up, self.determinants.used_up), (down, self.determinants.used_down))
        )
        self._slices = slice(0, self.n_up), slice(self.n_up, self.n_electrons)

    @property
    def n_electrons(self) -> int:
        """Number of electrons N, the up electrons first."""
        return self.n_up + self.n_down

    @property
    def n_states(self) -> int:
        """Number of states S of the expansion."""
        return int(self.determinants.n_states)

    def log(self, electrons: ArrayLike) -> tuple[NDArray[np.float64], NDArray[Any]]:
        """``log|Psi|`` and its sign (or phase), each (S, W), at electrons (W, N, 3) in bohr."""
        places = self.checked(electrons)
        parts = [self._log(places[a:b]) for a, b in pairwise(self._batches(len(places), 1))]
        log_abs, sign = (np.concatenate(part, axis=1) for part in zip(*parts, strict=True))
        events = events_of({"Psi vanishes or is no number": np.where(sign != 0, log_abs, np.inf)})
        warn(events)
        return log_abs, sign

    def evaluate(
        self, electrons: ArrayLike, *, rotations: NDArray[np.float64] | np.random.Generator | None = None
    ) -> TrialValues:
        """Psi, its derivatives, potential and local energy.

        Parameters
        ----------
        electrons : (W, N, 3) bohr, the up electrons first.
        rotations : of the quadrature spheres of the core potentials: (W, 3, 3), or a generator that draws them at
            random; None leaves them as tabulated, so that the result is the same every time.

        Returns
        -------
        TrialValues
            Walkers where Psi vanishes or something is not finite are listed in its ``events``, and in a TrialWarning.

        Raises
        ------
        EvaluationError : electrons or rotations of another shape.
        """
        places = self.checked(electrons)
        turned = self._rotations(rotations, len(places))
        parts = [
            self._evaluate(places[a:b], None if turned is None else turned[a:b])
            for a, b in pairwise(self._batches(len(places), 5))
        ]
        values = [np.concatenate(part, axis=1) for part in zip(*parts, strict=True)]
        log_abs, sign, gradients, laplacians, potential = values
        events = events_of({
            "Psi vanishes or is no number": np.where(sign != 0, log_abs, np.inf),
            "a derivative of Psi is no finite number": gradients.sum(axis=(2, 3)) + laplacians.sum(axis=2),
            "the potential energy is no finite number": potential,
        })  # fmt: skip
        warn(events)
        return TrialValues(log_abs, sign, gradients, laplacians, potential, events)

    def walkers(self, electrons: ArrayLike) -> Walkers:
        """Walkers at electrons (W, N, 3), to move one electron at a time."""
        return Walkers(self, self.checked(electrons))

    def checked(self, electrons: ArrayLike) -> NDArray[np.float64]:
        """(W, N, 3) of doubles. Raises EvaluationError for another shape."""
        places = np.ascontiguousarray(electrons, dtype=np.float64)
        if places.ndim != 3 or places.shape[1:] != (self.n_electrons, 3):
            raise EvaluationError(
                f"an array of shape {places.shape}",
                where="electrons",
                expected=f"(walkers, {self.n_electrons}, 3), the {self.n_up} up electrons first, in bohr",
            )
        return places

    def orbitals(self, places: NDArray[np.float64], spin: int, derivatives: int) -> NDArray[Any]:
        """(k, M, ...) orbitals that strings of a spin (0 up, 1 down) use, at places (..., 3)."""
        return self._orbitals[spin].at(places, derivatives)

    def tables(self, places: NDArray[np.float64]) -> tuple[Table, Table]:
        """The factorised determinants of each spin, of walkers (W, N, 3)."""
        up, down = self._phi(places, 0)
        return self.determinants.tables(up[0].transpose(1, 2, 0), down[0].transpose(1, 2, 0))

    def spin_of(self, electron: int) -> tuple[int, int]:
        """Spin (0 up, 1 down) of an electron, and its number among those of that spin."""
        return (0, electron) if electron < self.n_up else (1, electron - self.n_up)

    def _batches(self, n_walkers: int, rows: int) -> NDArray[np.int64]:
        most = max(len(o.coefficients) for o in self._orbitals)
        per_walker = 8 * rows * self.n_electrons * most * (self.n_states + 1)
        step = max(BATCH_BYTES // max(per_walker, 1), 1)
        return np.append(np.arange(0, max(n_walkers, 1), step), n_walkers)

    def _phi(self, places: NDArray[np.float64], derivatives: int) -> tuple[NDArray[Any], NDArray[Any]]:
        up, down = (self.orbitals(places[:, part], spin, derivatives) for spin, part in enumerate(self._slices))
        return up, down

    def _log(self, places: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[Any]]:
        up, down = self._phi(places, 0)
        phi = up[0].transpose(1, 2, 0), down[0].transpose(1, 2, 0)
        found = self.determinants.evaluate(*phi, gammas=False, threads=self.threads)
        if self.jastrow.empty:
            return found.log_abs, found.sign
        return found.log_abs + self.jastrow.evaluate(places)[0], found.sign

    def _evaluate(
        self, places: NDArray[np.float64], rotations: NDArray[np.float64] | None
    ) -> tuple[NDArray[np.float64], NDArray[Any], NDArray[Any], NDArray[Any], NDArray[Any]]:
        up, down = self._phi(places, 2)
        found = self.determinants.evaluate(up[0].transpose(1, 2, 0), down[0].transpose(1, 2, 0), threads=self.threads)
        ratios = np.concatenate([contract(up[1:], found.gamma_up), contract(down[1:], found.gamma_down)], axis=3)
        gradients, laplacians = np.moveaxis(ratios[:, :3], 1, 3), ratios[:, 3]
        log_abs = found.log_abs
        if not self.jastrow.empty:
            value, slope, curvature = self.jastrow.evaluate(places)
            log_abs = log_abs + value
            laplacians = laplacians + 2 * (gradients * slope).sum(axis=3) + curvature + (slope**2).sum(axis=2)
            gradients = gradients + slope
        potential = np.repeat(self.potential.local(places)[None], self.n_states, axis=0)
        projected = self._projected(places, rotations, found.gamma_up, found.gamma_down)
        return log_abs, found.sign, gradients, laplacians, potential if projected is None else potential + projected

    def _projected(
        self, places: NDArray[np.float64], rotations: NDArray[np.float64] | None, *gammas: NDArray[Any]
    ) -> NDArray[Any] | None:
        """(S, W) what the projectors of the core potentials give, by the ratios of Psi on spheres; None without any."""
        if not self.potential.has_projectors:
            return None
        points = self.potential.nonlocal_points(places, rotations)
        total = np.zeros((self.n_states, len(places)), np.result_type(*gammas))
        for spin, part in enumerate(self._slices):
            mine = np.flatnonzero((points.electron >= part.start) & (points.electron < part.stop))
            walker, electron = points.walker[mine], points.electron[mine]
            phi = self.orbitals(points.places[mine], spin, 0)[0]  # (M, q, K)
            change = self._jastrow_changes(places, walker, electron, points.places[mine])
            weights = points.weights[mine] * np.exp(change)
            rows = gammas[spin][:, walker, :, electron - part.start]  # (q, S, M): two lists of indices come first
            np.add.at(total.T, walker, np.einsum("qk,mqk,qsm->qs", weights, phi, rows, optimize=True))
        return total

    def _jastrow_changes(
        self, places: NDArray[np.float64], walker: NDArray[np.int64], electron: NDArray[np.int64],
        there: NDArray[np.float64],
    ) -> NDArray[np.float64]:  # fmt: skip
        """(q, K) change of J when one electron of a walker goes to each of K places."""
        changes = np.zeros(there.shape[:2])
        if self.jastrow.empty:
            return changes
        for i in np.unique(electron):
            q = np.flatnonzero(electron == i)
            changes[q] = self.jastrow.change(places[walker[q]], int(i), there[q])
        return changes

    def _rotations(
        self, rotations: NDArray[np.float64] | np.random.Generator | None, n_walkers: int
    ) -> NDArray[np.float64] | None:
        if rotations is None or not self.potential.has_projectors:
            return None
        if isinstance(rotations, np.random.Generator):
            return random_rotations(rotations, n_walkers)
        turned = np.asarray(rotations, dtype=np.float64)
        if turned.shape != (n_walkers, 3, 3):
            raise EvaluationError(
                f"an array of shape {turned.shape}", where="rotations", expected=f"({n_walkers}, 3, 3), or a generator"
            )
        return turned


def _expansion(wavefunction: Wavefunction) -> Expansion:
    if wavefunction.system.cell is not None:
        raise UnsupportedError(
            "the system is periodic",
            where="/system/cell",
            expected="a molecule",
            remedy="periodic trial functions can be stored and checked, not evaluated",
        )
    parts = {"/basis": wavefunction.basis, "/orbitals": wavefunction.orbitals, "/expansion": wavefunction.expansion}
    for member, part in parts.items():
        if not part:
            raise UnsupportedError(
                "is missing",
                where=member,
                expected="basis, orbitals and an expansion: the trial function",
                remedy="convert from a source that has them",
            )
    assert wavefunction.expansion is not None
    return wavefunction.expansion


def _orbital_set(wavefunction: Wavefunction, spin: str, expansion: Expansion) -> OrbitalSet:
    name = expansion.up_set if spin == "up" else expansion.down_set
    if name not in wavefunction.orbitals:
        raise FormatError(
            repr(name),
            where=f"/expansion@{spin}_set",
            expected=f"one of the sets in /orbitals: {', '.join(sorted(wavefunction.orbitals))}",
            remedy="name a set that is in the file",
        )
    return wavefunction.orbitals[name]
