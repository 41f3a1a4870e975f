"""The Jastrow factor of a file: J, its gradients and Laplacians, and its change when one electron moves."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.errors import FormatError, UnsupportedError
from qwfx.kernels.jastrow_moves import change
from qwfx.kernels.radial import LEAN, SUM, derivatives, length_of, pack_radial
from qwfx.kernels.three_body import NO_CUTOFF, add_three_body, pack_three_body
from qwfx.model import JastrowTerm, Wavefunction
from qwfx.reference.jastrow import radial_function
from qwfx.reference.jastrow_faults import PAIRS, atom_faults, channel_faults, parameter_faults

__all__ = ["Jastrow"]

FORMS = ("pade", "cutoff-polynomial", "scaled-polynomial", "bspline")


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _distances(x: Any, y: Any, z: Any, at: Any, r: Any) -> None:
    """r[k] = |at - (x, y, z)[k]|."""
    ax, ay, az = at[0], at[1], at[2]
    for k in range(len(x)):
        dx, dy, dz = ax - x[k], ay - y[k], az - z[k]
        r[k] = np.sqrt(dx * dx + dy * dy + dz * dz)


@njit(**LEAN)  # type: ignore[untyped-decorator]
def _add_pairs(
    kinds: Any, starts: Any, parameters: Any, own: Any, i: int, first: int, last: int, x: Any, gradient: Any,
    laplacian: Any, scratch: Any,
) -> float:  # fmt: skip
    """Electron i with the electrons `first` to `last` - 1, by the functions `own`; x and gradient are (3, N)."""
    n = last - first
    if n <= 0 or len(own) == 0:
        return 0.0
    r, u, du, d2u = scratch[0], scratch[1], scratch[2], scratch[3]
    _distances(x[0, first:last], x[1, first:last], x[2, first:last], x[:, i], r)
    for k in range(n):
        u[k] = du[k] = d2u[k] = 0.0
    for f in own:
        derivatives(kinds[f], parameters[starts[f] : starts[f + 1]], r, n, u, du, d2u)
    total = curve = gx = gy = gz = 0.0
    for k in range(n):
        j = first + k
        slope = du[k] / r[k]
        bend = d2u[k] + 2.0 * slope
        dx, dy, dz = slope * (x[0, i] - x[0, j]), slope * (x[1, i] - x[1, j]), slope * (x[2, i] - x[2, j])
        total += u[k]
        curve += bend
        gx += dx
        gy += dy
        gz += dz
        gradient[0, j] -= dx
        gradient[1, j] -= dy
        gradient[2, j] -= dz
        laplacian[j] += bend
    gradient[0, i] += gx
    gradient[1, i] += gy
    gradient[2, i] += gz
    laplacian[i] += curve
    return total


@njit(**SUM)  # type: ignore[untyped-decorator]
def _all_pairs(
    kinds: Any, starts: Any, parameters: Any, up_up: Any, up_down: Any, down_down: Any, n_up: int, x: Any,
    gradient: Any, laplacian: Any,
) -> float:  # fmt: skip
    """The electron-electron terms of one walker."""
    n = x.shape[1]
    scratch = np.empty((4, n))
    total = 0.0
    for i in range(n):
        to_up = up_up if i < n_up else up_down
        total += _add_pairs(
            kinds, starts, parameters, to_up, i, 0, min(i, n_up), x, gradient, laplacian, scratch
        )  # fmt: skip
        total += _add_pairs(kinds, starts, parameters, down_down, i, n_up, i, x, gradient, laplacian, scratch)
    return total


@njit(**SUM)  # type: ignore[untyped-decorator]
def _nuclei(kind: int, p: Any, nuclei: Any, first: int, last: int, x: Any, gradient: Any, laplacian: Any) -> float:
    """One row of an electron-nucleus term: electrons `first` to `last` - 1 with all its nuclei (3, A)."""
    n = nuclei.shape[1]
    r, u, du, d2u = np.empty(n), np.empty(n), np.empty(n), np.empty(n)
    total = 0.0
    for i in range(first, last):
        _distances(nuclei[0], nuclei[1], nuclei[2], x[:, i], r)
        u[:], du[:], d2u[:] = 0.0, 0.0, 0.0
        derivatives(kind, p, r, n, u, du, d2u)
        curve = gx = gy = gz = 0.0
        for k in range(n):
            slope = du[k] / r[k]
            total += u[k]
            curve += d2u[k] + 2.0 * slope
            gx += slope * (x[0, i] - nuclei[0, k])
            gy += slope * (x[1, i] - nuclei[1, k])
            gz += slope * (x[2, i] - nuclei[2, k])
        gradient[0, i] += gx
        gradient[1, i] += gy
        gradient[2, i] += gz
        laplacian[i] += curve
    return total


@njit(**SUM)  # type: ignore[untyped-decorator]
def _walkers_pairs(kinds: Any, starts: Any, parameters: Any, own: Any, n_up: int, electrons: Any, value: Any,
                   gradient: Any, laplacian: Any) -> None:  # fmt: skip
    """`_all_pairs` of each walker (W, N, 3)."""
    for w in range(len(electrons)):
        x = electrons[w].T.copy()
        slope = np.zeros(x.shape)
        value[w] += _all_pairs(kinds, starts, parameters, own[0], own[1], own[2], n_up, x, slope, laplacian[w])
        gradient[w] += slope.T


@njit(**SUM)  # type: ignore[untyped-decorator]
def _walkers_nuclei(kind: int, p: Any, nuclei: Any, first: int, last: int, electrons: Any, value: Any, gradient: Any,
                    laplacian: Any) -> None:  # fmt: skip
    """`_nuclei` of each walker."""
    for w in range(len(electrons)):
        x = electrons[w].T.copy()
        slope = np.zeros(x.shape)
        value[w] += _nuclei(kind, p, nuclei, first, last, x, slope, laplacian[w])
        gradient[w] += slope.T


class Jastrow:
    """All terms of ``/jastrow`` (FORMAT.md, F18 to F27).

    Raises FormatError for terms that `qwfx validate` finds in error, in the same words; UnsupportedError in a periodic
    system, where J is not defined, and for a form that is not known.
    """

    def __init__(self, wavefunction: Wavefunction) -> None:
        system = wavefunction.system
        self.n_up, self.n_down = system.n_up, system.n_down
        self.empty = not wavefunction.jastrow
        """Whether J is 0."""
        self.terms = dict(wavefunction.jastrow)
        if not self.empty and system.cell is not None:
            raise UnsupportedError(
                "the system is periodic", where="/jastrow", expected="a molecule", remedy="leave the Jastrow terms out"
            )
        positions = np.asarray(system.positions, dtype=np.float64).reshape(-1, 3)
        kinds: list[int] = []
        parameters: list[NDArray[np.float64]] = []
        self._pairs: dict[str, list[int]] = {word: [] for word in PAIRS}
        self._nuclei: list[tuple[int, int, NDArray[np.float64]]] = []  # spin, function, nuclei (3, A)
        self._three: list[tuple[str, NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]] = []
        for name, term in self.terms.items():
            _check(f"/jastrow/{name}", term, len(positions))
            nuclei = positions[np.asarray(term.members.get("atoms", np.zeros(0))).astype(np.int64)]
            for row, channel in enumerate(str(word) for word in term.members["channel"]):
                if term.attributes["body"] == "three-body":
                    p, gamma = pack_three_body(term.form, term.attributes, term.members, row)
                    self._three.append((channel, p, gamma, nuclei))
                    continue
                kind, p = pack_radial(term.form, term.attributes, term.members, row)
                if term.attributes["body"] == "electron-electron":
                    self._pairs[channel].append(len(kinds))
                else:
                    spin = 0 if channel == "up" else 1
                    self._nuclei.append((spin, len(kinds), np.ascontiguousarray(nuclei.T)))
                kinds.append(kind)
                parameters.append(p)
        lengths = [0, *np.cumsum([len(p) for p in parameters]).tolist()]
        self._functions = (
            np.array(kinds, dtype=np.int64),
            np.array(lengths, dtype=np.int64),
            np.concatenate([np.zeros(0), *parameters]),
        )
        self._own = tuple(np.array(self._pairs[word], dtype=np.int64) for word in PAIRS)
        self._plans = self._plan(0), self._plan(1)

    def evaluate(
        self, electrons: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """J (W), its gradients (W, N, 3) and its Laplacians (W, N), not those of exp(J), at electrons (W, N, 3)."""
        electrons = np.ascontiguousarray(electrons)
        n_walkers, n = electrons.shape[:2]
        value, gradient, laplacian = np.zeros(n_walkers), np.zeros((n_walkers, n, 3)), np.zeros((n_walkers, n))
        kinds, starts, parameters = self._functions
        spans = ((0, self.n_up), (self.n_up, n))
        out = value, gradient, laplacian
        if any(map(len, self._own)):
            _walkers_pairs(*self._functions, self._own, self.n_up, electrons, *out)
        for spin, f, nuclei in self._nuclei:
            _walkers_nuclei(kinds[f], parameters[starts[f] : starts[f + 1]], nuclei, *spans[spin], electrons, *out)
        for channel, p, gamma, nuclei in self._three:
            spins = _spins(channel)
            like = spins[0] == spins[1]
            add_three_body(p, gamma, like, *spans[spins[0]], *spans[spins[1]], nuclei, electrons, *out)
        return out

    def change(self, electrons: NDArray[np.float64], which: int, places: NDArray[np.float64]) -> NDArray[np.float64]:
        """(W, K) J with electron `which` of each walker (W, N, 3) at its places (W, K, 3), less J as it is."""
        return self.change_in_rows(np.ascontiguousarray(electrons.transpose(0, 2, 1)), which, places)

    def change_in_rows(self, rows: NDArray[np.float64], which: int, places: NDArray[np.float64]) -> NDArray[np.float64]:
        """As `change`, of electrons (W, 3, N): for who moves them often, as it saves turning them round."""
        out = np.zeros(places.shape[:2])
        plan = self._plans[0 if which < self.n_up else 1]
        rows, places = np.ascontiguousarray(rows), np.ascontiguousarray(places)
        change(self._functions, *plan, self.n_up, rows, which, places, out)
        return out

    def _plan(self, spin: int) -> tuple[Any, ...]:
        """What `change` takes for a moved electron of one spin, as arrays."""
        kinds, starts, parameters = self._functions
        partners = self._own[:2] if spin == 0 else self._own[1:]
        nuclear = [(f, nuclei) for of, f, nuclei in self._nuclei if of == spin]
        three = []
        for channel, p, gamma, nuclei in self._three:
            spins = _spins(channel)
            if spin in spins:
                first = spins[0] == spin  # else the moved electron is the second of the powers
                seen = gamma if first else gamma.transpose(1, 0, 2)
                three.append((p, seen, spins[1] if first else spins[0], nuclei.T))
        lengths = [length_of(int(kind), parameters[first:]) for kind, first in zip(kinds, starts, strict=False)]
        reach = [lengths[f] for f in np.concatenate(partners)]
        reach += [2 * p[0] if p[0] < NO_CUTOFF else np.inf for p, *_ in three]  # both are near the same nucleus
        return (
            partners,
            (
                np.array([f for f, _ in nuclear], dtype=np.int64),
                np.array([lengths[f] for f, _ in nuclear]),
                *_joined([nuclei for _, nuclei in nuclear]),
            ),
            (
                np.array([p for p, *_ in three]).reshape(-1, 4),
                np.array([gamma.shape for _, gamma, *_ in three], dtype=np.int64).reshape(-1, 3),
                np.cumsum([0, *(gamma.size for _, gamma, *_ in three)]),
                np.concatenate([np.zeros(0), *(gamma.ravel() for _, gamma, *_ in three)]),
                np.array([side for *_, side, _ in three], dtype=np.int64),
                *_joined([nuclei for *_, nuclei in three]),
            ),
            float(max(reach, default=0.0)),
        )

    def slopes(self) -> dict[str, float]:
        """u'(0) of each pair of spins, summed over the electron-electron terms: 1/2 and 1/4 fulfil the cusp."""
        total = dict.fromkeys(PAIRS, 0.0)
        for term in self.terms.values():
            if term.attributes["body"] == "electron-electron":
                for row, channel in enumerate(str(word) for word in term.members["channel"]):
                    total[channel] += float(radial_function(term, row)(0.0)[1])
        return total


