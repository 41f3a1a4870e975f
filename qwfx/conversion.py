"""From any file to a model and from a model to any file: qwfx itself and every converter, by content or by name."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import datetime, timezone
from pathlib import Path

import numpy as np

from qwfx._version import __version__
from qwfx.converters.plugin import Converter, Progress, Reading, Writing
from qwfx.converters.registry import by_name, check_options, for_target, recognise
from qwfx.errors import ConversionError, FileError, QwfxError, UnsupportedError
from qwfx.model import Provenance, Wavefunction

__all__ = ["Conversion", "convert", "format_of", "read_any", "target_of", "write_any"]

QWFX = "qwfx"


@dataclass(frozen=True)
class Conversion:
    """What one conversion did."""

    source_format: str
    target_format: str
    reading_notes: tuple[str, ...]
    writing_notes: tuple[str, ...]


def format_of(path: Path, named: str | None = None) -> str:
    """Name of the format of an existing file: `named` if given, else recognised by content.

    Raises FileError, ConversionError or UnsupportedError.
    """
    if named is not None:
        return QWFX if named == QWFX else by_name(named).name
    if path.is_dir():
        raise FileError(
            "is a folder", where=str(path), expected="a file", remedy="name one of the files in it"
        )
    from qwfx.storage import is_qwfx

    return QWFX if path.is_file() and is_qwfx(path) else recognise(path).name


def target_of(path: Path, named: str | None = None) -> str:
    """Name of the format to write: `named` if given, else by the ending of the file name. Raises UnsupportedError."""
    if named is not None:
        return QWFX if named == QWFX else by_name(named).name
    if path.suffix.lower() == ".qwfx":
        return QWFX
    converter = for_target(path)
    if converter is None:
        raise UnsupportedError(
            "the file name does not tell which format to write",
            where=str(path),
            expected="an ending such as .qwfx, .molden, .fcidump or .chk",
            remedy="give the file one of these endings, or name the format with --to",
        )
    return converter.name


def read_any(
    path: Path,
    named: str | None = None,
    options: Mapping[str, str] | None = None,
    progress: Progress | None = None,
) -> tuple[str, Reading]:
    """Read a file of any known format; the name of the format and what was read."""
    source = format_of(path, named)
    if source == QWFX:
        if options:
            raise UnsupportedError(
                f"reading a .qwfx file has no options, but {', '.join(options)} was given",
                where=str(path),
                expected="no --set",
                remedy="leave the option out",
            )
        from qwfx.storage import load

        return source, Reading(load(path))
    converter = by_name(source)
    check_options(converter, options or {})
    with _faults_of(converter, path):
        reading = converter.read(path, options or {}, progress)
    _check_model(reading.wavefunction, path, source)
    return source, replace(reading, wavefunction=_with_origin(reading, path, source))


@contextmanager
def _faults_of(converter: Converter, path: Path) -> Iterator[None]:
    """Name the plug-in whose code fails, where it is not qwfx's own."""
    try:
        yield
    except (QwfxError, MemoryError):
        raise
    except Exception as error:
        if type(converter).__module__.startswith("qwfx."):
            raise
        raise ConversionError(
            f"the converter {converter.name!r} ({type(converter).__module__}) failed: {type(error).__name__}: {error}",
            where=str(path),
            expected="a converter that says what is wrong with a file",
            remedy="report it to those who made the converter",
        ) from error


def _check_model(wavefunction: Wavefunction, path: Path, converter: str) -> None:
    """Raise ConversionError where a converter made orbitals that are not over its own basis."""
    if wavefunction.basis is None:
        return
    for name, orbitals in wavefunction.orbitals.items():
        shape, n = np.shape(orbitals.coefficients), wavefunction.basis.n_functions
        if len(shape) != 2 or shape[1] != n:
            raise ConversionError(
                f"the converter {converter!r} made orbitals {name!r} of shape {shape}",
                where=str(path),
                expected=f"(orbitals, {n}): a coefficient for each function of its basis",
                remedy="report it to those who made the converter",
            )


def _with_origin(reading: Reading, path: Path, converter: str) -> Wavefunction:
    """The model with a step that says what it was read from, if its converter has not said so."""
    wavefunction = reading.wavefunction
    if wavefunction.provenance.steps:
        return wavefunction
    digest = hashlib.sha256()
    with open(path, "rb") as stream:
        while piece := stream.read(1 << 20):
            digest.update(piece)
    step = {
        "activity": f"read by the converter {converter}",
        "agent": f"qwfx {__version__}",
        "time": datetime.now(timezone.utc).isoformat(timespec="seconds"),
        "used": [{"entity": path.name, "sha256": digest.hexdigest()}],
        "generated": [],
        "notes": list(reading.notes),
    }
    return replace(wavefunction, provenance=Provenance((step,)))


def write_any(
    reading: Reading,
    path: Path,
    named: str | None = None,
    options: Mapping[str, str] | None = None,
    *,
    overwrite: bool = False,
    progress: Progress | None = None,
) -> tuple[str, Writing]:
    """Write a model in any known format; the name of the format and what it could not carry."""
    target = target_of(path, named)
    if path.exists() and not overwrite:
        raise FileError(
            "already exists",
            where=str(path),
            expected="a name that is free",
            remedy="choose another name, or replace the file with --force",
        )
    if target == QWFX:
        from qwfx.storage import save

        save(reading.wavefunction, path, overwrite=overwrite, progress=progress)
        return target, Writing()
    converter = by_name(target)
    check_options(converter, options or {})
    with _faults_of(converter, path):
        return target, converter.write(reading.wavefunction, path, options or {}, progress)


def convert(
    source: Path,
    target: Path,
    *,
    source_format: str | None = None,
    target_format: str | None = None,
    options: Mapping[str, str] | None = None,
    overwrite: bool = False,
    progress: Progress | None = None,
) -> Conversion:
    """Convert `source` to `target`. Options go to whichever of the two converters has them.

    Raises QwfxError; `target` is then as it was.
    """
    read_name = format_of(source, source_format)
    write_name = target_of(target, target_format)
    if source.exists() and target.exists() and source.samefile(target) and not overwrite:
        raise FileError(
            "source and target are the same file",
            where=str(target),
            expected="two names",
            remedy="choose another name for the target, or replace the file with --force",
        )
    reading_options, writing_options = _share_out(options or {}, read_name, write_name)
    _, reading = read_any(source, read_name, reading_options, progress)
    _, writing = write_any(
        reading, target, write_name, writing_options, overwrite=overwrite, progress=progress
    )
    return Conversion(read_name, write_name, reading.notes, writing.notes)


def _share_out(
    options: Mapping[str, str], source: str, target: str
) -> tuple[dict[str, str], dict[str, str]]:
    """Each option goes to every side that knows it; one that neither knows goes to the source, which refuses it."""
    known_to = {
        side: {option.name for option in by_name(side).options} if side != QWFX else set()
        for side in (source, target)
    }
    writing = {name: value for name, value in options.items() if name in known_to[target]}
    reading = {name: value for name, value in options.items() if name in known_to[source] or name not in writing}
    if reading and source == QWFX and target != QWFX:  # only the target can say what it would have understood
        return {}, dict(options)
    return reading, writing
