"""Witness values through PySCF: an evaluation of orbitals in which no code of qwfx takes part."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Wavefunction, Witness, WitnessOrbitals
from qwfx.points import WITNESS_SEED, probe_points

__all__ = ["WITNESS_POINTS", "orbitals_by_pyscf", "witness_points", "witness_through_pyscf"]

WITNESS_POINTS = 48


def witness_points(positions: NDArray[np.float64]) -> NDArray[np.float64]:
    """The points of a witness, (N, 3) bohr: at least three near every nucleus of a small molecule."""
    n_points = max(WITNESS_POINTS, min(3 * 3 * len(positions), 4 * WITNESS_POINTS))
    return probe_points(positions, n_points, np.random.default_rng(WITNESS_SEED))


def orbitals_by_pyscf(mol: Any, coefficients: NDArray[Any], points: NDArray[np.float64]) -> WitnessOrbitals:
    """Values, gradients and Laplacians of orbitals by PySCF's own ``eval_gto``.

    Parameters
    ----------
    mol : pyscf.gto.Mole, built.
    coefficients : (F, M) in PySCF's order of functions, as ``mf.mo_coeff``.
    points : (N, 3) bohr.
    """
    derivative = mol.eval_gto("GTOval_cart_deriv2" if mol.cart else "GTOval_sph_deriv2", points)
    value, *first = (derivative[i] @ coefficients for i in range(4))
    # Components of the second derivatives: xx, xy, xz, yy, yz, zz.
    laplacian = (derivative[4] + derivative[7] + derivative[9]) @ coefficients
    return WitnessOrbitals(values=value, gradients=np.stack(first, axis=-1), laplacians=laplacian)


def witness_through_pyscf(wavefunction: Wavefunction) -> Witness:
    """The witness of a model: its functions are handed to PySCF (`qwfx.converters.pyscf.translate`), which evaluates.

    It is marked as not independent, because qwfx told PySCF what the functions are: a misreading of the source would
    be in both. A converter whose source PySCF can read by itself should use `orbitals_by_pyscf`.

    Raises UnsupportedError for what PySCF has no functions for, such as Slater bases.
    """
    import pyscf

    from qwfx.converters.pyscf.to_mole import translate

    translation = translate(wavefunction)
    points = witness_points(wavefunction.system.positions)
    return Witness(
        evaluator="pyscf",
        evaluator_version=pyscf.__version__,
        independent=False,
        points=points,
        orbitals={
            name: orbitals_by_pyscf(translation.mole, translation.coefficients(s.coefficients), points)
            for name, s in wavefunction.orbitals.items()
        },
    )
