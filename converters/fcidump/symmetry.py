"""ORBSYM and ISYM: from 0 or from 1, tried on the integrals."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.fcidump.header import Header
from qwfx.errors import ConversionError
from qwfx.kernels.packing import indices
from qwfx.model import Hamiltonian

__all__ = ["Symmetry", "symmetry_of"]

MOST_IRREPS = 8
"""Irreps of D2h and its subgroups, the groups whose products are bitwise exclusive-or."""
FORBIDDEN_BELOW = 1e-5
"""hartree; integrals of this magnitude are forbidden by symmetry nowhere (orbitals carry noise well below)."""
BATCH = 1 << 18


@dataclass(frozen=True)
class Symmetry:
    """Irreps from 0."""

    orbitals: NDArray[np.int32] | None = None
    state: int | None = None
    notes: tuple[str, ...] = ()


def symmetry_of(header: Header, hamiltonian: Hamiltonian, state_from: str, name: str) -> Symmetry:
    """Irreps of orbitals and state, and what was taken for granted. Raises ConversionError for a wrong count.

    `state_from` is ``from-0``, ``from-1`` or ``like-orbsym``.
    """
    written = np.array(header.orbital_symmetry, dtype=np.int64)
    if not len(written):
        return Symmetry()
    n = hamiltonian.n_orbitals
    if hamiltonian.spin_resolved and len(written) == 2 * n:
        if not np.array_equal(written[0::2], written[1::2]):
            return Symmetry(notes=("ORBSYM differs between up and down orbitals: left out",))
        written = written[0::2]
    if len(written) != n:
        raise ConversionError(
            f"ORBSYM has {len(header.orbital_symmetry)} values",
            where=f"{name}:{header.line_of('ORBSYM')}",
            expected=f"{n}, one for each orbital" + (f", or {2 * n}" if hamiltonian.spin_resolved else ""),
            remedy="mend ORBSYM, or leave it out",
        )
    bases = [base for base in (1, 0) if written.min() - base >= 0 and written.max() - base < MOST_IRREPS]
    if not bases:
        values = f"{int(written.min())} to {int(written.max())}"
        return Symmetry(notes=(f"ORBSYM has values from {values}, not those of eight irreps: left out",))
    least = np.inf
    for base in bases:
        worst = _worst(hamiltonian, written - base)
        least = min(least, worst)
        if worst <= FORBIDDEN_BELOW:
            break
    else:
        return Symmetry(notes=(
            f"ORBSYM contradicts the integrals (it forbids one of {least:.1e} hartree), or is numbered so that "
            "products are not bitwise exclusive-or: left out",
        ))  # fmt: skip
    orbitals = (written - base).astype(np.int32)
    notes = [f"ORBSYM counts from {base}"] if orbitals.any() else []
    state = _state(header, orbitals, base, state_from, notes)
    return Symmetry(orbitals, state, tuple(notes))


def _state(header: Header, orbitals: NDArray[np.int32], base: int, state_from: str, notes: list[str]) -> int | None:
    written = header.state_symmetry
    if written is None:
        return None
    if not orbitals.any():  # a single irrep, whatever the number
        if written not in (0, 1, base):
            notes.append(f"ISYM = {written}, but all orbitals have one irrep: taken as totally symmetric")
        return 0
    decided = {"from-0": 0, "from-1": 1}.get(state_from)
    start = decided if decided is not None else 0 if written == 0 else base
    state = written - start
    if not 0 <= state < MOST_IRREPS:
        notes.append(f"ISYM = {written} counted from {start} is none of eight irreps: left out")
        return None
    hint = "" if decided is not None or written == 0 else "; if the program counts from 0: --set isym=from-0"
    if start == 0 and decided is None and written != 0:
        hint = "; if the program counts from 1: --set isym=from-1"
    notes.append(f"ISYM = {written} taken to count from {start} (irrep {state} of 0..7{hint})")
    return state


def _worst(hamiltonian: Hamiltonian, irreps: NDArray[np.int64]) -> float:
    """Magnitude of the largest integral that the irreps forbid, hartree."""
    if not irreps.any():
        return 0.0
    n, worst = hamiltonian.n_orbitals, 0.0
    for matrix in hamiltonian.one_body.values():
        forbidden = irreps[:, None] != irreps[None, :]
        worst = max(worst, float(np.abs(np.asarray(matrix))[forbidden].max(initial=0.0)))
    for pair, table in hamiltonian.two_body.items():
        like = pair != "up_down"
        packing = "pairs" if hamiltonian.complex_orbitals else "eightfold" if like else "fourfold"
        for start in range(0, len(table.values), BATCH):
            values = np.abs(np.asarray(table.values[start : start + BATCH]))
            rows = np.flatnonzero(values > FORBIDDEN_BELOW)
            place: NDArray[Any] = rows + start if table.index is None else np.asarray(table.index)[rows + start]
            p, q, r, s = irreps[indices(packing, n, place, like)].T
            worst = max(worst, float(values[rows][(p ^ q ^ r ^ s) != 0].max(initial=0.0)))
    return worst
