"""PySCF's CI vectors as expansions, and back: over all strings of an active space, or over chosen ones.

PySCF's determinant is ``up operators ascending, then down operators ascending`` on the vacuum, up to the same reversal
for all, as F15 has it; a core of doubly occupied orbitals below the active ones stands in the same order. Coefficients
carry over as they are.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import ConversionError, UnsupportedError
from qwfx.model import Expansion, Wavefunction
from qwfx.occupation_lines import expansion_of

__all__ = [
    "CIVectors", "expansion_from_ci", "occupations_of", "roles_of", "to_ci_vectors", "vectors_of_solver",
    "with_ci_vectors",
]  # fmt: skip

Ints = NDArray[np.int64]
Core = int | tuple[int, int]
LARGEST_VECTOR = 1 << 28
"""Elements of a full vector: 2 GiB."""


@dataclass(frozen=True, eq=False)
class CIVectors:
    """Vectors as PySCF's CI solvers take them."""

    vectors: Any
    """(states, up strings, down strings), or a list of such of each state, in PySCF's order of strings."""
    n_core: Core
    """Filled orbitals below the active ones: a number, or one for each spin where its orbitals are apart."""
    n_active: int
    electrons: tuple[int, int]
    """Active electrons of each spin."""
    strings: Any = None
    """(up, down) strings of a selected CI, where its vectors do not say; None: over all strings of the space."""
    totals: Sequence[float] = ()
    """Total energy of each state, hartree, where known."""


def with_ci_vectors(
    wavefunction: Wavefunction, ci: Any, *, n_core: Core, n_active: int, electrons: tuple[int, int],
    strings: Any = None, threshold: float = 0.0,
) -> Wavefunction:  # fmt: skip
    """A model whose expansion is that of PySCF's CI vectors over its orbitals; see `expansion_from_ci`.

    The set of each spin is ``spatial``, or ``up`` and ``down``. The electrons of the system must be those of core and
    active space. PySCF's witness at whole configurations is of other determinants then and left out; `from_pyscf` with
    ``ci`` makes one.
    """
    sets = ("spatial", "spatial") if "spatial" in wavefunction.orbitals else ("up", "down")
    n_orbitals = tuple(wavefunction.orbitals[name].n_orbitals for name in sets)
    core = _per_spin(n_core)
    whole = (core[0] + electrons[0], core[1] + electrons[1])
    if whole != (wavefunction.system.n_up, wavefunction.system.n_down):
        raise ConversionError(
            f"{n_core} core orbitals and {electrons} active electrons", where="CI vectors",
            expected=f"{wavefunction.system.n_up} up and {wavefunction.system.n_down} down electrons in all",
            remedy="check ncore and nelecas",
        )  # fmt: skip
    expansion = expansion_from_ci(
        ci, n_core=n_core, n_active=n_active, electrons=electrons, n_orbitals=(n_orbitals[0], n_orbitals[1]),
        sets=sets, strings=strings, threshold=threshold,
    )  # fmt: skip
    witness = wavefunction.witness
    if witness is not None and witness.configurations is not None:
        witness = replace(witness, configurations=None)  # it was that of other determinants
    return replace(wavefunction, expansion=expansion, witness=witness)


