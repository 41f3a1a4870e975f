"""What the structural check says."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["SchemaProblem"]


@dataclass(frozen=True)
class SchemaProblem:
    """One way in which an outline departs from the schema."""

    path: str
    """Member in the file, such as ``/basis/exponents``; an attribute after ``@``, such as ``/system@n_up``."""
    expected: str
    found: str
    remedy: str
    keyword: str
    """Keyword of the schema that decided, such as ``required``; ``dims`` for extents that disagree."""

    def __str__(self) -> str:
        return f"{self.path}: {self.found}; expected: {self.expected}; to do: {self.remedy}"
