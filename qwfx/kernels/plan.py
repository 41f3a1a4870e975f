"""A basis laid out for the kernels: shells sorted by atom, exponents that several shells share kept once."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.kernels.numeric import LARGEST_L
from qwfx.model import Basis

__all__ = ["BLOCK", "Plan", "Workspace", "make_plan"]

BLOCK = 256
"""Points a block: the rows of one atom stay in the second-level cache."""


@dataclass(frozen=True)
class Plan:
    """What `qwfx.kernels.numeric.fill_block` needs to know of a basis."""

    q: int
    centers: NDArray[np.float64]
    atom_shells: NDArray[np.int64]
    """(atoms + 1) offsets into the sorted shells."""
    atom_exponents: NDArray[np.int64]
    """(atoms + 1) offsets into `unique_exponents`."""
    unique_exponents: NDArray[np.float64]
    shell_l: NDArray[np.int64]
    shell_monomial: NDArray[np.bool_]
    shell_first: NDArray[np.int64]
    """(S + 1) offsets into the primitives, in the sorted order."""
    shell_simple: NDArray[np.bool_]
    """Gaussian without powers."""
    shell_function: NDArray[np.int64]
    """First function of each sorted shell, in the order of the basis."""
    shell_size: NDArray[np.int64]
    scale: NDArray[np.float64]
    decay: NDArray[np.float64]
    power: NDArray[np.int64]
    exponent_of: NDArray[np.int64]
    """(P) index of a primitive's exponent among those of its atom."""
    norms: NDArray[np.float64]
    """N_lm of the solid harmonics at l (l+1)/2 + m."""
    n_functions: int

    @property
    def singular_centers(self) -> NDArray[np.float64]:
        """Centres at which a function may have no derivative: those with Slater functions or powers."""
        atoms = [
            a
            for a in range(len(self.centers))
            if not self.shell_simple[self.atom_shells[a] : self.atom_shells[a + 1]].all()
        ]
        return self.centers[atoms]

    def cutoffs(self, threshold: float) -> NDArray[np.float64]:
        """Distance of each sorted shell beyond which its values and derivatives are below `threshold`."""
        if threshold <= 0.0:
            return np.full(len(self.shell_l), math.inf)
        return np.array([self._cutoff(s, threshold) for s in range(len(self.shell_l))])

    def _bound(self, s: int, r: float) -> float:
        """An upper bound on value, gradient components and Laplacian of every function of a shell at distance r.

        For solid harmonics sum_m S_lm^2 = (2l+1)/(4 pi) r^2l and sum_m |grad S_lm|^2 = l (2l+1)^2/(4 pi) r^(2l-2)
        (addition theorem and its derivative); a monomial is at most r^l, its gradient l r^(l-1), its Laplacian
        l (l-1) r^(l-2).
        """
        own = slice(int(self.shell_first[s]), int(self.shell_first[s + 1]))
        a, n, l, q = self.decay[own], self.power[own], int(self.shell_l[s]), self.q
        size = np.abs(self.scale[own]) * np.exp(-a * r**q) * r ** (n + l)
        t = q * a * r**q
        solid = not self.shell_monomial[s]
        angle = math.sqrt((2 * l + 1) / (4 * math.pi)) if solid else 1.0
        slope = (2 * l + 1) * math.sqrt(l / (4 * math.pi)) if solid else float(l)
        bend = 0.0 if solid else float(l * (l - 1))
        value = float(np.sum(size)) * angle
        gradient = float(np.sum(size * (np.abs(n) + t))) / r * angle + float(np.sum(size)) / r * slope
        terms = np.abs(n * (n + 2 * l + 1)) + np.abs(2 * n + 2 * l + 1 + q) * t + t**2
        laplacian = float(np.sum(size * terms)) / r**2 * angle + float(np.sum(size)) / r**2 * bend
        return max(value, gradient, laplacian)

    def _cutoff(self, s: int, threshold: float) -> float:
        own = slice(int(self.shell_first[s]), int(self.shell_first[s + 1]))
        if own.start == own.stop:
            return 0.0
        # Every term of the bound is r^p exp(-a r^q) with p <= n + l + 2q, and falls once q a r^q >= p.
        p = np.maximum(self.power[own] + int(self.shell_l[s]) + 2 * self.q, 1)
        low = float(np.max((p / (self.q * self.decay[own])) ** (1.0 / self.q)))
        if self._bound(s, low) < threshold:
            return low
        high = 2.0 * low
        while self._bound(s, high) >= threshold:
            high *= 2.0
        for _ in range(40):
            middle = 0.5 * (low + high)
            low, high = (middle, high) if self._bound(s, middle) >= threshold else (low, middle)
        return high


