"""The executable specification: each formula of FORMAT.md as a few plain NumPy lines, without regard for speed."""

from qwfx.reference.functions import evaluate_functions, evaluate_orbitals

__all__ = ["evaluate_functions", "evaluate_orbitals"]
