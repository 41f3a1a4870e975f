"""PySCF as source and target: live objects, checkpoint files, molecules, mean-field objects, energies.

PySCF itself is imported inside the functions that need it.
"""

from __future__ import annotations

from qwfx.converters.pyscf.checkpoint import CheckpointConverter
from qwfx.converters.pyscf.ci_vectors import CIVectors, expansion_from_ci, to_ci_vectors, with_ci_vectors
from qwfx.converters.pyscf.energies import casci_energy, energy
from qwfx.converters.pyscf.from_mean_field import from_pyscf
from qwfx.converters.pyscf.full_ci import fci_energy
from qwfx.converters.pyscf.hamiltonian import with_hamiltonian
from qwfx.converters.pyscf.library import potentials_from_library
from qwfx.converters.pyscf.to_mean_field import to_mean_field
from qwfx.converters.pyscf.to_mole import Translation, to_mole, translate

__all__ = [
    "CIVectors",
    "Translation",
    "casci_energy",
    "converter",
    "energy",
    "expansion_from_ci",
    "fci_energy",
    "from_pyscf",
    "potentials_from_library",
    "to_ci_vectors",
    "to_mean_field",
    "to_mole",
    "translate",
    "with_ci_vectors",
    "with_hamiltonian",
]

converter = CheckpointConverter()