class Workspace:
    """Scratch rows of one thread."""

    def __init__(self, plan: Plan, block: int) -> None:
        most = int(np.max(np.diff(plan.atom_exponents), initial=1))
        self.xyz = np.empty((5, block))
        self.e = np.empty((most, block))
        self.w = np.empty((6, block))
        rows = (LARGEST_L + 1) * (LARGEST_L + 2) // 2
        self.polar = np.empty((rows, block))
        self.plane = np.empty((2 * (LARGEST_L + 1), block))
        top = int(np.max(plan.shell_l[~plan.shell_monomial], initial=0))
        self.solid = np.empty(((top + 1) ** 2, 4, block))
        self.cartesian = np.empty((3, LARGEST_L + 1, block))
        most_monomials = (LARGEST_L + 1) * (LARGEST_L + 2) // 2 if plan.shell_monomial.any() else 1
        self.monomial = np.empty((most_monomials, 5, block))


def _norms() -> NDArray[np.float64]:
    """``N_lm = sqrt((2l+1)/(4 pi) (2 - delta_m0) (l-m)!/(l+m)!)`` (Schlegel and Frisch 1995)."""
    norms = []
    for l in range(LARGEST_L + 1):
        for m in range(l + 1):
            ratio = math.factorial(l - m) / math.factorial(l + m) * (1 if m == 0 else 2)
            norms.append(math.sqrt((2 * l + 1) / (4 * math.pi) * ratio))
    return np.array(norms)


def make_plan(basis: Basis, positions: NDArray[np.float64]) -> Plan:
    """Lay out a basis. Raises EvaluationError for shells on no atom, UnsupportedError for l above 6."""
    centers = np.asarray(positions, dtype=np.float64)
    angular = np.asarray(basis.shell_l, dtype=np.int64)
    atoms = np.asarray(basis.shell_center, dtype=np.int64)
    outside = atoms[(atoms < 0) | (atoms >= len(centers))]
    if len(outside):
        raise EvaluationError(
            f"a shell sits on atom {int(outside[0])}, but there are {len(centers)} positions",
            where="basis.shell_center",
            expected="indices of atoms from 0",
            remedy="validate the file; `qwfx validate` names the shell",
        )
    if len(angular) and (angular.max() > LARGEST_L or angular.min() < 0):
        raise UnsupportedError(
            f"a shell has l = {int(angular.max()) if angular.max() > LARGEST_L else int(angular.min())}",
            where="basis.shell_l",
            expected=f"0 to {LARGEST_L}",
            remedy="qwfx.reference evaluates any l, slowly",
        )
    order = np.argsort(atoms, kind="stable")
    start = np.asarray(basis.primitive_start, dtype=np.int64)
    pieces = [np.arange(start[s], start[s + 1]) for s in order]
    primitives = np.concatenate(pieces) if pieces else np.zeros(0, dtype=np.int64)
    decay = np.ascontiguousarray(np.asarray(basis.exponents, dtype=np.float64)[primitives])
    power = np.zeros(len(decay), np.int64) if basis.powers is None else np.asarray(basis.powers, np.int64)[primitives]
    first = np.concatenate([[0], np.cumsum([len(p) for p in pieces])]).astype(np.int64)
    atom_shells = np.searchsorted(atoms[order], np.arange(len(centers) + 1)).astype(np.int64)
    unique, offsets = [np.zeros(0)], [0]
    exponent_of = np.zeros(len(decay), dtype=np.int64)
    for a in range(len(centers)):
        own = slice(int(first[atom_shells[a]]), int(first[atom_shells[a + 1]]))
        values, index = np.unique(decay[own], return_inverse=True)
        exponent_of[own] = index
        unique.append(values)
        offsets.append(offsets[-1] + len(values))
    simple = [
        basis.radial == "gaussian" and not power[first[k] : first[k + 1]].any() for k in range(len(order))
    ]
    return Plan(
        q=2 if basis.radial == "gaussian" else 1,
        centers=centers,
        atom_shells=atom_shells,
        atom_exponents=np.array(offsets, dtype=np.int64),
        unique_exponents=np.concatenate(unique),
        shell_l=angular[order],
        shell_monomial=np.asarray(basis.shell_monomial, dtype=bool)[order],
        shell_first=first,
        shell_simple=np.array(simple, dtype=bool),
        shell_function=basis.function_start[:-1][order],
        shell_size=basis.shell_size[order],
        scale=np.ascontiguousarray(np.asarray(basis.coefficients, dtype=np.float64)[primitives]),
        decay=decay,
        power=np.ascontiguousarray(power),
        exponent_of=exponent_of,
        norms=_norms(),
        n_functions=basis.n_functions,
    )
