"""Witness of a Molden file: its functions as the file defines them, evaluated by PySCF, or by SciPy's own formulas.

Nothing here uses qwfx's description of functions: shells go from the file to PySCF, which normalises them itself, and
the order of functions is translated by a route of its own.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.order import CARTESIAN
from qwfx.converters.molden.readings import Reading
from qwfx.converters.molden.sections import Molden
from qwfx.converters.witness import orbitals_by_pyscf
from qwfx.model import WitnessOrbitals

__all__ = ["slater_orbitals", "witness_orbitals"]

WITNESSED = ("values", "gradients", "laplacians")


def _mole(molden: Molden, cartesian: bool) -> Any:
    """All shells of the file, in its order, as a PySCF molecule of spherical or of Cartesian functions."""
    from pyscf import gto

    labels = [f"H@{i}" for i in range(len(molden.atoms))]
    basis: dict[str, list[Any]] = {label: [] for label in labels}
    for shell in molden.shells:
        rows = [[float(a), float(c)] for a, c in zip(shell.exponents, shell.coefficients, strict=True)]
        basis[labels[shell.atom]].append([shell.l, *rows])
    mol = gto.Mole()
    mol.atom = [(label, atom.position) for label, atom in zip(labels, molden.atoms, strict=True)]
    mol.unit, mol.cart, mol.verbose = "Bohr", cartesian, 0
    mol.basis = {label: shells for label, shells in basis.items() if shells}
    # Sites without functions would be given none anyway; PySCF only wants the numbers of electrons to fit.
    mol.spin = len(labels) % 2
    mol.build(False, False)
    return mol


def _set_contractions(mol: Any, order: list[int], molden: Molden, reading: Reading) -> None:
    """Put the file's coefficients into PySCF's table as the reading says, with PySCF's own norms."""
    from pyscf import gto

    for place, k in enumerate(order):
        shell = molden.shells[k]
        start, n = int(mol._bas[place, gto.PTR_COEFF]), int(mol._bas[place, gto.NPRIM_OF])
        exponents = mol._env[int(mol._bas[place, gto.PTR_EXP]) :][:n]
        # PySCF may sort primitives; both columns are matched by exponent and coefficient again here.
        rows = np.argsort(-shell.exponents, kind="stable")
        placed = np.argsort(-exponents, kind="stable")
        coefficients = np.empty(n)
        coefficients[placed] = shell.coefficients[rows]
        if not reading.factors_included:
            coefficients = coefficients * gto.gto_norm(shell.l, exponents)
        mol._env[start : start + n] = coefficients
    if reading.normalised or reading.factors_included:
        for place, k in enumerate(order):
            shell = molden.shells[k]
            start, n = int(mol._bas[place, gto.PTR_COEFF]), int(mol._bas[place, gto.NPRIM_OF])
            exponents = mol._env[int(mol._bas[place, gto.PTR_EXP]) :][:n]
            c = mol._env[start : start + n].copy()
            if reading.normalised:
                # int r^(2l+2) exp(-(a+b) r^2) dr, PySCF's gaussian_int
                radial = gto.gaussian_int(shell.l * 2 + 2, exponents[:, None] + exponents)
                c = c / np.sqrt(c @ radial @ c)
            else:
                # The printed coefficient contains the norm of x^l exp(-a r^2); PySCF's radial norm leaves 4 pi/(2l+1).
                c = c * np.sqrt(4 * np.pi / (2 * shell.l + 1))
            mol._env[start : start + n] = c


def _file_labels(l: int, cartesian: bool) -> list[Any]:
    if cartesian:
        return ["".join(sorted(word)) for word in CARTESIAN[l]]
    return ["x", "y", "z"] if l == 1 else [0] + [s * m for m in range(1, l + 1) for s in (1, -1)]


def _pyscf_labels(l: int, cartesian: bool) -> list[Any]:
    if cartesian:
        return ["".join(sorted("x" * i + "y" * j + "z" * (l - i - j))) for i in range(l, -1, -1)
                for j in range(l - i, -1, -1)]  # fmt: skip
    return ["x", "y", "z"] if l == 1 else list(range(-l, l + 1))


def witness_orbitals(
    molden: Molden, reading: Reading, rows: NDArray[np.int64], points: NDArray[np.float64]
) -> WitnessOrbitals:
    """Orbitals `rows` of the file at `points` (N, 3) bohr, by PySCF."""
    kinds = {bool(molden.cartesian.get(s.l, False)) for s in molden.shells}
    parts = []
    for cartesian in sorted(kinds):
        mol = _mole(molden, cartesian)
        order = _shell_order(mol, molden)
        _set_contractions(mol, order, molden, reading)
        matrix = _matrix(mol, order, molden, reading, cartesian, rows)
        # A few points at a time: PySCF gives ten arrays (points, functions).
        some = [orbitals_by_pyscf(mol, matrix, points[k : k + 32]) for k in range(0, len(points), 32)]
        parts.append([np.concatenate([getattr(o, name) for o in some]) for name in WITNESSED])
    return WitnessOrbitals(*(sum(kinds[1:], kinds[0]) for kinds in zip(*parts, strict=True)))