def expansion_from_ci(
    ci: Any, *, n_core: Core, n_active: int, electrons: tuple[int, int], n_orbitals: tuple[int, int],
    sets: tuple[str, str] = ("spatial", "spatial"), strings: Any = None, threshold: float = 0.0,
) -> Expansion:  # fmt: skip
    """The expansion of one CI vector or of a list of them, one for each state.

    Parameters
    ----------
    ci : arrays (up strings, down strings) or flat, over all strings of the active space, or over chosen ones: PySCF's
        selected CI marks its vectors with them.
    strings : (up, down) bit strings of the active orbitals where the vectors are over chosen ones and do not say so.
    threshold : entries of a magnitude below it in every state are left out, and their weight is stored.

    Raises ConversionError for vectors of another size, or with nothing above the threshold.
    """
    several = isinstance(ci, (list, tuple)) or (isinstance(ci, np.ndarray) and ci.ndim == 3)
    vectors = list(ci) if several else [ci]
    cores = _per_spin(n_core)
    for n, core, count in zip(n_orbitals, cores, electrons, strict=True):
        if min(core, count) < 0 or count > n_active or core + n_active > n:
            raise ConversionError(
                f"a core of {core}, {n_active} active orbitals and {count} electrons in them", where="CI vectors",
                expected=f"a space within {n} orbitals", remedy="check ncore, ncas and nelecas",
            )  # fmt: skip
    over = [_strings_of(vector, strings, n_active, electrons) for vector in vectors]
    every = [np.unique(np.concatenate([own[spin] for own in over])) for spin in (0, 1)]
    parts = []
    for vector, own in zip(vectors, over, strict=True):
        matrix = np.asarray(vector)
        if matrix.size != len(own[0]) * len(own[1]):
            raise ConversionError(
                f"a CI vector of {matrix.size} elements", where="CI vectors",
                expected=f"{len(own[0])} up by {len(own[1])} down strings",
                remedy="check ncas and nelecas, or pass the strings of a selected CI",
            )  # fmt: skip
        matrix = matrix.reshape(len(own[0]), len(own[1]))
        rows, columns = np.nonzero(matrix)
        place = np.searchsorted(every[0], own[0])[rows] * len(every[1]) + np.searchsorted(every[1], own[1])[columns]
        parts.append((place, matrix[rows, columns]))
    places = np.unique(np.concatenate([place for place, _ in parts]))
    table = np.zeros((len(vectors), len(places)), dtype=np.result_type(*(values for _, values in parts), np.float64))
    for state, (place, values) in enumerate(parts):
        table[state, np.searchsorted(places, place)] = values
    kept = np.abs(table).max(axis=0, initial=0.0) >= threshold
    if not kept.any():
        raise ConversionError(
            "no coefficient is as large as that", where="ci-threshold", expected=f"a coefficient of {threshold:g}",
            remedy="take a smaller threshold",
        )  # fmt: skip
    discarded = (np.abs(table[:, ~kept]) ** 2).sum(axis=1) if threshold else None
    up, down = np.divmod(places[kept], len(every[1]))
    occupied = [
        _occupied(own[index], count, core)
        for own, index, count, core in zip(every, (up, down), electrons, cores, strict=True)
    ]
    return replace(
        expansion_of(occupied[0], occupied[1], table[:, kept], n_orbitals, sets), discarded_weight=discarded
    )


def _strings_of(vector: Any, told: Any, n_active: int, electrons: tuple[int, int]) -> tuple[Ints, Ints]:
    from pyscf.fci import cistring

    chosen = told if told is not None else getattr(vector, "_strs", None)
    if chosen is not None:
        up, down = (np.asarray(own, dtype=np.int64) for own in chosen)
        return up, down
    if n_active > 62:
        raise UnsupportedError(
            f"{n_active} active orbitals", where="CI vectors", expected="up to 62, as PySCF's strings have",
            remedy="pass determinants as a list",
        )  # fmt: skip
    up, down = (np.asarray(cistring.make_strings(range(n_active), n), dtype=np.int64) for n in electrons)
    return up, down


def _occupied(strings: Ints, electrons: int, n_core: int) -> Ints:
    """(E, n) orbitals, core included, of active strings."""
    bits = (strings[:, None] >> np.arange(63)) & 1
    if (bits.sum(axis=1) != electrons).any():
        raise ConversionError(
            "a string with another number of electrons", where="CI vectors", expected=f"{electrons} of this spin",
            remedy="check nelecas and the strings",
        )  # fmt: skip
    active = np.nonzero(bits)[1].reshape(len(strings), electrons) + n_core
    core = np.broadcast_to(np.arange(n_core), (len(strings), n_core))
    return np.concatenate([core, active], axis=1)


def _per_spin(n_core: Core) -> tuple[int, int]:
    up, down = (int(n) for n in np.broadcast_to(np.asarray(n_core), 2))
    return up, down


def roles_of(n_core: int, n_active: int, n_orbitals: int) -> tuple[str, ...]:
    """Role of each orbital of a set."""
    return ("core",) * n_core + ("active",) * n_active + ("virtual",) * (n_orbitals - n_core - n_active)


def occupations_of(expansion: Expansion, electrons: tuple[int, int], n_orbitals: int) -> list[NDArray[np.float64]]:
    """(M) electrons in each orbital of the set, or of the up and of the down set, in the first state."""
    from qwfx.reference.determinants import determinant_sum

    total = determinant_sum(expansion, *electrons)
    weights = np.abs(total.coefficients[0]) ** 2
    found = []
    for own, index in ((total.up, total.rows), (total.down, total.columns)):
        counts = np.zeros(n_orbitals)
        np.add.at(counts, own[index], np.broadcast_to(weights[:, None] / weights.sum(), (len(index), own.shape[1])))
        found.append(counts)
    return [found[0] + found[1]] if expansion.up_set == expansion.down_set else found


