"""The executable specification: each formula of FORMAT.md as a few plain NumPy lines, without regard for speed."""

from qwfx.reference.functions import evaluate_functions, evaluate_orbitals
from qwfx.reference.harmonics import solid_from_monomial
from qwfx.reference.overlap import overlap

__all__ = ["evaluate_functions", "evaluate_orbitals", "overlap", "solid_from_monomial"]
