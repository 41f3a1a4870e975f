"""CI vectors of checkpoints, which PySCF writes with ``mc.chk_ci = True``."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.ci_vectors import expansion_from_ci
from qwfx.errors import ConversionError
from qwfx.model import Expansion

__all__ = ["expansion_of_checkpoint"]

SAME_DENSITY = 1e-6  # electrons


def expansion_of_checkpoint(
    content: dict[str, Any], core: int, active: int, n_orbitals: int, threshold: float, notes: list[str]
) -> Expansion | None:
    """The expansion of the vectors that a checkpoint holds, if they belong to its orbitals; None and a note else.

    Orbitals and vectors are stored apart; that they belong together is seen from the density matrix of the vectors,
    averaged over the states, which must be the stored one.
    """
    from pyscf import fci

    if "ci" not in content:
        notes.append("the checkpoint has no CI vectors (PySCF writes them with mc.chk_ci = True): no expansion")
        return None
    electrons = np.asarray(content.get("nelecas", ())).ravel()
    stored = content["ci"]
    if isinstance(stored, list) and len({np.shape(state) for state in stored}) != 1:
        notes.append("the states of the checkpoint are of several spins, which one expansion cannot hold: not used")
        return None
    vectors = np.asarray(stored)
    density = np.asarray(content.get("casdm1", ()))
    if len(electrons) != 2 or vectors.dtype.kind not in "fc" or density.shape != (active, active):
        notes.append("the CI vectors of the checkpoint are of another kind than those of a full CI: not used")
        return None
    counts = (int(electrons[0]), int(electrons[1]))
    try:
        expansion = expansion_from_ci(
            vectors, n_core=core, n_active=active, electrons=counts, n_orbitals=(n_orbitals, n_orbitals),
            threshold=threshold,
        )  # fmt: skip
    except ConversionError as error:
        if error.where == "ci-threshold":
            raise
        notes.append(f"the CI vectors of the checkpoint do not fit its active space ({error.found}): not used")
        return None
    states: list[NDArray[Any]] = list(vectors) if vectors.ndim == 3 else [vectors]
    own = [fci.direct_spin1.make_rdm1(state, active, counts) for state in states]
    if len(own) == 1 and np.abs(own[0] - density).max(initial=0.0) > SAME_DENSITY:
        notes.append("the CI vectors of the checkpoint are not those of its density matrix: not used")
        return None
    if len(own) > 1:
        # Weights of the average are not stored; the stored matrix must be some average.
        basis = np.array([matrix.ravel() for matrix in own]).T
        weights, *_ = np.linalg.lstsq(basis, density.ravel(), rcond=None)
        if np.abs(basis @ weights - density.ravel()).max(initial=0.0) > SAME_DENSITY:
            notes.append("the CI vectors of the checkpoint are not those of its density matrix: not used")
            return None
    return expansion
