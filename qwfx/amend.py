"""Changing what a file holds: Jastrow terms, an expansion. Checked before anything is written, whole or not at all."""

from __future__ import annotations

import hashlib
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from datetime import datetime, timezone
from pathlib import Path
from typing import Any

import numpy as np

from qwfx._version import __version__
from qwfx.errors import ConversionError, FormatError, UnsupportedError
from qwfx.jastrow_terms import read_terms
from qwfx.model import Array, Expansion, JastrowTerm, System, Wavefunction, Witness
from qwfx.occupation_lines import read_list

__all__ = ["Amendment", "amend"]

Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class Amendment:
    """What was done."""

    notes: tuple[str, ...]


def amend(
    source: Path,
    target: Path,
    *,
    jastrow: Path | None = None,
    start_jastrow: bool = False,
    determinants: Path | None = None,
    sets: tuple[str, str] | None = None,
    replacing: bool = False,
    progress: Progress | None = None,
) -> Amendment:
    """Read a .qwfx file, put Jastrow terms or an expansion into it, and write it to `target`, which may be the same.

    Parameters
    ----------
    jastrow : TOML file with a table for each term, see `qwfx.jastrow_terms.read_terms`.
    start_jastrow : add electron-electron terms that fulfil the cusp conditions.
    determinants : plain text list, see `qwfx.occupation_lines`.
    sets : names of the orbital sets that its up and down orbitals count; by default those of the expansion that is
        there, or the only set of each spin.
    replacing : allow terms, and an expansion, that are there to be replaced.

    Raises QwfxError; nothing is written then.
    """
    from qwfx.storage import load, save

    wavefunction = load(source)
    notes: list[str] = []
    used = []
    terms: dict[str, JastrowTerm] = {}
    if jastrow is not None:
        terms |= read_terms(jastrow)
        used.append(jastrow)
    if start_jastrow:
        from qwfx.trial.starting import starting_jastrow

        terms |= starting_jastrow(wavefunction.system)
    if terms:
        wavefunction = _with_terms(wavefunction, terms, replacing, notes, jastrow or source)
    if determinants is not None:
        expansion = _expansion(wavefunction, determinants, sets)
        used.append(determinants)
        if wavefunction.expansion is not None and not replacing:
            raise FormatError(
                "has an expansion already", where=str(source), expected="none", remedy="allow it with --replace"
            )
        wavefunction = replace(wavefunction, expansion=expansion)
        notes.append(f"{len(np.asarray(expansion.columns))} determinants put in")
    if not terms and determinants is None:
        raise ConversionError(
            "there is nothing to put in", where=str(source), expected="Jastrow terms or determinants",
            remedy="name a file of terms with --jastrow or of determinants with --determinants",
        )  # fmt: skip
    witness = _still_true(wavefunction.witness, determinants is not None, notes)
    wavefunction = replace(wavefunction, witness=witness)
    step: dict[str, Any] = {
        "activity": "amended",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": path.name, "sha256": hashlib.sha256(path.read_bytes()).hexdigest()} for path in used],
        "generated": [],
        "notes": list(notes),
    }
    provenance = replace(wavefunction.provenance, steps=(*wavefunction.provenance.steps, step))
    save(replace(wavefunction, provenance=provenance), target, progress=progress)
    return Amendment(tuple(notes))


def _with_terms(
    wavefunction: Wavefunction, terms: Mapping[str, JastrowTerm], replacing: bool, notes: list[str], where: Path
) -> Wavefunction:
    there = sorted(set(terms) & set(wavefunction.jastrow))
    if there and not replacing:
        raise FormatError(
            f"the file has terms of these names already: {', '.join(there)}", where=f"{where}: {', '.join(there)}",
            expected="new names", remedy="rename them, or replace what is there with --replace",
        )  # fmt: skip
    _check_terms(wavefunction.system, terms, where)
    for name, term in terms.items():
        notes.append(f"Jastrow term {name!r} {'replaced' if name in there else 'put in'}: {term.form}, "
                     f"{term.attributes['body']}")  # fmt: skip
    changed = replace(wavefunction, jastrow={**wavefunction.jastrow, **terms})
    from qwfx.kernels.jastrow import Jastrow

    try:
        Jastrow(changed)
    except FormatError as error:
        place = error.where.removeprefix("/jastrow/")
        raise ConversionError(
            error.found, where=f"{where}: {place}", expected=error.expected, remedy=error.remedy
        ) from None
    return changed


