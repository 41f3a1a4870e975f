"""Molecules that the tests of the PySCF converter share."""

from __future__ import annotations

from typing import Any

from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES

WATER = "O 0.02 -0.01 0.12; H 0.01 0.76 -0.47; H -0.03 -0.74 -0.51"
METHYLENE = "C 0 0 0.1; H 0 0.99 -0.25; H 0 -0.99 -0.25"
HYDROXYL = "O 0 0 0; H 0.1 0.3 0.92"


def molecule(**settings: Any) -> Any:
    """A built molecule that prints nothing."""
    from pyscf import gto

    return gto.M(verbose=0, parse_arg=False, dump_input=False, **settings)


def orbital_energies(mf: Any) -> Any:
    """The orbital energies of a mean-field object."""
    return getattr(mf, f"mo_{ORBITAL_QUANTITIES[2]}")
