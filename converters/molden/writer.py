"""From a model to a Molden file, in the common convention: contractions as printed over normalised primitives."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.atomic import replacing
from qwfx.converters.molden.charges import candidates
from qwfx.converters.molden.order import shell_order
from qwfx.converters.plugin import Progress, Writing
from qwfx.elements import SYMBOLS
from qwfx.errors import UnsupportedError
from qwfx.model import Basis, OrbitalSet, Wavefunction
from qwfx.reference.determinants import occupied
from qwfx.reference.harmonics import monomial_powers, shell_polynomials
from qwfx.reference.norms import gaussian_norm, monomial_norm, self_overlaps

__all__ = ["write"]

LETTERS = "spdfgh"
LARGEST_L = 5
FLAG = {2: ("[5D]", "[6D]"), 3: ("[7F]", "[10F]"), 4: ("[9G]", "[15G]")}
"""l -> flag of spherical and of Cartesian shells."""


def _limit(found: str, expected: str, where: str) -> UnsupportedError:
    return UnsupportedError(found, where=where, expected=expected, remedy="keep the .qwfx file, which holds it")


def _check(wavefunction: Wavefunction, where: str) -> Basis:
    """The basis, if a Molden file can hold the wave function."""
    basis = wavefunction.basis
    if basis is None or not wavefunction.orbitals:
        raise UnsupportedError(
            "the wave function has no orbitals",
            where=where,
            expected="a basis and orbitals",
            remedy="choose another target format",
        )
    if wavefunction.system.cell is not None:
        raise _limit("the system is periodic", "a molecule", where)
    spins = [s.spin for s in wavefunction.orbitals.values()]
    if sorted(spins) not in (["both"], ["down", "up"], ["up"], ["down"]):
        raise _limit(f"there are {len(spins)} orbital sets ({', '.join(spins)})", "one set, or one of each spin", where)
    if any(np.dtype(s.coefficients.dtype).kind == "c" for s in wavefunction.orbitals.values()):
        raise _limit("the orbitals are complex", "real orbitals", where)
    if basis.radial == "gaussian":
        if basis.powers is not None and np.any(basis.powers):
            raise _limit("the Gaussian functions contain powers of r", "none", where)
        for l in sorted(set(basis.shell_l.tolist())):
            kinds = set(basis.shell_monomial[basis.shell_l == l].tolist())
            if l > LARGEST_L:
                raise _limit(f"a shell has l = {l}", f"at most {LARGEST_L}, beyond which programs do not read", where)
            if l > 1 and len(kinds) > 1:
                raise _limit(f"shells with l = {l} are partly solid, partly monomial", "one kind", where)
            if l > 4 and 1 in kinds:
                raise _limit(f"a monomial shell has l = {l}", "at most 4, for which the format defines an order", where)
        high = [l for l in basis.shell_l.tolist() if l > 4]
        low = set(basis.shell_monomial[(basis.shell_l > 1) & (basis.shell_l < 5)].tolist())
        if high and low == {1}:
            raise _limit("solid shells beyond g beside monomial ones", "solid shells throughout", where)
    elif basis.powers is not None and np.any(np.asarray(basis.powers) < 0):
        raise _limit("Slater functions contain negative powers of r", "powers from 0", where)
    _check_charges(wavefunction, where)
    return basis


def _check_charges(wavefunction: Wavefunction, where: str) -> None:
    system = wavefunction.system
    for label, number, charge in zip(system.labels, system.atomic_numbers, system.effective_charges, strict=True):
        core = float(number - charge)
        if charge != 0.0 and (charge < 0.0 or core < 0.0 or core != round(core)):
            raise _limit(
                f"the atom {label} has the effective charge {charge:g} and the atomic number {number}",
                "the number of the element less a whole number of core electrons", where,
            )  # fmt: skip


def _atoms(wavefunction: Wavefunction) -> Iterator[str]:
    yield "[Atoms] AU\n"
    system = wavefunction.system
    for i, (label, z, position) in enumerate(
        zip(system.labels, system.atomic_numbers.tolist(), system.positions.tolist(), strict=True)
    ):
        word = "".join(label.split())
        if not word.isascii() or z not in (candidates(word)[:1] or [0]):
            word = f"{SYMBOLS[z]}{i + 1}"  # a reader would take the label for another element
        charge = z if system.effective_charges[i] > 0 else 0
        yield f"{word} {i + 1} {charge} {position[0]: .17e} {position[1]: .17e} {position[2]: .17e}\n"
    reduced = np.flatnonzero((system.effective_charges > 0) & (system.effective_charges != system.atomic_numbers))
    if len(reduced):
        yield "[Core]\n"
        for i in reduced.tolist():
            yield f"{i + 1} : {round(float(system.atomic_numbers[i] - system.effective_charges[i]))}\n"


def _by_atom(basis: Basis) -> NDArray[np.intp]:
    """The shells as [GTO] lists them: atom by atom."""
    return np.argsort(basis.shell_center, kind="stable")


def _norms(basis: Basis) -> NDArray[np.float64]:
    """(S) length of each contraction (of its component x^l): they are written normalised, as most programs expect."""
    lengths = np.sqrt(self_overlaps(basis)[basis.function_start[:-1]])
    return np.where(lengths > 0.0, lengths, 1.0)


def _gto(basis: Basis, n_atoms: int) -> Iterator[str]:
    """[GTO] and the flags."""
    yield "[GTO]\n"
    norms, shells = _norms(basis), _by_atom(basis)
    for atom in range(n_atoms):
        yield f"{atom + 1} 0\n"
        for s in shells[basis.shell_center[shells] == atom]:
            l, own = int(basis.shell_l[s]), slice(int(basis.primitive_start[s]), int(basis.primitive_start[s + 1]))
            yield f"{LETTERS[l]} {own.stop - own.start} 1.00\n"
            a = basis.exponents[own]
            norm = norms[s] * (monomial_norm(l, 0, 0, a) if basis.shell_monomial[s] else gaussian_norm(l, a))
            for exponent, coefficient in zip(a.tolist(), (basis.coefficients[own] / norm).tolist(), strict=True):
                yield f"{exponent: .17e} {coefficient: .17e}\n"
        yield "\n"
    for l in (2, 3, 4):
        kinds = set(basis.shell_monomial[basis.shell_l == l].tolist())
        high = bool(np.any(basis.shell_l > 4))
        if kinds or (high and l == 2):
            yield FLAG[l][1 if kinds == {1} else 0] + "\n"


def _gto_columns(basis: Basis) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """For each function of the file: our column, and the factor of its coefficient.

    The file's Cartesian components are each normalised; ours share the factor of xx..x.
    """
    columns, factors = [np.zeros(0, dtype=np.int64)], [np.zeros(0)]
    norms = _norms(basis)
    for s in _by_atom(basis).tolist():
        l, monomial = int(basis.shell_l[s]), bool(basis.shell_monomial[s])
        order = shell_order(l, monomial)
        inverse = np.empty_like(order)
        inverse[order] = np.arange(len(order))
        columns.append(int(basis.function_start[s]) + inverse)
        if monomial:
            powers = [monomial_powers(l)[k] for k in inverse]
            own = np.array([monomial_norm(l, 0, 0, 1.0) / monomial_norm(i, j, k, 1.0) for i, j, k in powers])
        else:
            own = np.ones(len(order))
        factors.append(own * norms[s])
    return np.concatenate(columns), np.concatenate(factors)


def _sto(basis: Basis) -> Iterator[str]:
    """[STO] of monomial shells of one primitive each."""
    yield "[STO]\n"
    for s in range(basis.n_shells):
        n = 0 if basis.powers is None else int(basis.powers[s])
        exponent, factor = float(basis.exponents[s]), float(basis.coefficients[s])
        for i, j, k in monomial_powers(int(basis.shell_l[s])):
            yield f"{int(basis.shell_center[s]) + 1} {i} {j} {k} {n} {exponent: .17e} {factor: .17e}\n"


def _line_by_line(basis: Basis) -> tuple[Basis, NDArray[np.float64]]:
    """Monomial Slater shells of one primitive each, and (F, F') the functions of the basis in terms of theirs."""
    shell = np.repeat(np.arange(basis.n_shells), np.diff(basis.primitive_start))
    spread = Basis(
        basis.radial, basis.shell_center[shell], basis.shell_l[shell], np.ones(len(shell), dtype=np.int8),
        np.arange(len(shell) + 1, dtype=np.int64), basis.exponents, basis.coefficients, basis.powers,
    )  # fmt: skip
    matrix = np.zeros((basis.n_functions, spread.n_functions))
    for new, old in enumerate(shell.tolist()):
        block = shell_polynomials(int(basis.shell_l[old]), bool(basis.shell_monomial[old]))
        row, column = int(basis.function_start[old]), int(spread.function_start[new])
        matrix[row : row + len(block), column : column + block.shape[1]] = block
    return spread, matrix


def _orbitals(s: OrbitalSet, matrix: NDArray[np.float64], spin: str) -> Iterator[str]:
    """One set of orbitals; `matrix` (M, F) in the order and values of the file."""
    form = "".join(f"{k + 1} %.17e\n" for k in range(matrix.shape[1]))
    for p, row in enumerate(matrix.tolist()):
        irrep = f" Sym= {''.join(s.irreps[p].split())}\n" if s.irreps is not None else ""
        energy = 0.0 if s.energies is None else float(s.energies[p])
        occupation = 0.0 if s.occupations is None else float(s.occupations[p])
        yield f"{irrep} Ene= {energy:.17e}\n Spin= {spin}\n Occup= {occupation:.17g}\n" + form % tuple(row)


def _text(wavefunction: Wavefunction, basis: Basis) -> Iterator[str]:
    yield "[Molden Format]\n[Title]\nwritten by qwfx\n"
    yield from _atoms(wavefunction)
    spread: NDArray[np.float64] | None = None
    if basis.radial == "slater":
        basis, spread = _line_by_line(basis)
        yield from _sto(basis)
        columns, factors = np.arange(basis.n_functions), np.ones(basis.n_functions)
    else:
        yield from _gto(basis, wavefunction.system.n_atoms)
        columns, factors = _gto_columns(basis)
    yield "[MO]\n"
    for s in wavefunction.orbitals.values():
        matrix = np.asarray(s.coefficients)
        if spread is not None:
            matrix = matrix @ spread
        yield from _orbitals(s, matrix[:, columns] * factors, "Beta" if s.spin == "down" else "Alpha")


def _with_occupations(wavefunction: Wavefunction) -> Wavefunction:
    """With the occupations that a single determinant implies, where the orbitals have none of their own."""
    e, system = wavefunction.expansion, wavefunction.system
    if e is None or len(np.asarray(e.columns)) != 1:
        return wavefunction
    filled: dict[str, NDArray[np.float64]] = {}
    for name, strings, n in ((e.up_set, e.up_strings, system.n_up), (e.down_set, e.down_strings, system.n_down)):
        s = wavefunction.orbitals.get(name)
        if s is not None and s.occupations is None:
            own = filled.setdefault(name, np.zeros(s.n_orbitals))
            own[occupied(np.asarray(strings), n)[0]] += 1
    orbitals = {
        name: replace(s, occupations=filled[name]) if name in filled else s
        for name, s in wavefunction.orbitals.items()
    }
    return replace(wavefunction, orbitals=orbitals)


def write(
    wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
) -> Writing:
    """Write orbitals to `path`, whole or not at all. Raises UnsupportedError for what the format cannot hold."""
    wavefunction = _with_occupations(wavefunction)
    basis = _check(wavefunction, str(path))
    with replacing(path) as part, open(part, "w", encoding="utf-8", newline="\n") as stream:
        if progress:
            progress("writing orbitals", 0.0)
        stream.writelines(_text(wavefunction, basis))
    return Writing(_left_out(wavefunction))


def _left_out(w: Wavefunction) -> tuple[str, ...]:
    many = w.expansion is not None and int(w.expansion.coefficients.shape[1]) > 1
    parts: dict[str, Any] = {
        "core potentials (their electrons are in [Core])": w.potentials is not None and len(w.potentials.center),
        "the expansion": many, "the Jastrow factor": w.jastrow, "the Hamiltonian": w.hamiltonian,
        "densities": w.densities, "energies": w.energies, "the witness": w.witness, "extensions": w.extensions,
        "roles of the orbitals": any(s.roles for s in w.orbitals.values()),
    }  # fmt: skip
    listed = [word for word, there in parts.items() if there]
    notes = [f"not carried by Molden: {', '.join(listed)}"] if listed else []
    if [s.spin for s in w.orbitals.values()] in (["up"], ["down"]):
        notes.append("the orbitals are of one spin: readers of the file may take them for those of both")
    if any(s.energies is None for s in w.orbitals.values()):
        notes.append("there are no orbital energies: written as 0")
    if any(s.occupations is None for s in w.orbitals.values()):
        notes.append("there are no occupations: written as 0")
    return tuple(notes)
