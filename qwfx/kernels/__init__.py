"""The fast evaluator: the same functions as `qwfx.reference`, compiled, in blocks of points, in threads."""

from __future__ import annotations

from pathlib import Path

from qwfx.kernels.compilation import compiled, prepare
from qwfx.kernels.evaluate import evaluate_functions, evaluate_orbitals
from qwfx.kernels.numeric import fill_blocks
from qwfx.kernels.overlap import overlap
from qwfx.kernels.stale import forget_stale

__all__ = ["compiled", "evaluate_functions", "evaluate_orbitals", "overlap", "prepare"]

forget_stale(fill_blocks, Path(__file__).parent)
