"""Compiling the kernels: once on each machine, kept between runs, and not without a word."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from qwfx.model import Basis

__all__ = ["compiled", "prepare"]


def _kernels() -> tuple[Any, ...]:
    from qwfx.kernels.numeric import fill_blocks
    from qwfx.kernels.overlap import _overlap

    return fill_blocks, _overlap


def compiled() -> bool:
    """Whether the kernels are compiled already, in this process or in Numba's cache on the disk."""
    for kernel in _kernels():
        if kernel.signatures:
            continue
        # Numba keeps one index file per function beside its compiled code; it is there once the function was compiled
        # from this very source. The cache is in __pycache__, or in the user's cache folder where that is read-only.
        try:
            index = kernel._cache._cache_file._load_index()
        except AttributeError:  # another version of Numba keeps it elsewhere: then it is compiled without a word
            return True
        if not index:
            return False
    return True


def prepare(progress: Callable[[str, float], None] | None = None) -> None:
    """Compile the kernels, or load them from the cache, by using each once on one function."""
    from qwfx.kernels.evaluate import evaluate_orbitals
    from qwfx.kernels.overlap import overlap

    one = np.zeros(1, dtype=np.int32)
    basis = Basis("gaussian", one, one, one.astype(np.int8), np.array([0, 1]), np.ones(1), np.ones(1))
    if progress:
        progress("compiling the evaluation kernels (once)", 0.0)
    evaluate_orbitals(basis, np.zeros((1, 3)), np.ones((1, 1)), np.zeros((1, 3)), threads=1)
    if progress:
        progress("compiling the overlap kernel (once)", 0.7)
    overlap(basis, np.zeros((1, 3)))
    if progress:
        progress("compiled", 1.0)
