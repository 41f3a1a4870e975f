"""A PySCF molecule as model: nuclei, core potentials, basis, and the order of functions.

What PySCF's functions are (its integral library's manual; checked in the tests by value, function by function, up to
l = 6): the stored contraction coefficients contain the normalisation of the primitives and of the contraction, and

- spherical shells are ``R(r) S_lm`` with our S_lm, m ascending, except that l = 1 is ordered x, y, z;
- Cartesian shells are ``R(r) x^i y^j z^k`` in our order, times ``sqrt((2l+1)/4pi)`` where l is 0 or 1.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import UnsupportedError
from qwfx.model import Basis, Potentials, System

__all__ = ["atomic_numbers", "basis_of", "check_molecule", "element_of", "function_order", "potentials_of", "system_of"]

# Columns of PySCF's integer tables (libcint's manual): the same for shells and core potential terms.
_ATOM, _ANGULAR, _N_PRIMITIVES, _RADIAL_POWER, _SPIN_ORBIT, _EXPONENTS, _COEFFICIENTS = 0, 1, 2, 3, 4, 5, 6
_GAUSSIAN_NUCLEUS = 2


def check_molecule(mol: Any) -> None:
    """Raise UnsupportedError for what version 1.0 of the format cannot hold or PySCF cannot give."""
    if hasattr(mol, "lattice_vectors"):
        raise UnsupportedError(
            "the calculation is periodic",
            where="PySCF object",
            expected="a molecule (pyscf.gto.Mole)",
            remedy="periodic calculations cannot be converted by this version",
        )
    if getattr(mol, "_pseudo", None):
        raise UnsupportedError(
            "the molecule has separable pseudopotentials (mol.pseudo)",
            where="PySCF object",
            expected="all electrons or semi-local core potentials (mol.ecp)",
            remedy="use a semi-local core potential with the same core",
        )
    if len(mol._atm) and np.any(mol._atm[:, 2] == _GAUSSIAN_NUCLEUS):
        raise UnsupportedError(
            "the molecule has nuclei of finite size (mol.nucmod)",
            where="PySCF object",
            expected="point nuclei",
            remedy="repeat the calculation with point nuclei",
        )
    if mol.omega:
        raise UnsupportedError(
            f"the molecule has a range-separated electron repulsion (mol.omega = {mol.omega:g})",
            where="PySCF object",
            expected="the full Coulomb repulsion",
            remedy="reset the range separation before the calculation (mol.omega = 0)",
        )


def element_of(symbol: str) -> tuple[int, bool]:
    """Atomic number behind a PySCF symbol such as ``C1`` or ``GHOST-O`` (0 if there is none), and if it is a ghost."""
    from pyscf.data.elements import charge, is_ghost_atom

    ghost = bool(is_ghost_atom(symbol))
    if ghost:
        symbol = symbol[5:] if symbol.upper().startswith("GHOST") else symbol[1:]
    letters = "".join(filter(str.isalpha, symbol))
    return (int(charge(letters)) if letters else 0), ghost


def atomic_numbers(mol: Any) -> NDArray[np.int32]:
    """(A) element of each centre; of the underlying element for a ghost, 0 for a ghost without one."""
    return np.array([element_of(mol.atom_symbol(i))[0] for i in range(mol.natm)], dtype=np.int32)


def system_of(mol: Any) -> System:
    """Nuclei and electrons of a built ``Mole``. Ghost atoms keep their element and have effective charge 0."""
    n_up, n_down = mol.nelec
    return System(
        n_up=int(n_up),
        n_down=int(n_down),
        labels=tuple(mol.atom_symbol(i) for i in range(mol.natm)),
        atomic_numbers=atomic_numbers(mol),
        effective_charges=np.asarray(mol.atom_charges(), dtype=np.float64),
        positions=np.asarray(mol.atom_coords(), dtype=np.float64).reshape(-1, 3),
    )


def potentials_of(mol: Any) -> tuple[Potentials | None, tuple[str, ...]]:
    """Scalar core potentials as a flat table, and notes on what is left out (spin-orbit terms).

    PySCF's table is of terms ``c r^(n-2) exp(-a r^2)``; the stored power is n - 2.
    """
    center, channel, power, exponents, coefficients = [], [], [], [], []
    notes: tuple[str, ...] = ()
    for row in mol._ecpbas:
        if row[_SPIN_ORBIT] == 1:
            notes = ("the spin-orbit terms of the core potentials are not carried",)
            continue
        n = int(row[_N_PRIMITIVES])
        center += [int(row[_ATOM])] * n
        channel += [int(row[_ANGULAR])] * n
        power += [int(row[_RADIAL_POWER]) - 2] * n
        exponents.append(mol._env[row[_EXPONENTS] : row[_EXPONENTS] + n])
        coefficients.append(mol._env[row[_COEFFICIENTS] : row[_COEFFICIENTS] + n])
    if not center:
        return None, notes
    potentials = Potentials(
        center=np.array(center, dtype=np.int32),
        channel=np.array(channel, dtype=np.int32),
        power=np.array(power, dtype=np.int32),
        exponent=np.concatenate(exponents).astype(np.float64),
        coefficient=np.concatenate(coefficients).astype(np.float64),
    )
    return potentials, notes


def basis_of(mol: Any) -> Basis:
    """The functions of a built ``Mole``, literal: a general contraction becomes one shell per contraction.

    Spherical molecules give solid shells, Cartesian ones monomial shells. Primitives whose coefficient is exactly
    zero in a contraction are left out of its shell.
    """
    center, angular, sizes, exponents, coefficients = [], [], [], [], []
    for shell in range(mol.nbas):
        l = mol.bas_angular(shell)
        shell_exponents = mol.bas_exp(shell)
        contractions = mol._libcint_ctr_coeff(shell)
        if mol.cart and l < 2:
            contractions = contractions * np.sqrt((2 * l + 1) / (4 * np.pi))
        for column in contractions.T:
            used = column != 0.0
            if not used.any():
                used[0] = True  # a function that is zero keeps its place in the order
            center.append(mol.bas_atom(shell))
            angular.append(l)
            sizes.append(int(used.sum()))
            exponents.append(shell_exponents[used])
            coefficients.append(column[used])
    return Basis(
        radial="gaussian",
        shell_center=np.array(center, dtype=np.int32),
        shell_l=np.array(angular, dtype=np.int32),
        shell_monomial=np.full(len(center), int(mol.cart), dtype=np.int8),
        primitive_start=np.concatenate([[0], np.cumsum(sizes, dtype=np.int64)]).astype(np.int64),
        exponents=np.concatenate([np.zeros(0), *exponents]),
        coefficients=np.concatenate([np.zeros(0), *coefficients]),
    )


def function_order(mol: Any) -> NDArray[np.int64]:
    """(F) for each function of `basis_of` its position in PySCF's order: ``ours = theirs[order]``."""
    order: list[int] = []
    for shell in range(mol.nbas):
        l = mol.bas_angular(shell)
        size = (l + 1) * (l + 2) // 2 if mol.cart else 2 * l + 1
        within = [1, 2, 0] if l == 1 and not mol.cart else list(range(size))
        for _ in range(mol.bas_nctr(shell)):
            start = len(order)
            order += [start + k for k in within]
    return np.array(order, dtype=np.int64)
