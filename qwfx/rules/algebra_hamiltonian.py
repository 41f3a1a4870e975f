"""Tier *algebra*: symmetry and positivity of integrals and density matrices."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.reference.packing import split_triangle
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every, figure, listed

__all__: list[str] = []

HAMILTONIAN: tuple[Purpose, ...] = ("hamiltonian",)
KEPT_VALUES = 1 << 26
"""Two-electron integrals of one key that are held in memory at once (1 GB complex); more are not evaluated."""


@rule(
    name="hermitian-one-body",
    tier="algebra",
    severity=Severity.ERROR,
    premise=Premise(members=("/hamiltonian/one_body",), rules=("finite-numbers",)),
    cost="one pass over the one-electron integrals",
    purposes=HAMILTONIAN,
    summary="one-electron integrals are Hermitian",
)
def hermitian_one_body(file: Inspection) -> Iterator[Remark]:
    for key in file.members("/hamiltonian/one_body"):
        member = f"/hamiltonian/one_body/{key}"
        h = np.asarray(file.read(member))
        difference = np.abs(h - h.conj().T)
        scale = max(1.0, float(np.abs(h).max(initial=0.0)))
        worst = float(difference.max(initial=0.0)) / scale
        yield Measured(f"{key}: largest deviation {figure(worst)} of the largest element, tolerance 1e-10")
        if worst > 1e-10:
            p, q = (int(i) for i in np.unravel_index(int(difference.argmax()), h.shape))
            hint = "; one triangle is zero" if not np.tril(h, -1).any() or not np.triu(h, 1).any() else ""
            yield Problem(
                at(member, (p, q)),
                f"{h[q, p].conj():.8g}, from element ({q}, {p})",
                f"{h[p, q]:.8g}{hint}",
                "write both triangles",
                None if worst > 1e-6 else Severity.WARNING,
                int(np.count_nonzero(np.triu(difference > 1e-10 * scale))),
            )
        yield Covered(f"{key}: all {len(h)} x {len(h)} elements")


def _values(file: Inspection, key: str) -> tuple[NDArray[np.int64], NDArray[Any]]:
    """Packed positions and values that are stored for one key."""
    path = f"/hamiltonian/two_body/{key}"
    stored = file.shape(f"{path}/values")[0]
    if stored > KEPT_VALUES:
        raise PremiseError(f"{stored} integrals of {key}; they are compared with each other for up to {KEPT_VALUES}")
    values = np.asarray(file.read(f"{path}/values"))
    if file.has(f"{path}/index"):
        return file.read(f"{path}/index").astype(np.int64), values
    return np.arange(stored, dtype=np.int64), values


def _pairs(position: NDArray[np.int64], n_pairs: int, like: bool) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Pair indices (bra, ket) of packed positions."""
    if like:
        return split_triangle(position)
    return position // n_pairs, position % n_pairs


def _lookup(position: NDArray[np.int64], values: NDArray[Any], wanted: NDArray[np.int64]) -> NDArray[Any]:
    """Stored values at `wanted` positions; zero where nothing is stored. `position` ascends."""
    if not len(position):
        return np.zeros(len(wanted), dtype=values.dtype)
    place = np.minimum(np.searchsorted(position, wanted), len(position) - 1)
    return np.where(position[place] == wanted, values[place], 0)


CHUNK = 1 << 20
TWO_BODY = Premise(members=("/hamiltonian/two_body",), rules=("finite-numbers", "sparse-index"))


