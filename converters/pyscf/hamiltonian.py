"""The second-quantised Hamiltonian over the stored orbitals, with PySCF's integrals."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.energies import need_potentials
from qwfx.converters.pyscf.to_mean_field import choose_sets
from qwfx.converters.pyscf.to_mole import translate
from qwfx.errors import UnsupportedError
from qwfx.model import Hamiltonian, TwoBody, Wavefunction

__all__ = ["symmetry_numbers", "with_hamiltonian"]

LARGEST_COMPLEX = 64  # orbitals; n^4 complex numbers are held at once


def with_hamiltonian(wavefunction: Wavefunction) -> Wavefunction:
    """The wave function with `Hamiltonian` over its own orbitals: one set for both spins, or up and down.

    Real orbitals give packing ``eightfold`` and ``fourfold``, complex ones ``pairs``. The core energy is the repulsion
    of the nuclei: no electron is frozen. Irreps become ``orbital_symmetry`` where their labels allow it.

    Raises
    ------
    UnsupportedError for unequal numbers of up and down orbitals, for more than 64 complex orbitals, and as `translate`;
    EvaluationError if a core potential is missing; ConversionError if the file does not say which orbitals are meant.
    """
    need_potentials(wavefunction)
    chosen = choose_sets(wavefunction)
    sizes = {s.n_orbitals for s in chosen.sets}
    if len(sizes) != 1:
        raise UnsupportedError(
            f"the up and down orbitals number {chosen.sets[0].n_orbitals} and {chosen.sets[1].n_orbitals}",
            where="Hamiltonian",
            expected="equal numbers",
            remedy="leave orbitals out, or make the Hamiltonian without qwfx",
        )
    translation = translate(wavefunction)
    orbitals = [translation.coefficients(s.coefficients) for s in chosen.sets]
    complex_orbitals = any(np.iscomplexobj(c) for c in orbitals)
    n = sizes.pop()
    if complex_orbitals and n > LARGEST_COMPLEX:
        raise UnsupportedError(
            f"there are {n} complex orbitals",
            where="Hamiltonian",
            expected=f"at most {LARGEST_COMPLEX}",
            remedy="leave out virtual orbitals",
        )
    spins = ("both",) if len(orbitals) == 1 else ("up", "down")
    pairs = {"both": (0, 0)} if len(orbitals) == 1 else {"up_up": (0, 0), "up_down": (0, 1), "down_down": (1, 1)}
    transform = _complex_two_body if complex_orbitals else _real_two_body
    core = _one_electron(translation.mole)
    hamiltonian = Hamiltonian(
        n_orbitals=n,
        core_energy=float(translation.mole.energy_nuc()),
        one_body={key: c.conj().T @ core @ c for key, c in zip(spins, orbitals, strict=True)},
        two_body={
            key: TwoBody(transform(translation.mole, orbitals[i], orbitals[j], like=i == j))
            for key, (i, j) in pairs.items()
        },
        complex_orbitals=complex_orbitals,
        up_set=chosen.names[0],
        down_set=chosen.names[-1],
        orbital_energies={
            key: np.asarray(s.energies)
            for key, s in zip(spins, chosen.sets, strict=True)
            if s.energies is not None and all(other.energies is not None for other in chosen.sets)
        },
        orbital_symmetry=_symmetry(chosen.sets),
    )
    return replace(wavefunction, hamiltonian=hamiltonian)


def _one_electron(mole: Any) -> NDArray[np.float64]:
    """Kinetic energy, attraction of the nuclei and core potentials, over PySCF's functions."""
    from pyscf import scf

    return np.asarray(scf.hf.get_hcore(mole))


def _real_two_body(mole: Any, left: NDArray[Any], right: NDArray[Any], *, like: bool) -> NDArray[np.float64]:
    from pyscf import ao2mo

    pairs = np.asarray(ao2mo.kernel(mole, (left, left, right, right), compact=True))
    n_pairs = left.shape[1] * (left.shape[1] + 1) // 2
    pairs = pairs.reshape(n_pairs, n_pairs)
    # The lower triangle row by row is the position pq(pq+1)/2 + rs.
    return pairs[np.tril_indices(n_pairs)] if like else pairs.ravel()


def _complex_two_body(mole: Any, left: NDArray[Any], right: NDArray[Any], *, like: bool) -> NDArray[np.complex128]:
    integrals: NDArray[Any] = np.asarray(mole.intor("int2e"))
    for c in (right, right.conj(), left, left.conj()):  # transforms the last index and brings it to the front
        integrals = np.tensordot(c.T, integrals, axes=(1, 3))
    # The four steps have turned (ab|rs) into (p*,q,r*,s) with the axes in order again.
    n_pairs = left.shape[1] ** 2
    pairs = np.ascontiguousarray(integrals, dtype=np.complex128).reshape(n_pairs, n_pairs)
    return pairs[np.tril_indices(n_pairs)] if like else pairs.ravel()


def _symmetry(sets: tuple[Any, ...]) -> NDArray[np.int32] | None:
    """(n) irrep numbers where all sets have labels that agree orbital by orbital and fit one group."""
    labels = {s.irreps for s in sets}
    if len(labels) != 1 or None in labels:
        return None
    return symmetry_numbers(labels.pop())


def symmetry_numbers(labels: tuple[str, ...]) -> NDArray[np.int32] | None:
    """Numbers from 0 whose bitwise exclusive-or is the product of irreps, for labels in PySCF's spelling.

    The smallest group that has all the labels is taken; irreps of linear molecules give those of D2h or C2v (PySCF
    numbers them so that the last decimal digit is that number). None if no group has all the labels.
    """
    from pyscf import symm
    from pyscf.lib.exceptions import PointGroupSymmetryError

    for group in ("C1", "Ci", "C2", "Cs", "C2h", "C2v", "D2", "D2h", "Coov", "Dooh"):
        try:
            numbers = [symm.irrep_name2id(group, label) for label in labels]
        except (KeyError, ValueError, PointGroupSymmetryError):
            continue
        return np.array(numbers, dtype=np.int32) % 10
    return None
