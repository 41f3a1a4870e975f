"""Rows of orbitals, or of their derivatives, in the place of those of the electrons: sums over gamma."""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.kernels.numeric import JIT

__all__ = ["contract"]


@njit(**JIT)  # type: ignore[untyped-decorator]
def _contract(phi: Any, gamma: Any, out: Any) -> None:
    """out[k, w, i] = sum_p phi[k, p, w, i] gamma[w, p, i]."""
    for w in range(gamma.shape[0]):
        for k in range(phi.shape[0]):
            for i in range(gamma.shape[2]):
                out[k, w, i] = 0
            for p in range(gamma.shape[1]):
                for i in range(gamma.shape[2]):
                    out[k, w, i] += phi[k, p, w, i] * gamma[w, p, i]


def contract(phi: NDArray[Any], gamma: NDArray[Any]) -> NDArray[Any]:
    """(S, k, W, n) of `phi` (k, M, W, n) and `gamma` (S, W, M, n): what replaces row i of Phi, over D."""
    kind = np.result_type(phi, gamma)
    out = np.empty((len(gamma), len(phi), *gamma.shape[1:2], gamma.shape[3]), kind)
    for s in range(len(gamma)):
        _contract(phi, gamma[s], out[s])
    return out
