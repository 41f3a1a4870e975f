"""Point groups: a model holds the irreps of its orbitals but not the group, which PySCF needs to give them back."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from numpy.typing import NDArray

__all__ = ["restore_symmetry"]

_SUBGROUPS = ("D2h", "C2v", "C2h", "D2", "Cs", "C2", "Ci")


def restore_symmetry(mole: Any, coefficients: Sequence[NDArray[Any]], irreps: Sequence[tuple[str, ...] | None]) -> bool:
    """Switch symmetry on in `mole` if some point group gives the orbitals (AO, M) the irreps that are stored.

    The full group of the molecule is tried first, then its subgroups. Returns whether one fits; if none does, `mole` is
    left without symmetry.
    """
    from pyscf import symm
    from pyscf.lib.exceptions import PointGroupSymmetryError

    if any(labels is None for labels in irreps):
        return False
    for group in (True, *_SUBGROUPS):
        mole.symmetry = group
        try:
            mole._build_symmetry()
            found = [
                tuple(symm.label_orb_symm(mole, mole.irrep_name, mole.symm_orb, c, tol=1e-6)) for c in coefficients
            ]
        except (PointGroupSymmetryError, ValueError, KeyError, AssertionError):
            continue  # not a subgroup of this molecule, or the orbitals mix its irreps
        if all(a == b for a, b in zip(found, irreps, strict=True)):
            return True
    mole.symmetry = False
    mole.groupname = mole.topgroup = "C1"
    mole.symm_orb = mole.irrep_id = mole.irrep_name = None
    return False