def _shell_order(mol: Any, molden: Molden) -> list[int]:
    """Shell of the file that stands at each place of PySCF's table: by atom, and as PySCF sorts within one."""
    left: dict[tuple[int, int], list[int]] = {}
    for k, shell in enumerate(molden.shells):
        left.setdefault((shell.atom, shell.l), []).append(k)
    order = []
    for place in range(mol.nbas):
        atom, l = int(mol.bas_atom(place)), int(mol.bas_angular(place))
        candidates = left[atom, l]
        exponents = np.sort(mol.bas_exp(place))
        fitting = next(k for k in candidates if _same(np.sort(molden.shells[k].exponents), exponents))
        candidates.remove(fitting)
        order.append(fitting)
    return order


def _same(a: NDArray[np.float64], b: NDArray[np.float64]) -> bool:
    return a.shape == b.shape and bool(np.array_equal(a, b))


def _matrix(
    mol: Any, order: list[int], molden: Molden, reading: Reading, cartesian: bool, rows: NDArray[np.int64]
) -> NDArray[np.float64]:
    """(functions of PySCF, orbitals): the file's coefficients at the places PySCF gives its functions."""
    sizes = [len(_file_labels(s.l, molden.cartesian.get(s.l, False))) for s in molden.shells]
    starts = np.concatenate([[0], np.cumsum(sizes)])
    matrix = np.zeros((mol.nao, len(rows)))
    norms = np.sqrt(np.diag(mol.intor("int1e_ovlp_cart"))) if cartesian else np.ones(mol.nao)
    at = 0
    for k in order:
        l = molden.shells[k].l
        theirs = _pyscf_labels(l, cartesian)
        if bool(molden.cartesian.get(l, False)) == cartesian:
            ours = _file_labels(l, cartesian)
            for f, label in enumerate(theirs):
                column = molden.orbitals.coefficients[rows, starts[k] + ours.index(label)]
                # Every component as long as xx..x: PySCF's Cartesian components share one factor.
                scale = 1.0 if reading.shared or not cartesian or l < 2 else norms[at] / norms[at + f]
                # PySCF's Cartesian functions beyond p lack the angular constant of x^l.
                constant = np.sqrt((2 * l + 1) / (4 * np.pi)) if cartesian and l > 1 else 1.0
                if reading.reversed_signs and l > 2 and not cartesian and abs(label) in (3, 4):
                    constant = -constant
                matrix[at + f] = column * scale * constant
        at += len(theirs)
    return matrix


def _slater_norm(powers: tuple[int, int, int], n: int, exponent: float) -> float:
    """Factor of unit norm, by ``int x^2i y^2j z^2k dOmega = 2 G(i+1/2) G(j+1/2) G(k+1/2) / G(i+j+k+3/2)``."""
    from scipy.special import gamma

    degree = 2 * (sum(powers) + n) + 3
    angular = 2 * np.prod(gamma(np.array(powers) + 0.5)) / gamma(sum(powers) + 1.5)
    return float((angular * gamma(degree) / (2 * exponent) ** degree) ** -0.5)


def slater_orbitals(
    molden: Molden, normalised: bool, rows: NDArray[np.int64], points: NDArray[np.float64]
) -> WitnessOrbitals:
    """Orbitals over ``norm x^i y^j z^k r^n exp(-a r)`` at `points`, line by line as the file has them.

    With u = x^i y^j z^k r^n exp(-a r): ``d/dx ln u = i/x + (n/r - a) x/r`` and
    ``lap u / u = sum_x (d/dx ln u)^2 + sum_x d2/dx2 ln u`` with
    ``sum_x d2/dx2 ln u = -i/x^2 - j/y^2 - k/z^2 + n/r^2 - 2 a/r``; no coordinate of a point is that of a nucleus.
    """
    n_points = len(points)
    values = np.empty((len(molden.slater), 5, n_points))
    for f, function in enumerate(molden.slater):
        x = points - molden.atoms[function.atom].position
        r = np.sqrt((x**2).sum(axis=1))
        powers = np.array(function.powers)
        norm = _slater_norm(function.powers, function.n, function.exponent) if normalised else function.norm
        u = norm * np.prod(x**powers, axis=1) * r**function.n * np.exp(-function.exponent * r)
        slope = powers / x + ((function.n / r - function.exponent) / r)[:, None] * x
        curvature = -(powers / x**2).sum(axis=1) + function.n / r**2 - 2 * function.exponent / r
        values[f, 0] = u
        values[f, 1:4] = (u[:, None] * slope).T
        values[f, 4] = u * ((slope**2).sum(axis=1) + curvature)
    orbitals = np.einsum("mf,fcn->cnm", molden.orbitals.coefficients[rows], values)
    return WitnessOrbitals(orbitals[0], np.moveaxis(orbitals[1:4], 0, -1), orbitals[4])
