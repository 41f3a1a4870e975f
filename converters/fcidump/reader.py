"""From an FCIDUMP file to a model."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from datetime import datetime, timezone
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from qwfx._version import __version__
from qwfx.converters.fcidump.assemble import Integrals, Layout, assemble, choose_layout
from qwfx.converters.fcidump.header import Header, read_header
from qwfx.converters.fcidump.records import Survey, line_at, survey
from qwfx.converters.plugin import Progress, Reading
from qwfx.errors import ConversionError, FileError
from qwfx.model import Hamiltonian, Provenance, System, Wavefunction

__all__ = ["read"]

MOST_IRREPS = 8
"""Irreps of D2h and its subgroups, the groups whose products are bitwise exclusive-or."""


def read(path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
    """Read `path`. Raises FileError, ConversionError."""
    name = str(path)
    text = _bytes(path)
    head = bytes(text[: 1 << 22])
    header = read_header(head, name)
    if progress:
        progress("reading records (the parser is compiled on first use)", 0.0)
    seen = survey(text, header.end, name)
    _check_complete(text, seen, name, options.get("accept-incomplete", "no") == "yes")
    layout = choose_layout(header, seen, name)
    integrals = assemble(text, header.end, name, layout, seen, progress)
    n_up, n_down, spin_notes = _electrons(header, layout, name)
    symmetry, state, symmetry_notes = _symmetry(header, layout, options.get("isym", "like-orbsym"), name)
    notes = [note for note in (layout.note, *spin_notes, *symmetry_notes) if note]
    notes += _notes(header, seen, integrals)
    hamiltonian = Hamiltonian(
        n_orbitals=layout.n_orbitals,
        core_energy=integrals.core_energy or 0.0,
        one_body=integrals.one_body,
        two_body=integrals.two_body,
        complex_orbitals=layout.is_complex,
        orbital_energies=integrals.orbital_energies,
        orbital_symmetry=symmetry,
        state_symmetry=state,
    )
    nothing = np.zeros(0)
    system = System(n_up, n_down, (), nothing.astype(np.int32), nothing, nothing.reshape(0, 3))
    step = {
        "activity": "read from an FCIDUMP file",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": path.name, "sha256": hashlib.sha256(text.data).hexdigest()}],
        "notes": notes,
    }
    return Reading(Wavefunction(system, hamiltonian=hamiltonian, provenance=Provenance((step,))), tuple(notes))


def _bytes(path: Path) -> NDArray[np.uint8]:
    """The bytes of a file, mapped and not read."""
    try:
        if path.stat().st_size == 0:
            return np.zeros(0, dtype=np.uint8)
        return np.memmap(path, dtype=np.uint8, mode="r")
    except (OSError, ValueError) as error:
        raise FileError(
            f"cannot be read ({getattr(error, 'strerror', None) or error})",
            where=str(path),
            expected="a readable file",
            remedy="check the path and the permissions",
        ) from None


def _check_complete(text: NDArray[np.uint8], seen: Survey, name: str, accept: bool) -> None:
    """A file that was cut off between two lines has no mark of it, but it lacks what comes last."""
    where = f"{name}:{line_at(text, len(text))}"
    found = ""
    if not seen.n_records:
        found = "there are no records behind the namelist"
    elif seen.n_two_body and not seen.n_one_body:
        found = "the file ends without one-electron integrals"
    elif text[-1] != 10 and not seen.zero_last and not seen.n_zero:
        found = "the last line is not ended and there is no core energy"
    if found and not accept:
        raise ConversionError(
            found,
            where=where,
            expected="two-electron integrals, one-electron integrals and the core energy",
            remedy="the file is cut off: write it again; if it is meant so, use --set accept-incomplete=yes",
        )


def _electrons(header: Header, layout: Layout, name: str) -> tuple[int, int, list[str]]:
    notes = []
    ms2 = header.ms2
    if ms2 is None:
        ms2 = header.n_electrons % 2
        notes.append(f"no MS2 in the namelist: taken as {ms2}, the lowest that {header.n_electrons} electrons allow")
    if (header.n_electrons + ms2) % 2 or abs(ms2) > header.n_electrons:
        raise ConversionError(
            f"NELEC = {header.n_electrons} and MS2 = {ms2} do not go together",
            where=f"{name}:1",
            expected="both even or both odd, and MS2 at most NELEC",
            remedy="mend the namelist",
        )
    n_up, n_down = (header.n_electrons + ms2) // 2, (header.n_electrons - ms2) // 2
    if max(n_up, n_down) > layout.n_orbitals:
        raise ConversionError(
            f"{n_up} up and {n_down} down electrons do not fit into {layout.n_orbitals} orbitals",
            where=f"{name}:1",
            expected="at most one electron of each spin in an orbital",
            remedy="mend NELEC, MS2 or NORB",
        )
    return n_up, n_down, notes


def _symmetry(
    header: Header, layout: Layout, state_from: str, name: str
) -> tuple[NDArray[np.int32] | None, int | None, list[str]]:
    """Irreps of orbitals and state from 0, and what was taken for granted."""
    written = np.array(header.orbital_symmetry, dtype=np.int64)
    notes: list[str] = []
    if not len(written):
        return None, None, notes
    n = layout.n_orbitals
    if len(written) == 2 * n:
        if not np.array_equal(written[0::2], written[1::2]):
            return None, None, ["ORBSYM differs between up and down orbitals: left out"]
        written = written[0::2]
    if len(written) != n:
        raise ConversionError(
            f"ORBSYM has {len(header.orbital_symmetry)} values",
            where=f"{name}:1",
            expected=f"{header.n_orbitals}, one for each orbital",
            remedy="mend the namelist",
        )
    base = 0 if written.min() == 0 else 1
    symmetry = written - base
    if symmetry.min() < 0 or symmetry.max() >= MOST_IRREPS:
        return None, None, [f"ORBSYM has values up to {int(written.max())}, more than eight irreps: left out"]
    if base == 0 and written.any():
        notes.append("ORBSYM counts from 0")
    state = header.state_symmetry
    if state is not None:
        state_base = {"from-0": 0, "from-1": 1}.get(state_from, 0 if state == 0 else base)
        if symmetry.any():
            notes.append(
                f"ISYM = {state} counts from {state_base}: irrep {state - state_base} of 0..7"
                " (--set isym=from-0 or isym=from-1 decides)"
            )
        state -= state_base
        if not 0 <= state < MOST_IRREPS:
            state = None
        elif not symmetry.any():
            state = 0
    return symmetry.astype(np.int32), state, notes


def _notes(header: Header, seen: Survey, integrals: Integrals) -> list[str]:
    notes = []
    if integrals.core_energy is None:
        notes.append("no core energy in the file: taken as 0")
    if integrals.n_repeated:
        notes.append(f"{integrals.n_repeated} records repeat an integral with the same value")
    if header.extra:
        listed = ", ".join(f"{key}={value}" for key, value in header.extra.items())
        notes.append(f"keys of the namelist that were not used: {listed}")
    for pair, table in integrals.two_body.items():
        if table.index is not None:
            notes.append(f"two-electron integrals {pair} stored sparsely: {len(table.index)} of the packed vector")
    return notes
