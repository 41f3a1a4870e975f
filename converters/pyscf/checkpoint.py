"""PySCF checkpoint files, read and written through PySCF's own functions."""

from __future__ import annotations

import hashlib
import os
import tempfile
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.plugin import Option, Progress, Reading, Writing
from qwfx.converters.pyscf.checkpoint_ci import expansion_of_checkpoint
from qwfx.converters.pyscf.checkpoint_mole import molecule_from_text
from qwfx.converters.pyscf.ci_vectors import roles_of
from qwfx.converters.pyscf.describe import ORBITAL_QUANTITIES
from qwfx.converters.pyscf.energies import energy
from qwfx.converters.pyscf.hamiltonian import with_hamiltonian
from qwfx.converters.pyscf.methods import parse_active_space, parse_mean_field
from qwfx.converters.pyscf.parts import Parts, assemble, energies_table, per_spin
from qwfx.converters.pyscf.symmetry import restore_symmetry
from qwfx.converters.pyscf.to_mean_field import choose_sets, hartree_fock_kind, stored_total, to_mean_field
from qwfx.errors import ConversionError, FileError, UnsupportedError
from qwfx.model import Wavefunction

__all__ = ["CheckpointConverter"]

HDF5_SIGNATURE = b"\x89HDF\r\n\x1a\n"
SAME_ENERGY_WITHIN = 1e-6  # hartree; convergence of the stored energy against that of its orbitals
NATURAL_WITHIN = 1e-6  # electrons, off the diagonal of the density matrix
LARGEST_CHECKED = 300  # functions; larger molecules would take minutes for one Fock matrix
UNKNOWN_METHOD = "SCF (method not in the checkpoint)"
_REMEDY = "check that the file is complete, or write the checkpoint again with PySCF"


