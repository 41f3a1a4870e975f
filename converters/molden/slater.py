"""Functions of [STO]: one line a function, gathered into full monomial shells."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.molden.sections import Molden
from qwfx.model import Basis
from qwfx.reference.harmonics import monomial_powers
from qwfx.reference.norms import slater_monomial_norm

__all__ = ["slater_basis"]

Shell = tuple[int, int, int, float]


def slater_basis(molden: Molden) -> tuple[Basis, NDArray[np.int64], NDArray[np.float64]]:
    """The basis; the place of each of the file's functions in it; and (F) the factor of each function of the basis.

    A line ``norm x^i y^j z^k r^n exp(-a r)`` is one component of a monomial shell. Lines of one atom that agree in
    i+j+k, n and a, and are different components, share a shell with the factor of the first; components that no line
    names are there with zero orbital coefficients.
    """
    shells: list[tuple[Shell, dict[tuple[int, int, int], int]]] = []
    open_shells: dict[Shell, dict[tuple[int, int, int], int]] = {}
    for number, f in enumerate(molden.slater):
        key = (f.atom, sum(f.powers), f.n, f.exponent)
        members = open_shells.get(key)
        if members is None or f.powers in members:
            members = open_shells[key] = {}
            shells.append((key, members))
        members[f.powers] = number
    place = np.empty(len(molden.slater), dtype=np.int64)
    coefficients, factors, start = [], [np.zeros(0)], 0
    for (_, l, n, exponent), members in shells:
        norms = {powers: molden.slater[number].norm for powers, number in members.items()}
        first = next((norm for norm in norms.values() if norm), None)
        coefficients.append(first or float(slater_monomial_norm(l, 0, 0, n, exponent)))
        order = monomial_powers(l)
        factors.append(np.array([norms.get(powers, coefficients[-1]) / coefficients[-1] for powers in order]))
        for powers, number in members.items():
            place[number] = start + order.index(powers)
        start += len(order)
    keys = [key for key, _ in shells]
    basis = Basis(
        "slater",
        np.array([key[0] for key in keys], dtype=np.int32),
        np.array([key[1] for key in keys], dtype=np.int32),
        np.ones(len(keys), dtype=np.int8),
        np.arange(len(keys) + 1, dtype=np.int64),
        np.array([key[3] for key in keys]),
        np.array(coefficients),
        np.array([key[2] for key in keys], dtype=np.int32),
    )
    return basis, place, np.concatenate(factors)