def _joined(parts: list[NDArray[np.float64]]) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Where each of some arrays (3, .) starts in the whole, and the whole."""
    return np.cumsum([0, *(part.shape[1] for part in parts)]), np.concatenate([np.zeros((3, 0)), *parts], axis=1)


def _spins(channel: str) -> tuple[int, int]:
    return {"up_up": (0, 0), "up_down": (0, 1), "down_down": (1, 1)}[channel]


def _check(path: str, term: JastrowTerm, n_atoms: int) -> None:
    """Raise the first fault of a term."""
    if term.form not in FORMS:
        raise UnsupportedError(
            f"the form {term.form!r}", where=path, expected=f"one of {', '.join(FORMS)}",
            remedy="use a version of qwfx that knows it, or leave the term out",
        )  # fmt: skip
    body, members = str(term.attributes["body"]), term.members
    words = [str(word) for word in members["channel"]]
    faults = [*channel_faults(path, body, words)]
    if body != "electron-electron":
        if "atoms" not in members:
            raise FormatError(
                "is missing", where=f"{path}/atoms", expected="the atoms that the term is about", remedy="write them"
            )
        faults += atom_faults(path, members["atoms"], n_atoms)
    faults += parameter_faults(path, dict(term.attributes) | {"form": term.form}, dict(members) | {"channel": words})
    for fault in faults:
        raise fault.error()