class CheckpointConverter:
    """Checkpoints of mean-field and of complete-active-space calculations."""

    name = "pyscf"
    title = "PySCF checkpoint"
    suffixes = (".chk",)
    options = (
        Option(
            "method",
            "method of the checkpoint, which does not say: RHF, ROHF, UHF, or such as RKS/b3lyp, UKS/pbe,pbe, "
            "'RHF (density fitting with H=cc-pvdz-jkfit, O=cc-pvdz-jkfit)'",
        ),
        Option(
            "part", "which orbitals of a checkpoint that has both; the default is mcscf if there", ("scf", "mcscf")
        ),
        Option("ci-threshold", "CI coefficients of a smaller magnitude in every state are left out; the default is 0"),
        Option("hamiltonian", "whether to add the integrals over the orbitals; the default is no", ("yes", "no")),
    )

    def recognises(self, path: Path, head: bytes) -> bool:
        """Whether the file is HDF5. Files of qwfx are recognised before converters are asked."""
        return head.startswith(HDF5_SIGNATURE)

    def read(self, path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
        """Read a checkpoint. Raises FileError, ConversionError, UnsupportedError."""
        report = progress or (lambda _phase, _fraction: None)
        report("reading the checkpoint", 0.0)
        where = str(path)
        molecule = _entry(path, "mol")
        if molecule is None:
            raise ConversionError(
                "the file is HDF5, but has no molecule under 'mol'",
                where=where,
                expected="a PySCF checkpoint",
                remedy="check what wrote the file",
            )
        mol = molecule_from_text(molecule, where)
        used = ({"entity": path.name, "format": self.title, "sha256": _sha256(path)},)
        part = options.get("part") or ("mcscf" if _entry(path, "mcscf") is not None else "scf")
        content = _entry(path, part)
        if not isinstance(content, dict):
            raise ConversionError(
                f"the file has no results under '{part}'",
                where=where,
                expected="orbitals of a mean-field calculation ('scf') or of CASSCF ('mcscf')",
                remedy=_REMEDY,
            )
        threshold = _threshold(options)
        try:
            parts = _mcscf_parts(mol, content, where, threshold) if part == "mcscf" else _scf_parts(mol, content, where)
            report("orbitals and witness", 0.3)
            wavefunction = assemble(parts, activity="read from a PySCF checkpoint", witness=True, used=used)
        except (ConversionError, UnsupportedError) as error:
            raise type(error)(error.found, where=where, expected=error.expected, remedy=error.remedy) from error
        except (TypeError, ValueError) as error:  # entries of a wrong type, which only a damaged file has
            raise ConversionError(
                f"the results under '{part}' are damaged ({error})",
                where=where,
                expected="arrays of numbers",
                remedy=_REMEDY,
            ) from error
        if part == "mcscf" and _entry(path, "scf") is not None:
            parts.notes.append("the orbitals are those of CASSCF; --set part=scf takes those of the mean field")
        report("energy", 0.6)
        if part == "scf":
            wavefunction = _with_method(wavefunction, parts, options.get("method"))
        wavefunction = _with_notes(wavefunction, parts.notes)
        if options.get("hamiltonian") == "yes":
            report("integrals", 0.8)
            wavefunction = with_hamiltonian(wavefunction)
        return Reading(wavefunction, tuple(parts.notes))

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
    ) -> Writing:
        """Write a checkpoint that ``scf.chkfile`` loads. Raises FileError, and as `to_mean_field`."""
        from pyscf.scf import chkfile

        notes = _left_out(wavefunction)
        total = stored_total(wavefunction)
        kind = hartree_fock_kind(wavefunction)  # a checkpoint has no word for the method, only arrays of its shape
        if total is not None and total[0] != kind:
            notes.append(f"not carried: that the energy, {total[1]:.10f} hartree, is that of {total[0]}")
        mf = to_mean_field(wavefunction, kind)
        chosen = choose_sets(wavefunction)
        irreps = [s.irreps for s in chosen.sets]
        own = [mf.mo_coeff] if len(irreps) == 1 else list(mf.mo_coeff)
        if any(irreps) and not restore_symmetry(mf.mol, own, irreps):
            notes.append("not carried: irreps (PySCF finds no point group that gives the orbitals these irreps)")
        if total is None:
            notes.append("the model has no total energy, so that of the checkpoint is not a number")
        coefficients, occupations, energies = (getattr(mf, f"mo_{q}") for q in ORBITAL_QUANTITIES)

        def save(temporary: str) -> None:
            chkfile.dump_scf(mf.mol, temporary, total[1] if total else np.nan, energies, coefficients, occupations)

        _replace_whole(path, save)
        return Writing(tuple(notes))


def _entry(path: Path, key: str) -> Any:
    """One entry of the checkpoint; None if it is absent."""
    from pyscf.lib import chkfile

    if not path.is_file():
        raise FileError(
            "is not a file that can be read", where=str(path), expected="a PySCF checkpoint", remedy="check the path"
        )
    try:
        return chkfile.load(str(path), key)
    except PermissionError as error:
        raise FileError(
            "cannot be read", where=str(path), expected="a readable file", remedy="check the permissions"
        ) from error
    except Exception as error:  # the HDF5 library reports damage in many ways
        raise ConversionError(
            f"the entry '{key}' cannot be read ({type(error).__name__}: {error})",
            where=str(path),
            expected="a complete HDF5 file",
            remedy=_REMEDY,
        ) from error


def _sha256(path: Path) -> str:
    with open(path, "rb") as stream:
        digest = hashlib.sha256()
        while block := stream.read(1 << 20):
            digest.update(block)
    return digest.hexdigest()


def _array(content: dict[str, Any], key: str, where: str) -> Any:
    values = content.get(key)
    if values is None:
        raise ConversionError(
            f"the file has no '{key}'", where=where, expected="orbitals and occupations", remedy=_REMEDY
        )
    return values


def _numbers(content: dict[str, Any], key: str) -> list[float]:
    """One finite number, or nothing."""
    try:
        value = float(np.real(content[key]))
    except (KeyError, TypeError, ValueError):
        return []
    return [value] if np.isfinite(value) else []