@rule(
    name="pair-symmetry",
    tier="algebra",
    severity=Severity.ERROR,
    premise=TWO_BODY,
    cost="one pass over the two-electron integrals, twice",
    purposes=HAMILTONIAN,
    summary="complex two-electron integrals obey (pq|rs) = (qp|sr)*",
)
def pair_symmetry(file: Inspection) -> Iterator[Remark]:
    """The packing of real integrals cannot break their symmetry; that of complex ones leaves this relation open."""
    if file.attribute("/hamiltonian", "packing") != "complex":
        raise PremiseError("the packing of real integrals holds every symmetry")
    n = file.integer("/hamiltonian", "n_orbitals")
    for key in file.members("/hamiltonian/two_body"):
        position, values = _values(file, key)
        like = key != "up_down"
        worst, first, bad = 0.0, 0, 0
        scale = max(1.0, float(np.abs(values).max(initial=0.0)))
        for start in range(0, len(position), CHUNK):
            bra, ket = _pairs(position[start : start + CHUNK], n * n, like)
            bra, ket = (bra % n) * n + bra // n, (ket % n) * n + ket // n
            if like:
                bra, ket = np.maximum(bra, ket), np.minimum(bra, ket)
                mirror = bra * (bra + 1) // 2 + ket
            else:
                mirror = bra * n * n + ket
            gap = np.abs(values[start : start + CHUNK] - _lookup(position, values, mirror).conj())
            if gap.max(initial=0.0) > worst:
                worst, first = float(gap.max()), start + int(gap.argmax())
            bad += int(np.count_nonzero(gap > 1e-10 * scale))
        yield Measured(f"{key}: largest deviation {figure(worst / scale)} of the largest element, tolerance 1e-10")
        if bad:
            b, k = (int(x[0]) for x in _pairs(position[first : first + 1], n * n, like))
            p, q, r, s = b // n, b % n, k // n, k % n
            yield Problem(
                at(f"/hamiltonian/two_body/{key}/values", first),
                f"({p}{q}|{r}{s}) = ({q}{p}|{s}{r})*" if n < 10 else f"({p} {q}|{r} {s}) = ({q} {p}|{s} {r})*",
                f"they differ by {worst:.3g}",
                "write both, or check which of them is conjugated",
                None if worst > 1e-6 * scale else Severity.WARNING,
                bad,
            )
        yield Covered(f"{key}: all {len(values)} integrals")


@rule(
    name="coulomb-bounds",
    tier="algebra",
    severity=Severity.WARNING,
    premise=TWO_BODY,
    cost="one pass over the two-electron integrals, twice",
    purposes=HAMILTONIAN,
    summary="two-electron integrals are those of a repulsion: (pq|qp) >= 0 and |(pq|rs)|^2 <= (pq|qp)(rs|sr)",
)
def coulomb_bounds(file: Inspection) -> Iterator[Remark]:
    """The Coulomb kernel is positive, so its matrix over pairs is, and each 2 x 2 block of it (Cauchy and Schwarz)."""
    n, is_complex = file.integer("/hamiltonian", "n_orbitals"), file.attribute("/hamiltonian", "packing") == "complex"
    n_pairs = n * n if is_complex else n * (n + 1) // 2
    keys = file.members("/hamiltonian/two_body")
    diagonals = {}
    for key in keys:
        if key == "up_down":
            continue
        diagonals[key] = _self_repulsion(file, key, n, is_complex)
        lowest = diagonals[key].min(initial=0.0)
        if lowest < -BOUND_SLACK:
            yield Problem(
                f"/hamiltonian/two_body/{key}/values",
                "a self-repulsion (pq|qp) of 0 or more",
                f"{lowest:.6g} for {_pair_name(int(diagonals[key].argmin()), n, is_complex)}",
                "check the sign and the order of indices (chemists' notation)",
                count=int(np.count_nonzero(diagonals[key] < -BOUND_SLACK)),
            )
    for key in keys:
        left = diagonals["up_up" if key == "up_down" else key]
        right = diagonals["down_down" if key == "up_down" else key]
        seen, bad, worst, excess, value = 0, 0, 0, 0.0, 0.0
        for start, position, values in _chunks(file, key):
            bra, ket = _pairs(position, n_pairs, key != "up_down")
            over = np.abs(values) - np.sqrt(np.maximum(left[bra], 0.0) * np.maximum(right[ket], 0.0))
            if over.max(initial=0.0) > excess:
                k = int(over.argmax())
                excess, worst, value = float(over[k]), start + k, float(np.abs(values[k]))
            bad += int(np.count_nonzero(over > BOUND_SLACK))
            seen += len(values)
        yield Measured(f"{key}: bound exceeded by at most {figure(excess)}, tolerance {BOUND_SLACK:.0e}")
        if bad:
            yield Problem(
                at(f"/hamiltonian/two_body/{key}/values", worst),
                "|(pq|rs)| within sqrt((pq|qp)(rs|sr))",
                f"{value:.6g}, {excess:.3g} beyond",
                "check the order of indices (chemists' notation); a model Hamiltonian may break the bound on purpose",
                count=bad,
            )
        yield Covered(f"{key}: {every(seen, 'integral')}")


