"""A model as PySCF mean-field object that holds the stored orbitals, occupations, orbital energies and total energy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES
from qwfx.converters.pyscf.methods import MeanField, parse_mean_field
from qwfx.converters.pyscf.to_mole import translate
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.model import OrbitalSet, Wavefunction

__all__ = [
    "Determinant", "bare_mean_field", "choose_sets", "hartree_fock_kind", "stored_method", "stored_total",
    "to_mean_field",
]  # fmt: skip

WHERE = "conversion to PySCF"
ELECTRONS_WITHIN = 1e-4  # a Molden file prints occupations such as 13.99999


@dataclass(frozen=True)
class Determinant:
    """The orbitals that a mean-field object needs: one set, or one for each spin."""

    names: tuple[str, ...]
    sets: tuple[OrbitalSet, ...]
    occupations: tuple[NDArray[np.float64], ...]


def choose_sets(wavefunction: Wavefunction) -> Determinant:
    """The orbital sets of the wave function and their occupations.

    The sets are those of the expansion, else the only set of spin ``both``, else the only sets of spins ``up`` and
    ``down``. Occupations are those stored if they make up the electrons, else those of a single-determinant
    expansion, else the lowest orbitals in the order of the set are filled.

    Raises ConversionError if the file does not say which sets are meant.
    """
    names = _set_names(wavefunction)
    sets = tuple(wavefunction.orbitals[name] for name in names)
    return Determinant(names, sets, _occupations(wavefunction, sets))


def _set_names(wavefunction: Wavefunction) -> tuple[str, ...]:
    if wavefunction.expansion is not None:
        pair = (wavefunction.expansion.up_set, wavefunction.expansion.down_set)
        unknown = [name for name in pair if name not in wavefunction.orbitals]
        if not unknown:
            return pair[:1] if pair[0] == pair[1] else pair
    by_spin = {
        spin: [name for name, s in wavefunction.orbitals.items() if s.spin == spin] for spin in ("both", "up", "down")
    }
    if len(by_spin["both"]) == 1 and not by_spin["up"] and not by_spin["down"]:
        return (by_spin["both"][0],)
    if len(by_spin["up"]) == len(by_spin["down"]) == 1 and not by_spin["both"]:
        return (by_spin["up"][0], by_spin["down"][0])
    raise ConversionError(
        f"the file has the orbital sets {', '.join(wavefunction.orbitals) or 'none'}",
        where=WHERE,
        expected="one set for both spins, or one for up and one for down, or an expansion that names them",
        remedy="add an expansion that names its sets, or remove the sets that are not meant",
    )


def _occupations(wavefunction: Wavefunction, sets: tuple[OrbitalSet, ...]) -> tuple[NDArray[np.float64], ...]:
    system = wavefunction.system
    counts = (system.n_electrons,) if len(sets) == 1 else (system.n_up, system.n_down)
    stored = [s.occupations for s in sets]
    if all(
        occupations is not None and abs(float(np.sum(occupations)) - count) < ELECTRONS_WITHIN
        for occupations, count in zip(stored, counts, strict=True)
    ):
        return tuple(np.asarray(o, dtype=np.float64) for o in stored)
    sizes = [s.n_orbitals for s in sets]
    occupied = _occupied_of_expansion(wavefunction, max(sizes))
    if occupied is None:
        occupied = (np.arange(system.n_up), np.arange(system.n_down))
    if any(o.max(initial=-1) >= size for o, size in zip(occupied, (sizes[0], sizes[-1]), strict=True)):
        raise ConversionError(
            f"there are {system.n_up} up and {system.n_down} down electrons, but {sizes} orbitals",
            where=WHERE,
            expected="an orbital for each electron",
            remedy="check the electron counts, and that the occupied orbitals are all there",
        )
    filled = [np.zeros(sizes[0]), np.zeros(sizes[-1])]
    for occupations, indices in zip(filled, occupied, strict=True):
        occupations[indices] = 1.0
    return (filled[0] + filled[1],) if len(sets) == 1 else (filled[0], filled[1])


def _occupied_of_expansion(
    wavefunction: Wavefunction, n_orbitals: int
) -> tuple[NDArray[np.int64], NDArray[np.int64]] | None:
    expansion = wavefunction.expansion
    if expansion is None or len(expansion.up_strings) != 1 or len(expansion.down_strings) != 1:
        return None

    def indices(words: Any) -> NDArray[np.int64]:
        row = [int(word) for word in np.asarray(words)[0]]
        occupied = [p for p in range(min(n_orbitals, 64 * len(row))) if row[p // 64] >> p % 64 & 1]
        return np.array(occupied, dtype=np.int64)

    return indices(expansion.up_strings), indices(expansion.down_strings)


def stored_total(wavefunction: Wavefunction) -> tuple[str, float] | None:
    """Method and value (hartree) of the first total energy of state 0; None if there is none."""
    table = wavefunction.energies
    if table is None:
        return None
    for state, method, value, quantity in zip(
        table.state.tolist(), table.method, table.value.tolist(), table.quantity, strict=True
    ):
        if state == 0 and quantity == "total":
            return method, value
    return None


def hartree_fock_kind(wavefunction: Wavefunction) -> str:
    """``RHF``, ``ROHF`` or ``UHF``, by the orbital sets and the electron counts. Raises as `choose_sets`."""
    if len(_set_names(wavefunction)) == 2:
        return "UHF"
    return "RHF" if wavefunction.system.n_up == wavefunction.system.n_down else "ROHF"


def stored_method(wavefunction: Wavefunction, method: str | None = None) -> MeanField:
    """The mean-field method of `method`, else of the stored total energy, else Hartree-Fock of the kind the sets say.

    Raises UnsupportedError for a text that names no mean-field method.
    """
    total = stored_total(wavefunction)
    text = method or (total[0] if total else None)
    if text is None:
        text = hartree_fock_kind(wavefunction)
    parsed = parse_mean_field(text)
    if parsed is None:
        raise UnsupportedError(
            f"the method {text!r} is no mean-field method that PySCF can repeat",
            where="method" if method else "total energy of the file",
            expected="RHF, ROHF, UHF, or such as RKS/b3lyp, ROKS/pbe,pbe, UKS/lda,vwn",
            remedy="name the method",
        )
    return parsed


def to_mean_field(wavefunction: Wavefunction, method: str | None = None) -> Any:
    """A PySCF mean-field object on `to_mole`'s molecule, with orbitals, occupations, energies and ``e_tot`` set.

    Parameters
    ----------
    wavefunction : with orbitals; see `choose_sets` for which and for the occupations.
    method : text of the method (see `methods`); by default that of the stored total energy.

    Raises
    ------
    ConversionError if the sets or the electron counts do not make a determinant; UnsupportedError as `translate`
    and `stored_method`.
    """
    chosen = choose_sets(wavefunction)
    settings = stored_method(wavefunction, method)
    translation = translate(wavefunction)
    coefficients = [translation.coefficients(s.coefficients) for s in chosen.sets]
    energies = [np.zeros(s.n_orbitals) if s.energies is None else np.asarray(s.energies) for s in chosen.sets]
    occupations = list(chosen.occupations)
    if settings.kind == "U" and len(coefficients) == 1:
        total = occupations[0]
        up = np.minimum(total, 1.0)
        coefficients, energies, occupations = coefficients * 2, energies * 2, [up, total - up]
    elif settings.kind != "U" and len(coefficients) == 2:
        raise ConversionError(
            f"the method is spin-restricted ({settings}), but up and down orbitals differ",
            where=WHERE,
            expected="UHF or UKS",
            remedy="name the method",
        )
    mf = bare_mean_field(translation.mole, settings)
    for quantity, values in zip(ORBITAL_QUANTITIES, (coefficients, occupations, energies), strict=True):
        setattr(mf, f"mo_{quantity}", _stacked(values))
    stored = stored_total(wavefunction)
    if stored:
        mf.e_tot = stored[1]
        mf.converged = True
    return mf


def _stacked(values: list[NDArray[Any]]) -> Any:
    """As PySCF holds it: one array, or one with the spin first; a pair where the spins have unequal numbers."""
    if len(values) == 1:
        return values[0]
    return np.array(values) if values[0].shape == values[1].shape else tuple(values)


def bare_mean_field(mole: Any, settings: MeanField) -> Any:
    """The mean-field object of a method on a molecule, silent and without orbitals or checkpoint."""
    from pyscf import dft, scf

    if settings.dispersion:
        raise UnsupportedError(
            f"the method has the dispersion correction {settings.dispersion!r}",
            where=WHERE,
            expected="a method that PySCF computes without further packages",
            remedy="name the method without the correction, and add the correction yourself",
        )
    if settings.kind == "R" and mole.spin:
        raise ConversionError(
            f"{settings} needs as many up as down electrons, but there are {mole.nelec}",
            where=WHERE,
            expected="ROHF or ROKS",
            remedy="name the method",
        )
    family = scf if settings.functional is None else dft
    theory = "HF" if settings.functional is None else "KS"
    mf = getattr(family, f"{settings.kind}{theory}")(mole)
    if settings.functional is not None:
        mf.xc = settings.functional
        mf.grids.level = settings.grid_level
        if settings.grid:
            mf.grids.atom_grid = settings.grid
    if settings.auxiliary:
        mf = mf.density_fit(auxbasis=dict(settings.auxiliary), only_dfj=settings.only_coulomb)
    if settings.scalar_x2c:
        mf = mf.sfx2c1e()
    mf.verbose = 0
    mf.chkfile = None
    temporary = vars(mf).pop("_chkfile", None)
    if temporary is not None:
        temporary.close()  # PySCF opens one for every object and leaves it to the garbage collector
        mf._chkfile = None
    return mf
