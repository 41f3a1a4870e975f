"""The exceptions that a caller may catch. Each says where, what was expected, what was found, what to do."""

from __future__ import annotations

__all__ = [
    "ConversionError",
    "EvaluationError",
    "FileError",
    "FormatError",
    "QwfxError",
    "UnsafeFileError",
    "UnsupportedError",
    "VersionError",
]


class QwfxError(Exception):
    """Base of all errors that qwfx raises on purpose.

    Parameters
    ----------
    found : str
        What was found, as a full clause.
    where : str
        File, line, member or argument that is concerned.
    expected : str
        What would have been right.
    remedy : str
        What the reader of the message can do about it.
    """

    def __init__(self, found: str, *, where: str = "", expected: str = "", remedy: str = "") -> None:
        self.found = found
        self.where = where
        self.expected = expected
        self.remedy = remedy
        super().__init__(str(self))

    def __str__(self) -> str:
        text = f"{self.where}: {self.found}" if self.where else self.found
        if self.expected:
            text += f"; expected: {self.expected}"
        if self.remedy:
            text += f"; to do: {self.remedy}"
        return text

    def __reduce__(self) -> tuple[object, ...]:
        # Exceptions with keyword arguments do not pickle by default, and helpers in other processes raise these.
        return (_rebuild, (type(self), self.found, self.where, self.expected, self.remedy))


def _rebuild(kind: type[QwfxError], found: str, where: str, expected: str, remedy: str) -> QwfxError:
    return kind(found, where=where, expected=expected, remedy=remedy)


class FileError(QwfxError):
    """A file cannot be read or written at all: absent, not permitted, no space, truncated, not of this kind."""


class FormatError(QwfxError):
    """A file is HDF5 but does not follow FORMAT.md, so a model cannot be built from it."""


class VersionError(FormatError):
    """A file carries a major version of the format that this reader does not know."""


class UnsafeFileError(FormatError):
    """A file contains what a reader must refuse: external links or storage, foreign filters, references, bombs."""


class ConversionError(QwfxError):
    """Foreign data (Molden, FCIDUMP, a checkpoint, a live object) is damaged, incomplete or ambiguous."""


class UnsupportedError(QwfxError):
    """The input is sound, but qwfx or the target format has a documented limit that it exceeds."""


class EvaluationError(QwfxError):
    """A wave function cannot be evaluated with the arguments or the data at hand."""
