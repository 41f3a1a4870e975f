"""Full configuration interaction from a stored Hamiltonian, by PySCF."""

from __future__ import annotations

from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import ConversionError, UnsupportedError
from qwfx.kernels.packing import dense
from qwfx.model import Hamiltonian, TwoBody, Wavefunction

__all__ = ["fci_energy"]

LARGEST_SPACE = 20_000_000  # determinants: a few hundred MB of vectors
LARGEST_COMPLEX_SPACE = 200_000
CONVERGED = 1e-10


def fci_energy(wavefunction: Wavefunction, nroots: int = 1, symmetry: int | None = None) -> float | NDArray[np.float64]:
    """Lowest full-CI energies (hartree, core energy included) of the stored Hamiltonian with the electrons of the file.

    Parameters
    ----------
    wavefunction : with `Hamiltonian`; ``n_up`` and ``n_down`` of its system are the electrons of the Hamiltonian.
    nroots : how many states.
    symmetry : irrep of the states, from 0, where the Hamiltonian has orbital symmetries; None: all irreps.

    Returns
    -------
    One energy, or (nroots) in ascending order if `nroots` is more than 1.

    Raises
    ------
    ConversionError if there is no Hamiltonian, or the electrons do not fit its orbitals; UnsupportedError for spaces of
    more than 2e7 determinants (2e5 with complex orbitals) and for symmetry with spin-resolved orbitals.
    """
    hamiltonian = wavefunction.hamiltonian
    if hamiltonian is None:
        raise ConversionError(
            "the file has no Hamiltonian",
            where="full CI",
            expected="a second-quantised Hamiltonian",
            remedy="add one (with_hamiltonian), or convert an FCIDUMP file",
        )
    n, n_up, n_down = hamiltonian.n_orbitals, wavefunction.system.n_up, wavefunction.system.n_down
    if max(n_up, n_down) > n:
        raise ConversionError(
            f"{n_up} up and {n_down} down electrons do not fit {n} orbitals",
            where="full CI",
            expected="as many orbitals as electrons of one spin",
            remedy="check the electron counts",
        )
    largest = LARGEST_COMPLEX_SPACE if hamiltonian.complex_orbitals else LARGEST_SPACE
    _check_size(comb(n, n_up) * comb(n, n_down), largest)
    if symmetry is not None and (hamiltonian.orbital_symmetry is None or hamiltonian.spin_resolved):
        raise UnsupportedError(
            "states of one irrep were asked for",
            where="full CI",
            expected="a spin-restricted Hamiltonian with orbital symmetries",
            remedy="leave out the symmetry",
        )
    if hamiltonian.complex_orbitals:
        from qwfx.converters.pyscf.complex_ci import lowest_energies

        values = lowest_energies(hamiltonian, n_up, n_down, nroots)
    else:
        values = _real_energies(hamiltonian, (n_up, n_down), nroots, symmetry)
    return values if nroots > 1 else float(values[0])


def _check_size(size: int, largest: int) -> None:
    if size > largest:
        raise UnsupportedError(
            f"the space has {size:.3g} determinants",
            where="full CI",
            expected=f"at most {largest:.3g}",
            remedy="use fewer orbitals",
        )


def _real_energies(
    hamiltonian: Hamiltonian, electrons: tuple[int, int], nroots: int, symmetry: int | None
) -> NDArray[np.float64]:
    from pyscf import fci

    n = hamiltonian.n_orbitals
    settings: dict[str, Any] = {"nroots": nroots, "verbose": 0, "max_cycle": 300, "max_space": 30}
    one, two = hamiltonian.one_body, hamiltonian.two_body
    if hamiltonian.spin_resolved:
        solver = fci.direct_uhf.FCISolver()
        h1: Any = (np.asarray(one["up"]), np.asarray(one["down"]))
        h2: Any = tuple(_square(two[key], n, like=key != "up_down") for key in ("up_up", "up_down", "down_down"))
    else:
        solver = fci.direct_spin1.FCISolver() if symmetry is None else fci.direct_spin1_symm.FCISolver()
        h1, h2 = np.asarray(one["both"]), _square(two["both"], n, like=True)
        if symmetry is not None:
            settings["orbsym"] = np.asarray(hamiltonian.orbital_symmetry)
            settings["wfnsym"] = symmetry
    solver.conv_tol = CONVERGED
    values, _ = solver.kernel(h1, h2, n, electrons, **settings)
    return np.atleast_1d(np.asarray(values, dtype=np.float64)) + hamiltonian.core_energy


def _square(two_body: TwoBody, n: int, *, like: bool) -> NDArray[np.float64]:
    """(pairs, pairs) real integrals in PySCF's fourfold form, from the packed vector."""
    n_pairs = n * (n + 1) // 2
    values = dense(two_body.values, two_body.index, "eightfold" if like else "fourfold", n, like)
    if not like:
        return values.reshape(n_pairs, n_pairs)
    square = np.zeros((n_pairs, n_pairs))
    rows, columns = np.tril_indices(n_pairs)
    square[rows, columns] = values
    square[columns, rows] = values
    return square