def _check_terms(system: System, terms: Mapping[str, JastrowTerm], where: Path) -> None:
    """Raise ConversionError for the first term that is not as the schema of its form has it."""
    from qwfx.schema_check import check_outline, jastrow_forms
    from qwfx.storage import outline, save

    for name, term in terms.items():
        if term.form not in jastrow_forms():
            raise ConversionError(
                f"the form {term.form!r}", where=f"{where}: {name}", expected=", ".join(jastrow_forms()),
                remedy="see FORMAT.md, section 7",
            )  # fmt: skip
    with tempfile.TemporaryDirectory() as folder:
        alone = Path(folder) / "terms.qwfx"
        save(Wavefunction(system, jastrow=dict(terms)), alone)
        problems = [p for p in check_outline(outline(alone)) if p.path.startswith("/jastrow/")]
    if problems:
        first = problems[0]
        raise ConversionError(
            first.found, where=f"{where}: {first.path.removeprefix('/jastrow/')}", expected=first.expected,
            remedy=first.remedy,
        )  # fmt: skip


def _expansion(wavefunction: Wavefunction, path: Path, sets: tuple[str, str] | None) -> Expansion:
    if sets is None:
        if wavefunction.expansion is not None:
            sets = wavefunction.expansion.up_set, wavefunction.expansion.down_set
        else:
            up, down = ([name for name, _ in wavefunction.orbital_sets(spin)] for spin in ("up", "down"))
            if len(up) != 1 or len(down) != 1:
                raise UnsupportedError(
                    f"there are {len(up)} sets of up and {len(down)} of down orbitals", where=str(path),
                    expected="to know which the list counts", remedy="name them: --sets UP,DOWN",
                )  # fmt: skip
            sets = up[0], down[0]
    for name in sets:
        if name not in wavefunction.orbitals:
            raise FormatError(
                f"there is no orbital set {name!r}", where=str(path),
                expected=f"one of {', '.join(sorted(wavefunction.orbitals)) or 'none at all'}",
                remedy="name sets that are in the file: --sets UP,DOWN",
            )  # fmt: skip
    n_orbitals = tuple(wavefunction.orbitals[name].n_orbitals for name in sets)
    expansion = read_list(path, (n_orbitals[0], n_orbitals[1]), sets)
    from qwfx.reference.strings import popcount

    strings: tuple[tuple[str, Array], ...] = (("up", expansion.up_strings), ("down", expansion.down_strings))
    for spin, member in strings:
        electrons = wavefunction.system.n_up if spin == "up" else wavefunction.system.n_down
        counts = popcount(np.asarray(member))
        if (counts != electrons).any():
            raise ConversionError(
                f"the determinants have {counts[0]} {spin} orbitals", where=str(path),
                expected=f"{electrons}, the {spin} electrons of the file", remedy="list core orbitals too",
            )  # fmt: skip
    return expansion


def _still_true(witness: Witness | None, new_expansion: bool, notes: list[str]) -> Witness | None:
    """The witness without what the change has made untrue: D of configurations, or potential and energy of Psi."""
    if witness is None or witness.configurations is None:
        return witness
    if new_expansion:
        notes.append("witness configurations removed: they are of the determinants that were there")
        return replace(witness, configurations=None)
    c = witness.configurations
    if c.potential is None and c.local_energy is None:
        return witness
    notes.append("potential and local energy of the witness removed: they are without these Jastrow terms")
    return replace(witness, configurations=replace(c, potential=None, local_energy=None))