def _scf_parts(mol: Any, content: dict[str, Any], where: str) -> Parts:
    coefficients = per_spin(_array(content, "mo_coeff", where), 2)
    if coefficients[0].shape[0] == 2 * mol.nao_nr():
        raise UnsupportedError(
            "the orbitals mix spin up and spin down",
            where=where,
            expected="one spin for each orbital: RHF, ROHF, UHF or a Kohn-Sham kind",
            remedy="use such a calculation",
        )
    return Parts(
        mol=mol,
        coefficients=coefficients,
        occupations=per_spin(_array(content, "mo_occ", where), 1),
        energies=per_spin(content.get(f"mo_{ORBITAL_QUANTITIES[2]}"), 1) or None,
        totals=_numbers(content, "e_tot"),
    )


def _mcscf_parts(mol: Any, content: dict[str, Any], where: str, threshold: float = 0.0) -> Parts:
    """Natural orbitals of an active-space calculation: PySCF's, or made from its density matrix."""
    coefficients = per_spin(_array(content, "mo_coeff", where), 2)
    n_core, n_active = (np.asarray(_array(content, key, where)) for key in ("ncore", "ncas"))
    if len(coefficients) != 1 or n_core.ndim or n_active.ndim:
        raise UnsupportedError(
            "the active space is spin-unrestricted",
            where=where,
            expected="one set of orbitals for both spins",
            remedy="use a spin-restricted active-space calculation",
        )
    core, active = int(n_core), int(n_active)
    electrons = int(np.sum(_array(content, "nelecas", where)))
    n_orbitals = coefficients[0].shape[1]
    if min(core, active) < 0 or core + active > n_orbitals:
        raise ConversionError(
            f"{core} core and {active} active orbitals are more than {n_orbitals}",
            where=where,
            expected="an active space within the orbitals",
            remedy=_REMEDY,
        )
    parts = Parts(
        mol=mol,
        coefficients=coefficients,
        occupations=per_spin(content.get("mo_occ"), 1) or None,
        method=f"CASSCF({electrons},{active})",
        totals=_numbers(content, "e_tot"),
        roles=[roles_of(core, active, n_orbitals)],
    )
    density = content.get("casdm1")
    if parts.occupations is None and density is not None and np.shape(density) == (active, active):
        parts.coefficients, parts.occupations = _natural(coefficients[0], np.asarray(density), core, active)
        parts.notes.append("the active orbitals were turned into natural orbitals")
    elif density is not None and _off_diagonal(np.asarray(density)) > NATURAL_WITHIN:
        parts.notes.append("the active orbitals are not natural orbitals: each occupation is an expectation value")
    if parts.occupations is None:
        parts.notes.append("the checkpoint has no occupations of its active orbitals")
    if parts.coefficients[0] is coefficients[0]:  # CI vectors are over these, not over orbitals made of them
        parts.expansion = expansion_of_checkpoint(content, core, active, n_orbitals, threshold, parts.notes)
        if parts.expansion is not None:
            up, down = np.asarray(content["nelecas"]).ravel().tolist()
            parts.electrons = (core + int(up), core + int(down))
            states = len(np.asarray(parts.expansion.coefficients))
            energies = _numbers(content, "e_states") or _numbers(content, "e_tot")
            if states > 1:
                parts.method = f"CASSCF({electrons},{active}) state average"
            if len(energies) != states:
                parts.notes.append(f"the checkpoint has {len(energies)} energies for {states} states")
    return parts


def _threshold(options: Mapping[str, str]) -> float:
    text = options.get("ci-threshold", "0")
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not 0 <= value < 1:
        raise ConversionError(
            f"ci-threshold is {text!r}", where=f"--set ci-threshold={text}", expected="a number from 0 to 1",
            remedy="such as 1e-6",
        )  # fmt: skip
    return value


def _off_diagonal(density: NDArray[Any]) -> float:
    if density.ndim != 2 or density.shape[0] != density.shape[1]:
        return 0.0
    return float(np.abs(density - np.diag(np.diag(density))).max(initial=0.0))


