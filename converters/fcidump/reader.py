"""From an FCIDUMP file to a model."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import replace
from datetime import datetime, timezone
from pathlib import Path

import numpy as np

from qwfx._version import __version__
from qwfx.converters.fcidump import integrals
from qwfx.converters.fcidump.fill import Filled, fill
from qwfx.converters.fcidump.header import LARGEST, LONGEST, Header, read_header
from qwfx.converters.fcidump.layout import Layout, choose_layout, looks_interleaved, survey
from qwfx.converters.fcidump.records import PIECE, Source, compiled
from qwfx.converters.fcidump.store import BLOCK_CORE, BLOCKS, RESTRICTED, Places
from qwfx.converters.fcidump.symmetry import symmetry_of
from qwfx.converters.plugin import Progress, Reading
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.kernels.packing import positions
from qwfx.model import Hamiltonian, Provenance, System, Wavefunction

__all__ = ["read"]

MOSTLY = 1 << 16  # bytes; few namelists are longer


def read(path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
    """Read `path`. Raises FileError, ConversionError for what is wrong, UnsupportedError for spinors."""
    source = Source(path)
    with ThreadPoolExecutor(1) as pool:  # neither hashing nor the compiled parser holds Python's lock
        digest = pool.submit(_sha256, source)
        return _read(source, options, progress, digest)


def _read(
    source: Source, options: Mapping[str, str], progress: Progress | None, digest: Future[str]
) -> Reading:
    header = _header(source)
    header_notes = _check_header(header, source)
    if progress and not compiled():
        progress("compiling the parser of records (once)", 0.0)
    header = _spins(header, options.get("spins", "as-stated"))
    layout, filled = _integrals(source, header, progress)
    _check_complete(source, layout, filled, options.get("accept-incomplete", "no") == "yes")
    places = layout.places
    n_up, n_down, spin_notes = _electrons(header, layout, source.name)
    two_body, storage_notes = integrals.two_body(filled, places)
    energies, energy_notes = integrals.orbital_energies(filled, places)
    hamiltonian = Hamiltonian(
        n_orbitals=places.n,
        core_energy=float(filled.part(0, 1)[0].real),
        one_body=integrals.one_body(filled, places),
        two_body=two_body,
        complex_orbitals=places.is_complex,
        orbital_energies=energies,
    )
    missing = _missing(hamiltonian) if not filled.seen_core and options.get("accept-incomplete", "no") != "yes" else ""
    if missing:
        raise ConversionError(
            missing,
            where=source.end(),
            expected="one-electron integrals of every orbital, and the core energy",
            remedy="the file is cut off: write it again; if it is meant so, --set accept-incomplete=yes",
        )
    symmetry = symmetry_of(header, hamiltonian, options.get("isym", "like-orbsym"), source.name)
    hamiltonian = replace(hamiltonian, orbital_symmetry=symmetry.orbitals, state_symmetry=symmetry.state)
    notes = [*layout.notes, *_doubt(header, layout, filled), *header_notes, *spin_notes, *symmetry.notes]
    notes += [*_notes(filled), *energy_notes, *storage_notes]
    nothing = np.zeros(0)
    system = System(n_up, n_down, (), nothing.astype(np.int32), nothing, nothing.reshape(0, 3))
    step = {
        "activity": "read from an FCIDUMP file",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": source.path.name, "sha256": digest.result()}],
        "generated": [],
        "notes": notes,
    }
    return Reading(Wavefunction(system, hamiltonian=hamiltonian, provenance=Provenance((step,))), tuple(notes))


def _header(source: Source) -> Header:
    head = source.head(MOSTLY)
    try:
        header = read_header(head, source.name)
    except ConversionError:
        if len(head) < MOSTLY:
            raise
        header = read_header(source.head(LONGEST), source.name)
    source.start = header.end
    return header


def _check_header(header: Header, source: Source) -> list[str]:
    """Notes on keys that were not used. Raises UnsupportedError for spinors."""
    if header.flag("TREL"):
        raise UnsupportedError(
            "TREL = .TRUE.: the integrals are over spinors",
            where=f"{source.name}:{header.line_of('TREL')}",
            expected="orbitals of one spin each, or common to both",
            remedy="write the file without spin-orbit coupling",
        )
    if not header.extra:
        return []
    return ["keys of the namelist that were not used: " + ", ".join(f"{k}={v}" for k, v in header.extra.items())]


def _integrals(source: Source, header: Header, progress: Progress | None) -> tuple[Layout, Filled]:
    """Read on the spot what is plain; look at all records first where the layout or the kind of numbers needs it."""
    first = next(source.records(), None)
    if first is None:
        raise ConversionError(
            "there are no records behind the namelist",
            where=source.end(),
            expected="value i j k l, line by line",
            remedy="the file is cut off: write it again",
        )
    place = int(first.place[0])
    bracketed = source.head(place + 1)[-1:] == b"("
    # A record of zero indices that is not the last may close a block.
    closes = np.flatnonzero(first.index[:-1, 0] == 0)
    if header.spin_resolved or bracketed or len(closes) or first.imaginary.any():
        return _with_survey(source, header, bracketed, progress)
    layout = Layout(Places(_spatial(header, source), RESTRICTED, False))
    filled = fill(source, layout, progress, restart_if_unclear=True)
    return (layout, filled) if filled else _with_survey(source, header, bracketed, progress)


def _with_survey(
    source: Source, header: Header, bracketed: bool, progress: Progress | None
) -> tuple[Layout, Filled]:
    if progress:
        progress("looking at all records", 0.0)
    layout = choose_layout(header, survey(source, bracketed), source)
    if layout.places.n > LARGEST:
        _spatial(header, source)
    filled = fill(source, layout, progress)
    assert filled is not None
    return layout, filled


def _spins(header: Header, told: str) -> Header:
    """The header with what the user says of the spins in the place of what the namelist says."""
    if told == "as-stated":
        return header
    return replace(header, spin_resolved=told == "resolved", lines={**header.lines, "UHF": header.line_of("UHF")})


def _doubt(header: Header, layout: Layout, filled: Filled) -> list[str]:
    """A note where integrals without a word on spins could be over spin orbitals.

    Two molecules far apart look the same when their orbitals alternate, so that this is for the user to decide.
    """
    if {"UHF", "IUHF"} & header.lines.keys() or header.n_electrons > header.n_orbitals:
        return []
    if not looks_interleaved(layout.places, filled.at):
        return []
    return [
        "no exchange integral joins an odd and an even orbital, and the namelist has no UHF: read as spin-restricted, "
        "as the format says; if odd and even numbers are the two spins, convert again with --set spins=resolved"
    ]


def _spatial(header: Header, source: Source) -> int:
    if header.n_orbitals > LARGEST:
        raise UnsupportedError(
            f"NORB is {header.n_orbitals}",
            where=f"{source.name}:{header.line_of('NORB')}",
            expected=f"at most {LARGEST} spatial orbitals",
            remedy="mend NORB, or leave out orbitals",
        )
    return header.n_orbitals


def _check_complete(source: Source, layout: Layout, filled: Filled, accept: bool) -> None:
    """A file that was cut off between two lines has no mark of it, but it lacks what comes last."""
    blocked = layout.places.kind == BLOCKS
    found = ""
    if blocked and filled.block < BLOCK_CORE:
        found = f"the file ends in block {filled.block + 1} of five"
    elif not filled.seen_one_body and (filled.seen_two_body or not filled.seen_core):
        found = "there are no one-electron integrals"
    elif not filled.seen_core and not source.ends_with_newline():
        found = "the last line is not ended and there is no core energy"
    if found and (blocked or not accept):
        remedy = "the file is cut off: write it again"
        raise ConversionError(
            found,
            where=source.end(),
            expected="two-electron integrals, one-electron integrals and the core energy",
            remedy=remedy if blocked else f"{remedy}; if it is meant so, --set accept-incomplete=yes",
        )


def _missing(h: Hamiltonian) -> str:
    """What shows that one-electron integrals were cut off: an orbital with self-repulsion and not one of them.

    Written last before the core energy, they are what a file that was cut off between two lines lacks.
    """
    n = h.n_orbitals
    diagonal = np.repeat(np.arange(n)[:, None], 4, axis=1)
    for key, matrix in h.one_body.items():
        like = h.two_body["both" if key == "both" else f"{key}_{key}"]
        place = positions("pairs" if h.complex_orbitals else "eightfold", n, diagonal, True)
        values = np.asarray(like.values)
        if like.index is not None:
            index = np.asarray(like.index).astype(np.int64)
            at = np.minimum(np.searchsorted(index, place), max(len(index) - 1, 0))
            own = np.where(index[at] == place, values[at], 0) if len(index) else np.zeros(n)
        else:
            own = values[place]
        bare = (np.abs(own) > 0) & ~np.asarray(matrix).any(axis=1)
        if bare.any():
            return f"orbital {int(np.argmax(bare)) + 1} has two-electron and no one-electron integrals"
    return ""


def _notes(filled: Filled) -> list[str]:
    notes = []
    if not filled.seen_two_body:
        notes.append("there are no two-electron integrals in the file: taken as 0")
    if not filled.seen_core:
        notes.append("no core energy in the file: taken as 0")
    if filled.n_repeated:
        notes.append(f"{filled.n_repeated} records repeat a number that an earlier one gives, and agree with it")
    return notes


def _sha256(source: Source) -> str:
    digest = hashlib.sha256()
    try:
        with open(source.path, "rb") as stream:
            while piece := stream.read(PIECE):
                digest.update(piece)
    except OSError as error:
        raise source.unreadable(error) from None
    return digest.hexdigest()


def _electrons(header: Header, layout: Layout, name: str) -> tuple[int, int, list[str]]:
    notes = []
    ms2 = header.ms2
    if ms2 is None:
        ms2 = header.n_electrons % 2
        notes.append(f"no MS2 in the namelist: taken as {ms2}, the lowest that {header.n_electrons} electrons allow")
    if (header.n_electrons + ms2) % 2 or abs(ms2) > header.n_electrons:
        raise ConversionError(
            f"NELEC = {header.n_electrons} and MS2 = {ms2} do not go together",
            where=f"{name}:{header.line_of('NELEC')}",
            expected="both even or both odd, and MS2 at most NELEC",
            remedy="mend the namelist",
        )
    n_up, n_down = (header.n_electrons + ms2) // 2, (header.n_electrons - ms2) // 2
    if max(n_up, n_down) > layout.places.n:
        raise ConversionError(
            f"{n_up} up and {n_down} down electrons do not fit into {layout.places.n} orbitals",
            where=f"{name}:{header.line_of('NELEC')}",
            expected="at most one electron of each spin in an orbital",
            remedy="mend NELEC, MS2 or NORB",
        )
    return n_up, n_down, notes
