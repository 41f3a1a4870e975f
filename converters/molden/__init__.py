"""Molden files: basis functions and orbitals, both ways."""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path

from qwfx.converters.plugin import Option, Progress, Reading, Writing
from qwfx.model import Wavefunction

__all__ = ["MoldenConverter", "converter"]

READING_NAMES = (
    "as-printed", "contraction-normalised", "as-printed-shared", "contraction-normalised-shared",
    "primitive-factors-included", "primitive-factors-normalised", "primitive-factors-included-shared",
    "primitive-factors-normalised-shared",
)  # fmt: skip


class MoldenConverter:
    """The plug-in."""

    name = "molden"
    title = "Molden file"
    suffixes = (".molden", ".molden.input", ".mld")
    options = (
        Option("reading", "how the file normalises its functions; by default the reading under which the orbitals are "
               "orthonormal", READING_NAMES),
        Option("signs", "signs of spherical functions of l >= 3 with m = 3, -3, 4, -4; by default those with which "
               "the orbitals are orthonormal", ("standard", "reversed-3-4")),
        Option("electrons", "numbers of up and down electrons, such as 5,4; by default from the occupations"),
        Option("core-electrons", "electrons that core potentials replace, such as I=46; by default from the charges "
               "and the electron count"),
        Option("core-potential", "core potential from PySCF's library, such as I=stuttgart: Molden files carry none"),
    )  # fmt: skip

    def recognises(self, path: Path, head: bytes) -> bool:
        """Whether a file begins with [Molden Format], or has its sections."""
        if re.search(rb"^\s*\[\s*molden\s+format\s*\]", head, re.IGNORECASE | re.MULTILINE):
            return True
        return bool(
            re.search(rb"^\s*\[atoms\]", head, re.IGNORECASE | re.MULTILINE)
            and re.search(rb"^\s*\[(gto|sto)\]", head, re.IGNORECASE | re.MULTILINE)
        )

    def read(self, path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
        """Read `path`; see `qwfx.converters.molden.reader`."""
        from qwfx.converters.molden.reader import read

        return read(path, options, progress)

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
    ) -> Writing:
        """Write the orbitals; see `qwfx.converters.molden.writer`."""
        from qwfx.converters.molden.writer import write

        return write(wavefunction, path, options, progress)


converter = MoldenConverter()