def _chunks(file: Inspection, key: str) -> Iterator[tuple[int, NDArray[np.int64], NDArray[Any]]]:
    """The stored integrals of one key in pieces: number of the first, packed positions, values."""
    path = f"/hamiltonian/two_body/{key}"
    stored = file.shape(f"{path}/values")[0]
    for start in range(0, stored, CHUNK):
        stop = min(start + CHUNK, stored)
        if file.has(f"{path}/index"):
            position = np.asarray(file.raw.read(f"{path}/index", start, stop)).astype(np.int64)
        else:
            position = np.arange(start, stop, dtype=np.int64)
        yield start, position, np.asarray(file.raw.read(f"{path}/values", start, stop))


def _self_repulsion(file: Inspection, key: str, n: int, is_complex: bool) -> NDArray[np.float64]:
    """(pairs) the stored (pq|qp), which is (pq|pq) for real orbitals."""
    n_pairs = n * n if is_complex else n * (n + 1) // 2
    diagonal, smallest = np.zeros(n_pairs), np.inf
    for _, position, values in _chunks(file, key):
        bra, ket = _pairs(position, n_pairs, True)
        own = (bra % n) * n + bra // n == ket if is_complex else bra == ket
        diagonal[bra[own]] = diagonal[ket[own]] = values[own].real
        smallest = min(smallest, float(np.abs(values[values != 0]).min(initial=np.inf)))
    # Lists of integrals are cut at a threshold: a diagonal that is not stored may be as large as that.
    diagonal[diagonal == 0] = smallest if np.isfinite(smallest) else 0.0
    return diagonal


BOUND_SLACK = 1e-7
"""hartree; integrals printed with fewer digits or cut at a threshold reach a few 1e-8."""


def _pair_name(k: int, n: int, is_complex: bool) -> str:
    if is_complex:
        return f"p = {k // n}, q = {k % n}"
    p = int(split_triangle(np.array([k]))[0][0])
    return f"p = {p}, q = {k - p * (p + 1) // 2}"


@rule(
    name="density-traces",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(members=("/densities/one_body", "/system"), rules=("finite-numbers", "electron-count")),
    cost="one pass over the one-body density matrices",
    summary="one-body density matrices are Hermitian, with the number of electrons as trace",
)
def density_traces(file: Inspection) -> Iterator[Remark]:
    n_up, n_down = file.integer("/system", "n_up"), file.integer("/system", "n_down")
    electrons = {"both": n_up + n_down, "up": n_up, "down": n_down}
    keys = [key for key in file.members("/densities/one_body") if key in electrons]
    for key in keys:
        member = f"/densities/one_body/{key}"
        for state, matrix in enumerate(np.asarray(file.read(member))):
            trace = float(np.trace(matrix).real)
            skew = float(np.abs(matrix - matrix.conj().T).max(initial=0.0))
            yield Measured(f"{key}, state {state}: trace {trace:.6g}, Hermitian to {figure(skew)}")
            if abs(trace - electrons[key]) > 1e-4:
                yield Problem(
                    at(member, state),
                    f"trace {electrons[key]}",
                    f"{trace:.6g}",
                    "write the matrix over all orbitals that are occupied",
                )
            if skew > 1e-6:
                yield Problem(
                    at(member, state),
                    "a Hermitian matrix",
                    f"deviation {skew:.3g}",
                    "check which index belongs to the creator",
                )
    yield Covered(f"all elements of {listed(keys)}")
