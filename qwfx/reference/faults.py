"""Faults of a wave function, in the same words wherever they are found: by `qwfx validate`, or by an evaluator."""

from __future__ import annotations

from dataclasses import dataclass

from qwfx.errors import FormatError

__all__ = ["Fault"]


@dataclass(frozen=True)
class Fault:
    """Something in a file that is not as it must be."""

    where: str
    """Member with the first index concerned."""
    expected: str
    found: str
    remedy: str

    def error(self) -> FormatError:
        """The same as an exception."""
        return FormatError(self.found, where=self.where, expected=self.expected, remedy=self.remedy)
