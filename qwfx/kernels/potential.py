"""The potential energy of many walkers: Coulomb sums, and the points at which projectors of core potentials look."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.errors import EvaluationError
from qwfx.kernels.radial import SUM
from qwfx.model import Wavefunction
from qwfx.reference.sphere import RULES, sphere_rule

__all__ = ["NonlocalPoints", "Potential"]

NEGLIGIBLE = 1e-9
"""hartree; electrons for which all projectors of a centre are weaker are left out."""


@dataclass(frozen=True, eq=False)
class NonlocalPoints:
    """Where Psi is needed: (V Psi)/Psi of a walker is the sum, over its rows, of weights times ratios of Psi."""

    walker: NDArray[np.int64]
    """(Q)."""
    electron: NDArray[np.int64]
    """(Q) the electron that is moved."""
    places: NDArray[np.float64]
    """(Q, K, 3) where to, bohr."""
    weights: NDArray[np.float64]
    """(Q, K) hartree."""


@njit(**SUM)  # type: ignore[untyped-decorator]
def _coulomb(x: Any, nuclei: Any, charges: Any) -> float:
    """Repulsion of electrons and attraction by nuclei of one walker (3, N)."""
    n = x.shape[1]
    total = 0.0
    for i in range(n):
        part = 0.0
        for j in range(i):
            dx, dy, dz = x[0, i] - x[0, j], x[1, i] - x[1, j], x[2, i] - x[2, j]
            part += 1.0 / np.sqrt(dx * dx + dy * dy + dz * dz)
        for a in range(len(charges)):
            dx, dy, dz = x[0, i] - nuclei[0, a], x[1, i] - nuclei[1, a], x[2, i] - nuclei[2, a]
            part -= charges[a] / np.sqrt(dx * dx + dy * dy + dz * dz)
        total += part
    return total


@njit(**SUM)  # type: ignore[untyped-decorator]
def _local(x: Any, nuclei: Any, start: Any, power: Any, exponent: Any, coefficient: Any) -> float:
    """Local parts of the core potentials at `nuclei` (3, B); terms start[b] to start[b+1] belong to b."""
    total = 0.0
    for b in range(nuclei.shape[1]):
        for i in range(x.shape[1]):
            dx, dy, dz = x[0, i] - nuclei[0, b], x[1, i] - nuclei[1, b], x[2, i] - nuclei[2, b]
            r2 = dx * dx + dy * dy + dz * dz
            r = np.sqrt(r2)
            for t in range(start[b], start[b + 1]):
                decay = exponent[t] * r2
                if decay < 700.0:
                    total += coefficient[t] * r ** power[t] * np.exp(-decay)
    return total


@njit(**SUM)  # type: ignore[untyped-decorator]
def _add_local(electrons: Any, nuclei: Any, charges: Any, cores: Any, start: Any, power: Any, exponent: Any,
               coefficient: Any, out: Any) -> None:  # fmt: skip
    """Coulomb energies and local parts of core potentials of each walker (W, N, 3)."""
    for w in range(len(electrons)):
        x = electrons[w].T.copy()
        out[w] += _coulomb(x, nuclei, charges) + _local(x, cores, start, power, exponent, coefficient)


class Potential:
    """The potential energy of a file's Hamiltonian (FORMAT.md, F28 and F29).

    Parameters
    ----------
    rule : points of the quadrature: 6, 12, 18, 26 or 50; exact for products of the projector's l and Psi's components
        l' on the sphere up to l + l' = 3, 5, 5, 7 and 11.

    Raises EvaluationError for another number of points.
    """

    def __init__(self, wavefunction: Wavefunction, *, rule: int = 12) -> None:
        if rule not in RULES:
            raise EvaluationError(
                f"a rule of {rule} points", where="rule", expected=f"one of {', '.join(map(str, RULES))}"
            )
        self.rule = sphere_rule(rule)
        system, p = wavefunction.system, wavefunction.potentials
        positions = np.asarray(system.positions, dtype=np.float64).reshape(-1, 3)
        charges = np.asarray(system.effective_charges, dtype=np.float64)
        charged = charges > 0
        self._nuclei, self._charges = np.ascontiguousarray(positions[charged].T), charges[charged]
        apart = np.linalg.norm(positions[charged][:, None] - positions[charged], axis=-1)
        a, b = np.triu_indices(len(self._charges), 1)
        with np.errstate(divide="ignore"):
            self.repulsion = float((self._charges[a] * self._charges[b] / apart[a, b]).sum())
        """Of the nuclei, hartree."""
        terms = np.zeros((0, 5)) if p is None else np.stack(
            [p.center, p.channel, p.power, p.exponent, p.coefficient], axis=1
        ).astype(np.float64)  # fmt: skip
        terms = terms[np.lexsort((terms[:, 1], terms[:, 0]))] if len(terms) else terms
        local = terms[terms[:, 1] < 0]
        centers = np.unique(local[:, 0]).astype(np.int64)
        start = np.append(np.searchsorted(local[:, 0], centers), len(local)).astype(np.int64)
        self._local = (np.ascontiguousarray(positions[centers].T), start, *np.ascontiguousarray(local[:, 2:].T))
        self._projectors = [
            (positions[int(center)], terms[(terms[:, 0] == center) & (terms[:, 1] >= 0)])
            for center in np.unique(terms[terms[:, 1] >= 0, 0])
        ]
        self._reach = [_reach(own) for _, own in self._projectors]

    @property
    def has_projectors(self) -> bool:
        """Whether any core potential acts differently on different angular momenta."""
        return bool(self._projectors)

    def local(self, electrons: NDArray[np.float64]) -> NDArray[np.float64]:
        """(W) everything but the projectors, hartree, at electrons (W, N, 3); repulsion of the nuclei included."""
        total = np.full(len(electrons), self.repulsion)
        _add_local(np.ascontiguousarray(electrons), self._nuclei, self._charges, *self._local, total)
        return total

    def nonlocal_points(
        self, electrons: NDArray[np.float64], rotations: NDArray[np.float64] | None = None
    ) -> NonlocalPoints:
        """Where the projectors look, for walkers (W, N, 3); `rotations` (W, 3, 3) turn the quadrature of each."""
        n_points = len(self.rule.weights)
        parts: list[tuple[NDArray[Any], ...]] = []
        for (center, own), reach in zip(self._projectors, self._reach, strict=True):
            offsets = electrons - center
            distances = np.linalg.norm(offsets, axis=-1)
            walker, electron = np.nonzero(distances < reach)
            r = distances[walker, electron]
            points = np.broadcast_to(self.rule.points, (len(walker), n_points, 3))
            if rotations is not None:
                points = self.rule.points @ rotations[walker].swapaxes(1, 2)
            with np.errstate(all="ignore"):
                cosine = np.einsum("qkx,qx->qk", points, offsets[walker, electron] / r[:, None])
            weights = np.zeros((len(walker), n_points))
            for l in np.unique(own[:, 1]).astype(int):
                channel = own[own[:, 1] == l]
                radial = (channel[:, 4] * r[:, None] ** channel[:, 2] * np.exp(-channel[:, 3] * r[:, None] ** 2)).sum(1)
                weights += radial[:, None] * (2 * l + 1) * _legendre(l, cosine) * self.rule.weights
            parts.append((walker, electron, center + r[:, None, None] * points, weights))
        if not parts:
            none = np.zeros(0, dtype=np.int64)
            return NonlocalPoints(none, none, np.zeros((0, n_points, 3)), np.zeros((0, n_points)))
        return NonlocalPoints(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _legendre(l: int, x: NDArray[np.float64]) -> NDArray[np.float64]:
    """P_l(x) by its recursion."""
    before, now = np.ones_like(x), x
    if l == 0:
        return before
    for k in range(1, l):
        before, now = now, ((2 * k + 1) * x * now - k * before) / (k + 1)
    return now


def _reach(own: NDArray[np.float64]) -> float:
    """Distance beyond which the projectors of a centre are all below `NEGLIGIBLE`."""
    r = np.linspace(0.02, 40.0, 2000)
    size = (np.abs(own[:, 4]) * r[:, None] ** own[:, 2] * np.exp(-own[:, 3] * r[:, None] ** 2)).sum(axis=1)
    strong = np.flatnonzero(size * (2 * own[:, 1].max() + 1) >= NEGLIGIBLE)
    return float(r[min(strong[-1] + 1, len(r) - 1)]) if len(strong) else 0.0
