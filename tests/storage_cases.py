"""A small valid wave function for the tests of storage."""

from __future__ import annotations

import numpy as np

from qwfx import model

__all__ = ["valid"]


def valid() -> model.Wavefunction:
    one = np.zeros(1, "i4")
    rng = np.random.default_rng(1)
    return model.Wavefunction(
        model.System(1, 1, ("He",), np.array([2], "i4"), np.array([2.0]), np.zeros((1, 3))),
        basis=model.Basis("gaussian", one, one, one.astype("i1"), np.array([0, 1]), np.ones(1), np.ones(1)),
        orbitals={"spatial": model.OrbitalSet("both", rng.normal(size=(30, 1)))},
        energies=model.Energies(one, ("RHF",), np.ones(1), np.zeros(1), ("total",)),
    )
