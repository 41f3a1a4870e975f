"""Small calculations that several tests share, each run once."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from pyscf_cases import HYDROXYL, METHYLENE, WATER, molecule


def _calculations() -> dict[str, Callable[[], Any]]:
    from pyscf import dft, scf

    def grid_one(mf: Any) -> Any:
        mf.grids.level = 1
        return mf

    def own_grid(mf: Any) -> Any:
        mf.grids.atom_grid = (30, 110)
        return mf

    hydrogen_iodide = {"atom": "I 0 0 0; H 0.1 0.2 1.6", "basis": "def2svp", "ecp": {"I": "def2svp"}}
    return {
        "rhf": lambda: scf.RHF(molecule(atom=WATER, basis="cc-pvdz")),
        "rhf-cartesian": lambda: scf.RHF(molecule(atom=WATER, basis="6-31g**", cart=True)),
        "rohf": lambda: scf.ROHF(molecule(atom=METHYLENE, basis="6-31g*", spin=2)),
        "uhf": lambda: scf.UHF(molecule(atom=HYDROXYL, basis="6-31g*", spin=1)),
        "uhf-cartesian": lambda: scf.UHF(molecule(atom=HYDROXYL, basis="6-31g*", spin=1, cart=True)),
        "rks": lambda: grid_one(dft.RKS(molecule(atom=WATER, basis="6-31g*"), xc="b3lyp")),
        "roks": lambda: own_grid(dft.ROKS(molecule(atom=METHYLENE, basis="6-31g", spin=2), xc="pbe,pbe")),
        "uks": lambda: dft.UKS(molecule(atom=HYDROXYL, basis="sto-3g", spin=1), xc="lda, vwn"),
        "general-contraction": lambda: scf.RHF(molecule(atom="He 0 0 0; H 0.1 0.2 1.5", basis="ano", charge=1)),
        "core-potential": lambda: scf.RHF(molecule(**hydrogen_iodide)),
        "ghost": lambda: scf.RHF(molecule(atom=WATER + "; GHOST-N 0.3 1 1.2", basis="6-31g*")),
        "symmetry": lambda: scf.RHF(molecule(atom=METHYLENE, basis="6-31g*", symmetry=True)),
        "density-fitting": lambda: scf.RHF(molecule(atom=WATER, basis="6-31g*")).density_fit("weigend"),
        "coulomb-fitting": lambda: scf.RHF(molecule(atom=WATER, basis="cc-pvdz")).density_fit(only_dfj=True),
        "scalar-x2c": lambda: scf.RHF(molecule(atom=WATER, basis="6-31g*")).sfx2c1e(),
        "anion-no-down": lambda: scf.UHF(molecule(atom="H 0 0 0", basis="cc-pvdz", spin=1)),
    }


@pytest.fixture(scope="session")
def calculation() -> Callable[[str], Any]:
    """A converged calculation by name."""
    makers = _calculations()
    done: dict[str, Any] = {}

    def get(name: str) -> Any:
        if name not in done:
            mf = makers[name]()
            mf.conv_tol = 1e-10
            mf.chkfile = None
            getattr(mf, "_chkfile", None) and mf._chkfile.close()
            mf.kernel()
            done[name] = mf
        return done[name]

    return get
