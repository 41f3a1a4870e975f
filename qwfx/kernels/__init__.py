"""The fast evaluator: the same functions as `qwfx.reference`, compiled, in blocks of points, in threads."""

from __future__ import annotations

from qwfx.kernels.compilation import compiled, prepare
from qwfx.kernels.evaluate import evaluate_functions, evaluate_orbitals
from qwfx.kernels.overlap import overlap

__all__ = ["compiled", "evaluate_functions", "evaluate_orbitals", "overlap", "prepare"]