def _natural(
    coefficients: NDArray[Any], density: NDArray[Any], core: int, active: int
) -> tuple[list[NDArray[Any]], list[NDArray[np.float64]]]:
    occupations, rotation = np.linalg.eigh(density)
    span = slice(core, core + active)
    rotated = coefficients.copy()
    rotated[:, span] = coefficients[:, span] @ rotation[:, ::-1]
    full = np.zeros(coefficients.shape[1])
    full[:core] = 2.0
    full[span] = occupations[::-1]
    return [rotated], [full]


def _with_method(wavefunction: Wavefunction, parts: Parts, named: str | None) -> Wavefunction:
    """The energies with the method that the user named, or that the energy shows to be Hartree-Fock."""
    if named is not None and parse_mean_field(named) is None and parse_active_space(named) is None:
        raise UnsupportedError(
            f"the method {named!r} is not known",
            where=f"--set method={named}",
            expected="RHF, ROHF, UHF, or such as RKS/b3lyp, ROKS/pbe,pbe, UKS/lda,vwn",
            remedy="correct the method, or leave it out",
        )
    stored = parts.totals[0] if parts.totals else None
    method = named or UNKNOWN_METHOD
    if stored is not None and named is None:
        hartree_fock = hartree_fock_kind(wavefunction)
        if parts.mol.nao_nr() > LARGEST_CHECKED:
            parts.notes.append(
                f"the molecule has more than {LARGEST_CHECKED} functions, so it was not tested whether the energy is "
                "that of Hartree-Fock; name the method with --set method=..."
            )
        else:
            found = energy(wavefunction, hartree_fock)
            if abs(found - stored) < SAME_ENERGY_WITHIN:
                method = hartree_fock
                parts.notes.append(f"the stored energy is that of {method} to {abs(found - stored):.1e} hartree")
            else:
                parts.notes.append(
                    f"the stored energy is {stored:.8f} hartree, that of {hartree_fock} with these orbitals "
                    f"{found:.8f}: a Kohn-Sham calculation, density fitting, a solvent, or not converged; name the "
                    "method with --set method=..."
                )
    return replace(wavefunction, energies=energies_table(method, parts.totals, float(parts.mol.energy_nuc())))


def _with_notes(wavefunction: Wavefunction, notes: list[str]) -> Wavefunction:
    (*earlier, last) = wavefunction.provenance.steps
    steps = (*earlier, {**last, "notes": list(notes)})
    return replace(wavefunction, provenance=replace(wavefunction.provenance, steps=steps))


def _left_out(wavefunction: Wavefunction) -> list[str]:
    """What a checkpoint has no place for."""
    expansion = wavefunction.expansion
    many = expansion is not None and np.shape(expansion.coefficients) != (1, 1)
    present = {
        "the expansion (the checkpoint holds orbitals and occupations)": many,
        "the Jastrow factor": bool(wavefunction.jastrow),
        "the Hamiltonian": wavefunction.hamiltonian is not None,
        "the density matrices": wavefunction.densities is not None,
        "the witness": wavefunction.witness is not None,
        "extensions": bool(wavefunction.extensions),
        "orbital energies (there are none: zeros are written)": any(
            s.energies is None for s in wavefunction.orbitals.values()
        ),
    }
    return [f"not carried: {what}" for what, is_present in present.items() if is_present]


def _replace_whole(path: Path, save: Any) -> None:
    """Write through a temporary file in the same folder, so that `path` is the old file or the whole new one."""
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent or ".")
        os.close(handle)
        try:
            os.unlink(temporary)  # PySCF adds to a file that exists
            save(temporary)
            with open(temporary, "rb+") as stream:
                os.fsync(stream.fileno())
            os.replace(temporary, path)
        finally:
            if os.path.exists(temporary):
                os.unlink(temporary)
    except OSError as error:
        raise FileError(
            f"cannot be written ({error.strerror or error})",
            where=str(path),
            expected="a folder in which files can be made, with space left",
            remedy="choose another place",
        ) from error
