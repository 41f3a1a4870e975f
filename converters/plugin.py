"""What a converter is. Third parties implement this protocol and register it under ``qwfx.converters``."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Protocol, runtime_checkable

from qwfx.model import Wavefunction

__all__ = ["Converter", "Option", "Progress", "Reading", "Writing"]

Progress = Callable[[str, float], None]
"""Called with a short name of the present phase and the fraction done (0..1). Never called from another thread."""


@dataclass(frozen=True)
class Option:
    """One option of a converter, offered on the command line as ``--set NAME=VALUE`` and in the help text."""

    name: str
    help: str
    choices: tuple[str, ...] = ()


@dataclass(frozen=True)
class Reading:
    """What came of reading a foreign file."""

    wavefunction: Wavefunction
    notes: tuple[str, ...] = ()
    """What the user should know: the reading that was chosen and how well it fits, sections that were skipped."""


@dataclass(frozen=True)
class Writing:
    """What came of writing a foreign file."""

    notes: tuple[str, ...] = ()
    """What the target format could not carry."""


@runtime_checkable
class Converter(Protocol):
    """A source or target of conversion."""

    @property
    def name(self) -> str:
        """Word used with ``--as``, such as ``molden``."""

    @property
    def title(self) -> str:
        """One line for the help text."""

    @property
    def suffixes(self) -> tuple[str, ...]:
        """File name endings, used for targets (which have no content yet); sources are recognised by content."""

    @property
    def options(self) -> tuple[Option, ...]:
        """Options of reading and writing."""

    def recognises(self, path: Path, head: bytes) -> bool:
        """Whether `path`, whose first 64 KiB are `head`, is of this format. Must not import heavy packages."""

    def read(self, path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
        """Read `path` into a model. Raises ConversionError for bad input, UnsupportedError for a stated limit."""

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
    ) -> Writing:
        """Write `wavefunction` to `path`, atomically. Raises UnsupportedError if the target cannot hold it."""
