"""Small helpers for locations and figures in findings."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["NOISE", "at", "every", "figure", "first_true", "listed"]

NOISE = 1e-12
"""Deviations below this are rounding and are reported as such, so that reports do not depend on the machine."""


def at(member: str, index: Any = None) -> str:
    """``/basis/exponents[12]`` or ``/orbitals/main/coefficients[3,7]``."""
    if index is None:
        return member
    parts = index if isinstance(index, tuple) else (index,)
    return f"{member}[{','.join(str(int(i)) for i in parts)}]"


def every(n: int, noun: str) -> str:
    """``all 12 atoms``, ``the only atom``, ``no atom``."""
    if n < 2:
        return f"the only {noun}" if n else f"no {noun}"
    word, _, rest = noun.partition(" of ")
    plural = f"{word[:-1]}ies" if word.endswith("y") else f"{word}s"
    return f"all {n} {plural}{' of ' + rest if rest else ''}"


def figure(x: float) -> str:
    """A measured deviation with three digits; below `NOISE` just that."""
    value = abs(float(x))
    if not np.isfinite(value):
        return str(value)
    return f"below {NOISE:.0e}" if value < NOISE else f"{value:.2e}"


def first_true(mask: NDArray[np.bool_]) -> tuple[int, ...]:
    """Index of the first true element in C order. The mask has one."""
    return tuple(int(i) for i in np.unravel_index(int(np.argmax(mask)), mask.shape))


def listed(items: Iterable[Any], limit: int = 5) -> str:
    """``a, b, c and 4 more``."""
    everything = [str(x) for x in items]
    if len(everything) <= limit:
        return ", ".join(everything)
    return f"{', '.join(everything[:limit])} and {len(everything) - limit} more"
