"""FCIDUMP files: integrals of a second-quantised Hamiltonian, both ways.

The format is that of P. J. Knowles and N. C. Handy, Comput. Phys. Commun. 54, 75 (1989), in the spellings that have
come into use since.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from qwfx.converters.plugin import Option, Progress, Reading, Writing
from qwfx.model import Wavefunction

__all__ = ["FcidumpConverter", "converter"]


class FcidumpConverter:
    """The plug-in."""

    name = "fcidump"
    title = "FCIDUMP file"
    suffixes = (".fcidump", "fcidump")
    options = (
        Option("isym", "whether ISYM counts irreps from 0 or from 1; the default is to count like ORBSYM",
               ("like-orbsym", "from-0", "from-1")),
        Option("accept-incomplete", "read a file that lacks one-electron integrals", ("no", "yes")),
        Option("spins", "whether the integrals are over orbitals of each spin; the default is what UHF says",
               ("as-stated", "resolved", "restricted")),
        Option("threshold", "writing: integrals of at most this magnitude, in hartree, are left out (1e-15)"),
        Option("spin-layout", "writing: how spin-resolved integrals are laid out", ("interleaved", "blocks")),
    )  # fmt: skip

    def recognises(self, path: Path, head: bytes) -> bool:
        """Whether a file begins with the namelist FCI, comments and blank lines aside."""
        from qwfx.converters.fcidump.header import OPENING

        return OPENING.match(head) is not None

    def read(self, path: Path, options: Mapping[str, str], progress: Progress | None = None) -> Reading:
        """Read `path`; see `qwfx.converters.fcidump.reader`."""
        from qwfx.converters.fcidump.reader import read

        return read(path, options, progress)

    def write(
        self, wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
    ) -> Writing:
        """Write the Hamiltonian; see `qwfx.converters.fcidump.writer`."""
        from qwfx.converters.fcidump.writer import write

        return write(wavefunction, path, options, progress)


converter = FcidumpConverter()
