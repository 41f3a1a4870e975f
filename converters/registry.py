"""Finding converters: every one, built in or third-party, comes through the entry-point group ``qwfx.converters``."""

from __future__ import annotations

from collections.abc import Mapping
from functools import lru_cache
from importlib.metadata import entry_points
from pathlib import Path

from qwfx.converters.plugin import Converter
from qwfx.errors import ConversionError, FileError, UnsupportedError

__all__ = ["ENTRY_POINT_GROUP", "available", "by_name", "check_options", "for_target", "recognise"]

ENTRY_POINT_GROUP = "qwfx.converters"
HEAD_BYTES = 65536


@lru_cache(maxsize=1)
def _load() -> tuple[Mapping[str, Converter], Mapping[str, str]]:
    found: dict[str, Converter] = {}
    failed: dict[str, str] = {}
    for entry in sorted(entry_points(group=ENTRY_POINT_GROUP), key=lambda e: e.name):
        try:
            converter = entry.load()
        except Exception as error:  # a third party's import may fail in any way, and must not take the others along
            failed[entry.name] = f"{type(error).__name__}: {error}"
            continue
        if not isinstance(converter, Converter):
            failed[entry.name] = f"{entry.value} does not have the members of qwfx.converters.plugin.Converter"
        else:
            found[entry.name] = converter
    return found, failed


def available() -> tuple[Mapping[str, Converter], Mapping[str, str]]:
    """All converters by name, and the plug-ins that could not be loaded with the reason of each."""
    return _load()


def by_name(name: str) -> Converter:
    """The converter called `name`. Raises UnsupportedError if there is none."""
    found, failed = _load()
    if name in found:
        return found[name]
    if name in failed:
        raise UnsupportedError(
            f"the converter {name!r} could not be loaded ({failed[name]})",
            where="--as",
            expected="a plug-in that can be imported",
            remedy="reinstall the package that provides it",
        )
    raise UnsupportedError(
        f"no converter is called {name!r}",
        where="--as",
        expected="qwfx, " + ", ".join(found),
        remedy="choose one of these, or install the package that provides it",
    )


def read_head(path: Path) -> bytes:
    """The first 64 KiB of `path`. Raises FileError if it cannot be read."""
    try:
        with open(path, "rb") as stream:
            return stream.read(HEAD_BYTES)
    except OSError as error:
        raise FileError(
            f"cannot be read ({error.strerror or error})",
            where=str(path),
            expected="a readable file",
            remedy="check the path and the permissions",
        ) from error


def recognise(path: Path) -> Converter:
    """The one converter that recognises the content of `path`.

    Raises FileError if it cannot be read, ConversionError if none or more than one recognises it.
    """
    head = read_head(path)
    if not head:
        raise ConversionError(
            "the file is empty", where=str(path), expected="a wave function", remedy="check how it was made"
        )
    found, failed = _load()
    names = []
    for name, converter in found.items():
        try:
            if converter.recognises(path, head):
                names.append(name)
        except Exception as error:  # of a plug-in that fails the others must not suffer
            failed = {**failed, name: f"{type(error).__name__}: {error}"}
    if len(names) == 1:
        return found[names[0]]
    unloaded = f" (converters that failed: {', '.join(failed)})" if failed else ""
    if names:
        raise ConversionError(
            f"more than one format fits the content: {', '.join(names)}",
            where=str(path),
            expected="one format",
            remedy="name it with --as",
        )
    raise ConversionError(
        f"the content is of no known format{unloaded}",
        where=str(path),
        expected="qwfx, " + ", ".join(c.title for c in found.values()),
        remedy="name the format with --as if you know it, or check that the file is complete",
    )


def for_target(path: Path) -> Converter | None:
    """The converter whose file name ending `path` has, or None."""
    name = path.name.lower()
    return next((c for c in _load()[0].values() if any(name.endswith(suffix) for suffix in c.suffixes)), None)


def check_options(converter: Converter, options: Mapping[str, str]) -> None:
    """Raises UnsupportedError if an option is not one of the converter's, or its value not one of its choices."""
    known = {option.name: option for option in converter.options}
    for name, value in options.items():
        if name not in known:
            raise UnsupportedError(
                f"the converter {converter.name} has no option {name!r}",
                where=f"--set {name}={value}",
                expected=", ".join(known) or "no options",
                remedy="see `qwfx convert --formats`",
            )
        choices = known[name].choices
        if choices and value not in choices:
            raise UnsupportedError(
                f"the option {name} cannot be {value!r}",
                where=f"--set {name}={value}",
                expected=" or ".join(choices),
                remedy="choose one of these",
            )
