"""Molden files for tests, written here by other code than the converter's: text by text, from PySCF molecules."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

CORPUS = Path(__file__).parent / "converters" / "molden" / "corpus"
WATER = CORPUS / "C/a_h2o_rhf_ccpvdz/case.molden"
CARTESIAN_WATER = CORPUS / "C/b_h2o_rhf_631gs_cart/case.molden"

_CARTESIAN = {
    0: [""],
    1: ["x", "y", "z"],
    2: "xx yy zz xy xz yz".split(),
    3: "xxx yyy zzz xyy xxy xxz xzz yzz yyz xyz".split(),
    4: "xxxx yyyy zzzz xxxy xxxz yyyx yyyz zzzx zzzy xxyy xxzz yyzz xxyz yyxz zzxy".split(),
}


def same_functions(l: int, cartesian: bool) -> list[int]:
    """For each function of a Molden shell its place in PySCF's shell."""
    if cartesian:
        theirs = ["x" * i + "y" * j + "z" * (l - i - j) for i in range(l, -1, -1) for j in range(l - i, -1, -1)]
        return [theirs.index("".join(sorted(word))) for word in _CARTESIAN[l]]
    if l == 1:
        return [0, 1, 2]
    return [l] + [l + sign * m for m in range(1, l + 1) for sign in (1, -1)]


def orthonormal_orbitals(mol: Any, seed: int = 1) -> NDArray[np.float64]:
    """(F, F) random orthonormal orbitals of a PySCF molecule."""
    values, vectors = np.linalg.eigh(mol.intor("int1e_ovlp"))
    rotation, _ = np.linalg.qr(np.random.default_rng(seed).normal(size=(len(values), len(values))))
    return np.asarray((vectors / np.sqrt(values)) @ rotation)


def molden_text(
    mol: Any,
    orbitals: NDArray[np.float64],
    *,
    coefficients: Callable[[int, NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]],
    lengths: Callable[[int, NDArray[np.float64]], NDArray[np.float64]],
    flags: str,
    signs: Callable[[int], NDArray[np.float64]] | None = None,
    digits: int = 16,
) -> str:
    """A file of PySCF orbitals (F, M) in a dialect.

    Parameters
    ----------
    coefficients : (l, exponents, PySCF's coefficients of a normalised contraction over normalised primitives) -> what
        is printed.
    lengths : (l, PySCF's norms of the functions of a shell in Molden order) -> how long the file's functions are, in
        terms of PySCF's.
    """
    from pyscf.gto.mole import gto_norm

    out = ["[Molden Format]", "[Atoms] AU"]
    for i in range(mol.natm):
        x, y, z = mol.atom_coord(i)
        out.append(f"{mol.atom_pure_symbol(i)} {i + 1} {mol.atom_charge(i)} {x:.16g} {y:.16g} {z:.16g}")
    out.append("[GTO]")
    columns, scale = [], []
    norms = np.sqrt(mol.intor("int1e_ovlp").diagonal())
    for i in range(mol.natm):
        out.append(f"{i + 1} 0")
        for shell in np.flatnonzero(mol._bas[:, 0] == i):
            l, exponents = mol.bas_angular(shell), mol.bas_exp(shell)
            start = int(mol.ao_loc_nr()[shell])
            size = (l + 1) * (l + 2) // 2 if mol.cart else 2 * l + 1
            for k, column in enumerate(mol._libcint_ctr_coeff(shell).T):
                own = start + k * size + np.array(same_functions(l, mol.cart))
                printed = coefficients(l, exponents, column / gto_norm(l, exponents))
                out.append(f"{'spdfgh'[l]} {len(exponents)} 1.00")
                out += [f"{a:.{digits}e} {c:.{digits}e}" for a, c in zip(exponents, printed, strict=True)]
                columns.append(own)
                part = 1.0 / lengths(l, norms[own])
                scale.append(part * signs(l) if signs else part)
        out.append("")
    out += [flags, "[MO]"]
    order, factors = np.concatenate(columns), np.concatenate(scale)
    for p, orbital in enumerate(orbitals.T):
        occupation = 2.0 if p < mol.nelectron // 2 else 0.0
        out += [f" Sym= {p + 1}a", f" Ene= {p - 9.5}", " Spin= Alpha", f" Occup= {occupation}"]
        out += [f"{k + 1:4d} {c:.{digits}e}" for k, c in enumerate(orbital[order] * factors)]
    return "\n".join(out) + "\n"
