"""Element symbols and covalent radii, for plausibility only: nothing here enters a formula of the format."""

from __future__ import annotations

import re

from qwfx.elements import BOHR
from qwfx.elements import SYMBOLS as _SYMBOLS

__all__ = ["BOHR", "COVALENT_RADII", "SYMBOLS", "element_readings"]

SYMBOLS = _SYMBOLS[1:]
"""Element symbols, Z = 1 first."""

COVALENT_RADII = tuple(
    float(x)
    for x in (
        "0.31 0.28 1.28 0.96 0.84 0.76 0.71 0.66 0.57 0.58 1.66 1.41 1.21 1.11 1.07 1.05 1.02 1.06 2.03 1.76 1.70 "
        "1.60 1.53 1.39 1.39 1.32 1.26 1.24 1.32 1.22 1.22 1.20 1.19 1.20 1.20 1.16 2.20 1.95 1.90 1.75 1.64 1.54 "
        "1.47 1.46 1.42 1.39 1.45 1.44 1.42 1.39 1.39 1.38 1.39 1.40 2.44 2.15 2.07 2.04 2.03 2.01 1.99 1.98 1.98 "
        "1.96 1.94 1.92 1.92 1.89 1.90 1.87 1.87 1.75 1.70 1.62 1.51 1.44 1.41 1.36 1.36 1.32 1.45 1.46 1.48 1.40 "
        "1.50 1.50 2.60 2.21 2.15 2.06 2.00 1.96 1.90 1.87 1.80 1.69"
    ).split()
)
"""Angstrom, Z = 1 to 96. Cordero et al., Dalton Trans. 2008, 2832 (sp3 carbon, low-spin metals), written down from
memory; a few hundredths do not matter where they are used."""

NOBLE = frozenset({2, 10, 18, 36, 54, 86})
"""Atoms that form no bond that a length could be compared with."""


def element_readings(label: str) -> set[int]:
    """Atomic numbers that the leading letters of an atom's label can stand for; empty if none.

    ``C1`` is carbon; ``CA`` may be calcium or a user's name of a carbon; ``GHOST-O`` and ``X_O`` name ghosts of O.
    """
    text = re.sub(r"^(ghost|gh|bq|x)[-_:\s.]+", "", label.strip(), flags=re.IGNORECASE)
    letters = re.match(r"[A-Za-z]*", text)
    word = letters.group(0) if letters else ""
    return {SYMBOLS.index(part) + 1 for part in (word[:1].upper(), word[:2].capitalize()) if part in SYMBOLS}
