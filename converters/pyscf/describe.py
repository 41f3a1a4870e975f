"""What kind of calculation a PySCF object is, and what it would take to repeat it."""

from __future__ import annotations

from typing import Any

from qwfx.converters.pyscf.methods import DEFAULT_GRID_LEVEL, MeanField
from qwfx.errors import ConversionError, UnsupportedError

__all__ = ["ORBITAL_QUANTITIES", "describe_method", "reference_details"]

ORBITAL_QUANTITIES = ("coeff", "occ", "energy")
"""What PySCF's mean-field objects hold of the orbitals, in attributes that begin with ``mo_``."""


def describe_method(mf: Any) -> tuple[str, list[str]]:
    """Text of the method (see `methods`) of a mean-field object, and notes on what the text does not hold.

    Raises UnsupportedError for kinds that the format cannot hold, ConversionError for what is no mean-field object.
    """
    from pyscf import dft

    _refuse(mf)
    settings: dict[str, Any] = {}
    unrecorded: list[str] = []
    functional = None
    if isinstance(mf, dft.rks.KohnShamDFT):
        functional = "".join(str(mf.xc).split())
        settings = _grid(mf, unrecorded)
        if getattr(mf, "nlc", ""):
            unrecorded.append(f"non-local correlation {mf.nlc} apart from the functional")
    if getattr(mf, "disp", None):
        settings["dispersion"] = str(mf.disp)
    settings |= _fitting(mf, functional, unrecorded)
    method = MeanField(
        kind=_kind(mf),
        functional=functional,
        scalar_x2c=_is_scalar_x2c(mf),
        unrecorded=tuple(unrecorded),
        **settings,
    )
    notes = [f"{what}: this is not recorded in full, so the energy cannot be recomputed" for what in unrecorded]
    return str(method), notes


def reference_details(mf: Any) -> str:
    """What of a mean-field reference enters the Hamiltonian of a later calculation, as text to append to its method."""
    unrecorded: list[str] = []
    settings = _fitting(mf, None, unrecorded)
    method = MeanField(kind="R", scalar_x2c=_is_scalar_x2c(mf), unrecorded=tuple(unrecorded), **settings)
    return str(method)[len("RHF") :]


def _kind(mf: Any) -> str:
    from pyscf import scf

    if isinstance(mf, scf.uhf.UHF):
        return "U"
    return "RO" if isinstance(mf, scf.rohf.ROHF) else "R"


def _is_scalar_x2c(mf: Any) -> bool:
    from pyscf.x2c.sfx2c1e import SFX2C1E_SCF

    return isinstance(mf, SFX2C1E_SCF) and bool(mf.with_x2c)


def _refuse(mf: Any) -> None:
    from pyscf import qmmm, scf
    from pyscf.solvent._attach_solvent import _Solvation
    from pyscf.x2c import x2c

    where = f"PySCF object of class {type(mf).__name__}"
    if hasattr(getattr(mf, "mol", None), "lattice_vectors") or hasattr(mf, "kpts"):
        problem, remedy = "the calculation is periodic", "convert a molecular calculation"
    elif isinstance(mf, (scf.ghf.GHF, scf.dhf.DHF, x2c.SCF, x2c.X2C1E_GSCF)):
        problem, remedy = "the orbitals mix spin up and spin down", "use a calculation of one spin an orbital: RHF, UHF"
    elif not isinstance(mf, scf.hf.SCF):
        raise ConversionError(
            "the object is no mean-field calculation",
            where=where,
            expected="RHF, ROHF, UHF, RKS, ROKS or UKS, or a Mole",
            remedy="give the mean-field object, or a Mole with mo_coeff and mo_occ",
        )
    elif isinstance(mf, _Solvation):
        problem, remedy = "the calculation is in a solvent model", "repeat it in the gas phase"
    elif isinstance(mf, qmmm.itrf.QMMM):
        problem, remedy = "the calculation is in a field of external charges", "repeat it without them"
    elif "get_hcore" in vars(mf) or "get_ovlp" in vars(mf):
        problem = "the one-electron Hamiltonian was replaced by the user"
        remedy = "a model Hamiltonian can be converted through an FCIDUMP file"
    else:
        return
    raise UnsupportedError(
        problem, where=where, expected="a molecule in vacuum, one spin for each orbital", remedy=remedy
    )


def _grid(mf: Any, unrecorded: list[str]) -> dict[str, Any]:
    """What differs from PySCF's default grid, as far as the text of a method can hold it."""
    grids = mf.grids
    plain = type(grids)(mf.mol)
    for name in ("prune", "radi_method", "radii_adjust", "becke_scheme"):
        if getattr(grids, name) is not getattr(plain, name) and getattr(grids, name) != getattr(plain, name):
            unrecorded.append(f"grid with its own {name}")
    if not grids.atom_grid:
        return {} if grids.level == DEFAULT_GRID_LEVEL else {"grid_level": int(grids.level)}
    if isinstance(grids.atom_grid, (tuple, list)) and len(grids.atom_grid) == 2:
        return {"grid": (int(grids.atom_grid[0]), int(grids.atom_grid[1]))}
    unrecorded.append("grid that differs from atom to atom")
    return {}


def _fitting(mf: Any, functional: str | None, unrecorded: list[str]) -> dict[str, Any]:
    """Names of the auxiliary bases of a density-fitted calculation."""
    fitting = getattr(mf, "with_df", None)
    if fitting is None:
        return {}
    from pyscf.df.addons import make_auxbasis

    symbols = {mf.mol.atom_symbol(i) for i in range(mf.mol.natm)}
    names = fitting.auxbasis
    if names is None:
        names = make_auxbasis(mf.mol, xc=functional or "HF")
    if isinstance(names, str):
        names = dict.fromkeys(symbols, names)
    names = names if isinstance(names, dict) else {}
    pure = {symbol: "".join(filter(str.isalpha, symbol)) for symbol in symbols}
    found = {symbol: names.get(symbol, names.get(pure[symbol], names.get("default"))) for symbol in symbols}
    if not all(isinstance(name, str) for name in found.values()):
        unrecorded.append("density fitting with an auxiliary basis without a name")
        return {}
    return {
        "auxiliary": {symbol: str(found[symbol]) for symbol in sorted(symbols)},
        "only_coulomb": bool(getattr(mf, "only_dfj", False)),
    }
