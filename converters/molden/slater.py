"""Functions of [STO]: one line a function, gathered into full monomial shells."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.sections import Molden
from qwfx.model import Basis
from qwfx.reference.harmonics import monomial_powers

__all__ = ["slater_basis"]


def slater_basis(molden: Molden) -> tuple[Basis, NDArray[np.int64]]:
    """The basis, and the place of each of the file's functions in it.

    A line ``norm x^i y^j z^k r^n exp(-a r)`` is one component of a monomial shell. Lines of one atom that agree in
    i+j+k, n, a and norm and are different components share a shell; components that no line names are there with zero
    orbital coefficients.
    """
    shells: list[tuple[int, int, int, float, float, dict[tuple[int, int, int], int]]] = []
    for number, f in enumerate(molden.slater):
        key = (f.atom, sum(f.powers), f.n, f.exponent, f.norm)
        home = next((s for s in reversed(shells) if s[:5] == key and f.powers not in s[5]), None)
        if home is None:
            home = (*key, {})
            shells.append(home)
        home[5][f.powers] = number
    place = np.empty(len(molden.slater), dtype=np.int64)
    start = 0
    for _, l, _, _, _, members in shells:
        order = monomial_powers(l)
        for powers, number in members.items():
            place[number] = start + order.index(powers)
        start += len(order)
    basis = Basis(
        "slater",
        np.array([s[0] for s in shells], dtype=np.int32),
        np.array([s[1] for s in shells], dtype=np.int32),
        np.ones(len(shells), dtype=np.int8),
        np.arange(len(shells) + 1, dtype=np.int64),
        np.array([s[3] for s in shells]),
        np.array([s[4] for s in shells]),
        np.array([s[2] for s in shells], dtype=np.int32),
    )
    return basis, place
