"""Shared fixtures."""

from __future__ import annotations

import os
from pathlib import Path

# The molecules of the tests are small: threads of OpenMP would wait for each other, for minutes where another process
# has one of the processors. To be said before any library starts them.
os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import pytest
from hypothesis import settings

# Continuous integration judges a change by the same examples each time; at home every run draws new ones.
settings.register_profile("ci", derandomize=True, deadline=None)
settings.register_profile("home", deadline=None)
settings.load_profile("ci" if os.environ.get("CI") else "home")


@pytest.fixture(scope="session")
def small_file(tmp_path_factory: pytest.TempPathFactory) -> str:
    """A small valid file: one hydrogen-like orbital on one centre, with nothing optional."""
    from qwfx.model import Basis, OrbitalSet, System, Wavefunction
    from qwfx.storage import save

    exponent = 0.5
    norm = 2 * (2 * exponent) ** 0.75 / np.pi**0.25  # int (norm exp(-a r^2))^2 r^2 dr = 1
    wavefunction = Wavefunction(
        System(1, 0, ("H1",), np.array([1], "i4"), np.array([1.0]), np.zeros((1, 3))),
        basis=Basis(
            "gaussian", np.zeros(1, "i4"), np.zeros(1, "i4"), np.zeros(1, "i1"), np.array([0, 1]),
            np.array([exponent]), np.array([norm]),
        ),
        orbitals={"spatial": OrbitalSet("both", np.ones((1, 1)))},
    )  # fmt: skip
    path: Path = tmp_path_factory.mktemp("small") / "small.qwfx"
    save(wavefunction, path)
    return str(path)
