"""From a model to a Molden file, in the common convention: contractions as printed over normalised primitives."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.order import CARTESIAN, cartesian_powers, shell_order
from qwfx.converters.plugin import Progress, Writing
from qwfx.elements import SYMBOLS
from qwfx.errors import FileError, UnsupportedError
from qwfx.model import Basis, OrbitalSet, Wavefunction
from qwfx.reference.harmonics import monomial_powers
from qwfx.reference.norms import gaussian_norm, monomial_norm

__all__ = ["write"]

LETTERS = "spdfghi"
FLAG = {2: ("[5D]", "[6D]"), 3: ("[7F]", "[10F]"), 4: ("[9G]", "[15G]"), 5: ("", ""), 6: ("", "")}
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
            if l > 6:
                raise _limit(f"a shell has l = {l}", "at most 6", where)
            if l > 1 and len(kinds) > 1:
                raise _limit(f"shells with l = {l} are partly solid, partly monomial", "one kind", where)
            if l > 4 and 1 in kinds:
                raise _limit(f"a monomial shell has l = {l}", "at most 4, for which the format defines an order", where)
        high = [l for l in basis.shell_l.tolist() if l > 4]
        low = set(basis.shell_monomial[(basis.shell_l > 1) & (basis.shell_l < 5)].tolist())
        if high and low == {1}:
            raise _limit("solid shells beyond g beside monomial ones", "solid shells throughout", where)
    elif not np.all(basis.shell_monomial[basis.shell_l > 0]):
        raise _limit("a Slater shell with l > 0 is solid", "monomial shells", where)
    return basis


def _atoms(wavefunction: Wavefunction) -> Iterator[str]:
    yield "[Atoms] AU\n"
    system = wavefunction.system
    for i, (label, z, position) in enumerate(
        zip(system.labels, system.atomic_numbers.tolist(), system.positions.tolist(), strict=True)
    ):
        word = "".join(label.split()) or SYMBOLS[z]
        charge = z if system.effective_charges[i] > 0 else 0
        yield f"{word} {i + 1} {charge} {position[0]: .17e} {position[1]: .17e} {position[2]: .17e}\n"
    reduced = np.flatnonzero((system.effective_charges > 0) & (system.effective_charges != system.atomic_numbers))
    if len(reduced):
        yield "[Core]\n"
        for i in reduced.tolist():
            yield f"{i + 1} : {round(float(system.atomic_numbers[i] - system.effective_charges[i]))}\n"


def _gto(basis: Basis, n_atoms: int) -> Iterator[str]:
    """[GTO] and the flags."""
    yield "[GTO]\n"
    for atom in range(n_atoms):
        yield f"{atom + 1} 0\n"
        for s in np.flatnonzero(basis.shell_center == atom):
            l, own = int(basis.shell_l[s]), slice(int(basis.primitive_start[s]), int(basis.primitive_start[s + 1]))
            yield f"{LETTERS[l]} {own.stop - own.start} 1.00\n"
            a = basis.exponents[own]
            norm = np.asarray(monomial_norm(l, 0, 0, a) if basis.shell_monomial[s] else gaussian_norm(l, a))
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
    columns, factors = [], []
    for s, start in enumerate(basis.function_start[:-1].tolist()):
        l, monomial = int(basis.shell_l[s]), bool(basis.shell_monomial[s])
        order = shell_order(l, monomial)
        inverse = np.empty_like(order)
        inverse[order] = np.arange(len(order))
        columns.append(start + inverse)
        if monomial:
            powers = [monomial_powers(l)[k] for k in inverse]
            assert powers == cartesian_powers(l) or l not in CARTESIAN
            factors.append(np.array([monomial_norm(l, 0, 0, 1.0) / monomial_norm(i, j, k, 1.0) for i, j, k in powers]))
        else:
            factors.append(np.ones(len(order)))
    return np.concatenate(columns), np.concatenate(factors)


def _sto(basis: Basis) -> Iterator[str]:
    yield "[STO]\n"
    for s in range(basis.n_shells):
        k = int(basis.primitive_start[s])
        l = int(basis.shell_l[s])
        n = 0 if basis.powers is None else int(basis.powers[k])
        factor = float(basis.coefficients[k])
        if not basis.shell_monomial[s]:
            factor *= float(np.sqrt(1 / (4 * np.pi)))  # S_00
        for i, j, m in monomial_powers(l):
            yield f"{int(basis.shell_center[s]) + 1} {i} {j} {m} {n} {float(basis.exponents[k]): .17e} {factor: .17e}\n"


def _uncontracted(basis: Basis) -> tuple[Basis, NDArray[np.float64]]:
    """Slater shells of one primitive each, and the matrix (F, F') that spreads orbital coefficients over them."""
    lengths = np.diff(basis.primitive_start)
    shell = np.repeat(np.arange(basis.n_shells), lengths)
    spread = Basis(
        basis.radial, basis.shell_center[shell], basis.shell_l[shell], basis.shell_monomial[shell],
        np.arange(len(shell) + 1, dtype=np.int64), basis.exponents, basis.coefficients, basis.powers,
    )  # fmt: skip
    matrix = np.zeros((basis.n_functions, spread.n_functions))
    for new, old in enumerate(shell):
        size = int(basis.shell_size[old])
        rows, columns = int(basis.function_start[old]), int(spread.function_start[new])
        matrix[rows : rows + size, columns : columns + size] = np.eye(size)
    return spread, matrix


def _orbitals(s: OrbitalSet, matrix: NDArray[np.float64], spin: str, electrons: int | None) -> Iterator[str]:
    """One set of orbitals; `matrix` (M, F) in the order and values of the file."""
    form = "".join(f"{k + 1} %.17e\n" for k in range(matrix.shape[1]))
    for p, row in enumerate(matrix.tolist()):
        irrep = f" Sym= {''.join(s.irreps[p].split())}\n" if s.irreps is not None else ""
        energy = 0.0 if s.energies is None else float(s.energies[p])
        if s.occupations is not None:
            occupation = float(s.occupations[p])
        else:
            occupation = float(electrons is not None and p < electrons)
        yield f"{irrep} Ene= {energy:.17e}\n Spin= {spin}\n Occup= {occupation:.17g}\n" + form % tuple(row)


def _text(wavefunction: Wavefunction, basis: Basis) -> Iterator[str]:
    yield "[Molden Format]\n[Title]\nwritten by qwfx\n"
    yield from _atoms(wavefunction)
    spread: NDArray[np.float64] | None = None
    if basis.radial == "slater":
        basis, spread = _uncontracted(basis)
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
        yield from _orbitals(s, matrix[:, columns] * factors, "Beta" if s.spin == "down" else "Alpha", None)


def write(
    wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
) -> Writing:
    """Write orbitals to `path`, whole or not at all. Raises UnsupportedError for what the format cannot hold."""
    basis = _check(wavefunction, str(path))
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
    except OSError as error:
        raise _cannot(path, error) from None
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            if progress:
                progress("writing orbitals", 0.0)
            stream.writelines(_text(wavefunction, basis))
            stream.flush()
            os.fsync(stream.fileno())
        umask = os.umask(0)
        os.umask(umask)
        os.chmod(name, 0o666 & ~umask)
        os.replace(name, path)
    except OSError as error:
        raise _cannot(path, error) from None
    finally:
        Path(name).unlink(missing_ok=True)
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
    if any(s.energies is None for s in w.orbitals.values()):
        notes.append("there are no orbital energies: written as 0")
    if any(s.occupations is None for s in w.orbitals.values()):
        notes.append("there are no occupations: written as 0")
    return tuple(notes)


def _cannot(path: Path, error: OSError) -> FileError:
    return FileError(
        f"cannot be written ({error.strerror or error})",
        where=str(path),
        expected="a folder that exists, may be written to and has room",
        remedy="check the folder, its permissions and the space on the disk; nothing was changed",
    )
