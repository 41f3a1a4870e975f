"""The fast evaluator: the same functions as `qwfx.reference`, compiled, in blocks of points, in threads."""

from __future__ import annotations

from qwfx.kernels.evaluate import evaluate_functions, evaluate_orbitals

__all__ = ["evaluate_functions", "evaluate_orbitals"]
