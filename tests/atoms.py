"""Small wave functions with Slater functions, made by hand, for the tests of the trial function."""

from __future__ import annotations

from math import factorial, sqrt

import numpy as np

from qwfx.model import Basis, Expansion, JastrowTerm, OrbitalSet, System, Wavefunction

__all__ = ["helium", "hydrogenic", "pair_term"]


def _expansion(up: int, down: int) -> Expansion:
    return Expansion(
        "spatial", "spatial", np.array([[up]], "u8"), np.array([[down]], "u8"), np.array([0, 1]), np.array([0]),
        np.ones((1, 1)),
    )  # fmt: skip


def hydrogenic(charge: float, orbital: str, exponent: float | None = None) -> Wavefunction:
    """One electron at a nucleus: ``1s``, ``2s`` or ``2p`` (all three components are orbitals, the second occupied)."""
    Z = charge
    zero = np.zeros(1, "i4")
    if orbital == "1s":
        basis = Basis("slater", zero, zero, zero.astype("i1"), np.array([0, 1]), np.array([exponent or Z]), np.ones(1))
        C, string = np.ones((1, 1)), 1
    elif orbital == "2s":  # (1 - Z r / 2) exp(-Z r / 2), of two primitives
        basis = Basis("slater", zero, zero, zero.astype("i1"), np.array([0, 2]), np.full(2, Z / 2),
                      np.array([1.0, -Z / 2]), np.array([0, 1], "i4"))  # fmt: skip
        C, string = np.ones((1, 1)), 1
    else:
        one = np.ones(1)
        basis = Basis("slater", zero, one.astype("i4"), zero.astype("i1"), np.array([0, 1]), Z / 2 * one, one)
        C, string = np.eye(3), 2
    system = System(1, 0, ("X",), np.array([int(Z)], "i4"), np.array([Z]), np.zeros((1, 3)))
    return Wavefunction(
        system, basis=basis, orbitals={"spatial": OrbitalSet("both", C)}, expansion=_expansion(string, 0)
    )


def helium(
    exponents: list[float], powers: list[int], coefficients: list[float], jastrow: dict[str, JastrowTerm] | None = None
) -> Wavefunction:
    """Two electrons in one s orbital of normalised Slater functions ``r^(n-1) exp(-zeta r)``, `powers` are n."""
    n = len(exponents)
    norms = [
        (2 * z) ** (p + 0.5) / sqrt(float(factorial(2 * p))) for z, p in zip(exponents, powers, strict=True)
    ]
    basis = Basis(
        "slater", np.zeros(1, "i4"), np.zeros(1, "i4"), np.zeros(1, "i1"), np.array([0, n]), np.array(exponents),
        np.array(coefficients) * norms, np.array(powers, "i4") - 1,
    )  # fmt: skip
    system = System(1, 1, ("He",), np.array([2], "i4"), np.array([2.0]), np.zeros((1, 3)))
    return Wavefunction(
        system, basis=basis, orbitals={"spatial": OrbitalSet("both", np.ones((1, 1)))}, expansion=_expansion(1, 1),
        jastrow=jastrow or {},
    )  # fmt: skip


def pair_term(form: str, attributes: dict[str, int] | None = None, **members: object) -> JastrowTerm:
    """An electron-electron term for the pair of one up and one down electron."""
    arrays = {name: np.array([value]) if name != "powers" else np.array(value) for name, value in members.items()}
    told: dict[str, str | int | float] = {"body": "electron-electron", **(attributes or {})}
    return JastrowTerm(form, told, {"channel": np.array(["up_down"]), **arrays})
