"""The molecule of a PySCF checkpoint, without running what the file says.

PySCF stores the input of a molecule as Python text and evaluates it on loading. A file from elsewhere could carry any
program there, so that text is left aside: the tables that PySCF derived from it are in the file too, and they are
checked before PySCF's compiled integrals, which do not check, get to see them.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import ConversionError, UnsupportedError

__all__ = ["molecule_from_text"]

_KEPT = (
    "_atm", "_bas", "_env", "_ecpbas", "_atom", "_basis", "_ecp", "_pseudo", "_nelectron", "cart", "charge", "spin",
    "symmetry", "symmetry_subgroup", "groupname", "topgroup", "_symm_orig", "_symm_axes",
)  # fmt: skip
_LARGEST_L = 12
_REMEDY = "check that the file is complete, or write the checkpoint again with PySCF"


def molecule_from_text(text: str | bytes, where: str) -> Any:
    """The ``Mole`` of a checkpoint's ``mol`` entry.

    Raises ConversionError if the entry is damaged or older than PySCF 1.6, UnsupportedError for periodic systems.
    """
    try:
        entries = json.loads(text)
    except (ValueError, TypeError) as error:
        raise ConversionError(
            f"the molecule cannot be read ({error})",
            where=where,
            expected="the JSON text that PySCF writes",
            remedy="load and save the checkpoint with a PySCF of today",
        ) from error
    if not isinstance(entries, dict) or any(name not in entries for name in ("_atm", "_bas", "_env", "_atom")):
        raise ConversionError(
            "the molecule lacks its tables of atoms and shells", where=where, expected="a built Mole", remedy=_REMEDY
        )
    if "a" in entries or "mesh" in entries:
        raise UnsupportedError(
            "the calculation is periodic",
            where=where,
            expected="a molecule",
            remedy="periodic calculations cannot be converted by this version",
        )
    return _load({name: entries[name] for name in _KEPT if name in entries}, where)


def _load(entries: dict[str, Any], where: str) -> Any:
    from pyscf import gto

    entries = {**entries, "verbose": 0, "_built": True}
    try:
        tables = {
            name: np.array(entries[name], dtype=np.int32).reshape(-1, columns)
            for name, columns in (("_atm", 6), ("_bas", 8), ("_ecpbas", 8))
            if name in entries
        }
        environment = np.array(entries["_env"], dtype=np.float64)
        _check_tables(tables, environment, len(entries["_atom"]), where)
        mol = gto.loads(json.dumps({**entries, "atom": "[]", "basis": "{}", "ecp": "{}", "pseudo": "None"}))
        mol.unit = "Bohr"
        mol.atom, mol.basis, mol.ecp = mol._atom, mol._basis, mol._ecp
        mol.nelec  # noqa: B018 - raises if charge and spin do not go together
        [mol.atom_pure_symbol(i) for i in range(mol.natm)]
    except ConversionError:
        raise
    except Exception as error:  # PySCF fails in any way on damaged tables
        raise ConversionError(
            f"the molecule is damaged ({type(error).__name__}: {error})",
            where=where,
            expected="the tables of a built Mole",
            remedy=_REMEDY,
        ) from error
    return mol


def _check_tables(tables: dict[str, NDArray[np.int32]], env: NDArray[np.float64], n_symbols: int, where: str) -> None:
    """Every pointer must lie within the numbers of the file. Columns as in libcint's manual."""
    atoms, shells = tables["_atm"], tables["_bas"]
    potentials = tables.get("_ecpbas", np.zeros((0, 8), dtype=np.int32))
    n_env = len(env)

    def inside(start: NDArray[Any], length: NDArray[Any] | int) -> bool:
        end = start.astype(np.int64) + length
        return bool(np.all((start >= 0) & (length >= 0) & (end <= n_env)))

    counts = shells[:, 2].astype(np.int64), shells[:, 3].astype(np.int64)
    problems = {
        "numbers that are not finite": not np.isfinite(env).all(),
        "another number of atoms than of symbols": len(atoms) != n_symbols,
        "an atom whose position lies outside the file": not inside(atoms[:, 1], 3),
        "a shell on an atom that does not exist": not np.all((shells[:, 0] >= 0) & (shells[:, 0] < len(atoms))),
        f"a shell with l outside 0 to {_LARGEST_L}": not np.all((shells[:, 1] >= 0) & (shells[:, 1] <= _LARGEST_L)),
        "a shell without primitives": not all(np.all(c > 0) for c in counts),
        "a shell whose exponents lie outside the file": not inside(shells[:, 5], counts[0]),
        "a shell whose coefficients lie outside the file": not inside(shells[:, 6], counts[0] * counts[1]),
        "a core potential on an atom that does not exist": not np.all(
            (potentials[:, 0] >= 0) & (potentials[:, 0] < len(atoms))
        ),
        "a core potential whose terms lie outside the file": not (
            inside(potentials[:, 5], potentials[:, 2]) and inside(potentials[:, 6], potentials[:, 2])
        ),
    }
    found = [problem for problem, present in problems.items() if present]
    if found:
        raise ConversionError(
            "the molecule has " + ", ".join(found), where=where, expected="the tables of a built Mole", remedy=_REMEDY
        )