def vectors_of_solver(solver: Any) -> CIVectors:
    """The vectors of a solver such as ``pyscf.fci.FCI(mf)`` after its ``kernel()``, without their energies.

    Raises ConversionError if it has none.
    """
    parts: list[Any] = [getattr(solver, name, None) for name in ("ci", "norb", "nelec")]
    if any(part is None for part in parts):
        raise ConversionError(
            "the CI solver has no vectors", where=f"PySCF object of class {type(solver).__name__}",
            expected="a solver that was run, or CIVectors", remedy="call kernel(), or pass the vectors as CIVectors",
        )  # fmt: skip
    vectors, n_active, electrons = parts
    if np.ndim(electrons) == 0:
        half = (int(electrons) - int(solver.spin or 0)) // 2
        electrons = (int(electrons) - half, half)
    return CIVectors(vectors, 0, int(n_active), (int(electrons[0]), int(electrons[1])))


def to_ci_vectors(
    wavefunction: Wavefunction, *, n_core: Core | None = None, n_active: int | None = None
) -> CIVectors:
    """The expansion of a model as full CI vectors for PySCF, such as ``mc.ci``.

    Parameters
    ----------
    n_core : leading orbitals that every string occupies, for each spin where its orbitals are apart; by default all.
    n_active : orbitals of the active space; by default as far as the strings reach.

    Raises
    ------
    UnsupportedError : there is no expansion, the vectors would be too big, or an orbital lies outside of the space.
    """
    from math import comb

    from pyscf.fci import cistring

    from qwfx.reference.determinants import determinant_sum

    if wavefunction.expansion is None:
        raise UnsupportedError(
            "the wave function has no expansion", where="/expansion", expected="CI coefficients",
            remedy="convert an active-space calculation",
        )  # fmt: skip
    total = determinant_sum(wavefunction.expansion, wavefunction.system.n_up, wavefunction.system.n_down)
    sides = (total.up, total.down)
    filled = [int((own == np.arange(own.shape[1])).all(axis=0).cumprod().sum()) for own in sides]
    together = wavefunction.expansion.up_set == wavefunction.expansion.down_set
    shared = (min(filled),) * 2 if together else (filled[0], filled[1])
    core = shared if n_core is None else _per_spin(n_core)
    reach = [1 + int(own.max(initial=-1)) for own in sides]
    active = max(0, *(r - c for r, c in zip(reach, core, strict=True))) if n_active is None else n_active
    fits = all(0 <= c <= f and r <= c + active for c, f, r in zip(core, shared, reach, strict=True))
    if not fits or (together and core[0] != core[1]):
        raise UnsupportedError(
            f"strings that leave {_in_words(shared)} orbitals filled and reach orbital {_in_words(reach)}",
            where="/expansion", expected=f"a core of {_in_words(core)} and {active} active orbitals",
            remedy="name another active space",
        )  # fmt: skip
    electrons = (sides[0].shape[1] - core[0], sides[1].shape[1] - core[1])
    shape = comb(active, electrons[0]), comb(active, electrons[1])
    if active > 62 or shape[0] * shape[1] * len(total.coefficients) > LARGEST_VECTOR:
        raise UnsupportedError(
            f"full vectors of {shape[0]} x {shape[1]} elements", where="/expansion",
            expected=f"at most {LARGEST_VECTOR}", remedy="use the sparse expansion of the file",
        )  # fmt: skip
    vectors = np.zeros((len(total.coefficients), *shape), dtype=np.asarray(total.coefficients).dtype)
    address = []
    for own, n, c in zip(sides, electrons, core, strict=True):
        strings = (np.int64(1) << (own[:, c:] - c)).sum(axis=1)
        address.append(cistring.strs2addr(active, n, strings) if n else np.zeros(len(own), dtype=np.int64))
    vectors[:, np.asarray(address[0])[total.rows], np.asarray(address[1])[total.columns]] = total.coefficients
    return CIVectors(vectors, core[0] if together else core, active, electrons)


def _in_words(numbers: Sequence[int]) -> str:
    return str(numbers[0]) if numbers[0] == numbers[1] else f"{numbers[0]} up and {numbers[1]} down"
