"""Functions and orbitals at points, one thread each: PySCF's ``eval_gto`` and qwfx; orbitals and bare matrix products.

PySCF makes ten components (value, gradient, second derivatives), of which a Laplacian needs the sum of three; qwfx
makes five (value, gradient, Laplacian). PySCF's screening is switched off by a table that marks every shell as needed.
"""

from __future__ import annotations

from bench.harness import one_thread, side_by_side

one_thread()

from functools import partial  # noqa: E402

import numpy as np  # noqa: E402
from pyscf import gto, lib  # noqa: E402

from qwfx import kernels  # noqa: E402
from qwfx.converters.pyscf.from_mole import basis_of, function_order  # noqa: E402

N_POINTS = 20480
N_ORBITALS = 100
PYSCF_BLOCK = 56  # points to one row of PySCF's table of needed shells


def chain(basis: str) -> gto.Mole:
    """30 carbon atoms in a bent chain."""
    atoms = [("C", (1.4 * i, 0.7 * (i % 2), 0.3 * (i % 3))) for i in range(30)]
    return gto.M(atom=atoms, basis=basis, verbose=0, unit="A")


def points_about(mol: gto.Mole) -> np.ndarray:
    """Points scattered about the atoms."""
    rng = np.random.default_rng(0)
    return mol.atom_coords()[rng.integers(30, size=N_POINTS)] + rng.normal(size=(N_POINTS, 3)) * 1.5


def functions(name: str, wanted: str) -> None:
    """Value, gradient and Laplacian of every function."""
    mol = chain(name)
    points, basis, centers = points_about(mol), basis_of(mol), mol.atom_coords()
    all_needed = np.ones((-(-N_POINTS // PYSCF_BLOCK), mol.nbas), dtype=np.uint8)

    def theirs(out: np.ndarray | None = None) -> np.ndarray:
        return mol.eval_gto("GTOval_sph_deriv2", points, non0tab=all_needed, out=out)

    def ours(out: np.ndarray | None = None) -> np.ndarray:
        return kernels.evaluate_functions(basis, centers, points, threads=1, out=out)

    a, b = theirs(), ours()
    a = np.concatenate([a[:4], (a[4] + a[7] + a[9])[None]])[:, :, function_order(mol)]
    apart = (np.abs(a - b).max(axis=(1, 2)) / np.abs(a).max(axis=(1, 2))).max()
    del a, b
    print(f"{name}: {basis.n_functions} functions, {N_POINTS} points; they agree to {apart:.1e} of the largest term")
    memory, half = np.empty((10, N_POINTS, basis.n_functions)), np.empty((5, basis.n_functions, N_POINTS))
    side_by_side(
        "value + gradient + Laplacian, both into memory they are given",
        {"PySCF": partial(theirs, memory), "qwfx": partial(ours, half)},
        wanted=wanted,
    )
    del memory, half
    side_by_side(
        "the same, both into fresh memory (the kernel's page clearing included)", {"PySCF": theirs, "qwfx": ours}
    )


def orbitals() -> None:
    """100 orbitals over 900 functions against the five matrix products alone."""
    mol = chain("cc-pvtz")
    points, basis, centers = points_about(mol), basis_of(mol), mol.atom_coords()
    matrix = np.random.default_rng(1).normal(size=(N_ORBITALS, basis.n_functions))
    values = kernels.evaluate_functions(basis, centers, points, threads=1)
    ready = [np.ascontiguousarray(component) for component in values]
    del values
    ratios = side_by_side(
        f"{N_ORBITALS} orbitals",
        {
            "qwfx orbitals": lambda: kernels.evaluate_orbitals(basis, centers, matrix, points, threads=1),
            "five products": lambda: [component @ matrix.T for component in ready],
        },
        wanted="at most 1.5",
    )
    assert ratios


if __name__ == "__main__":
    lib.num_threads(1)
    kernels.prepare()
    functions("cc-pvtz", wanted="at least 6, target 8")
    functions("cc-pvqz", wanted="at least 5")
    orbitals()
