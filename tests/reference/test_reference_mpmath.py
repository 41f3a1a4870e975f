"""Functions and derivatives against mpmath at 50 digits, built from the definition of spherical harmonics.

Nothing of the package enters the other side: the harmonics come from mpmath's complex ``Y_l^m``, the derivatives from
its numerical differentiation at 50 digits.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import mpmath
import numpy as np
import pytest
from reference_cases import ShellData, largest_terms, make_basis

from qwfx.reference import evaluate_functions

POSITIONS = np.array([[0.125, -0.5, 0.25], [-1.0, 0.75, 0.5]])
POINTS = np.array([[0.25, 0.5, 0.875], [-0.75, -1.125, 0.0625], [1.5, 0.375, -0.625]])
Field = Callable[[Any, Any, Any], Any]


def solid_harmonic(l: int, m: int) -> Field:
    """``r^l Y_lm``, real, without the Condon-Shortley phase: sine for m < 0, cosine for m > 0."""

    def value(x: Any, y: Any, z: Any) -> Any:
        r = mpmath.sqrt(x * x + y * y + z * z)
        # mpmath's Y_l^m = sqrt(...) P_l^m(cos theta) exp(i m phi), with the phase (-1)^m inside P_l^m.
        complex_y = mpmath.spherharm(l, abs(m), mpmath.acos(z / r), mpmath.atan2(y, x))
        if m == 0:
            return r**l * complex_y.real
        part = complex_y.real if m > 0 else complex_y.imag
        return r**l * mpmath.sqrt(2) * (-1) ** abs(m) * part

    return value


def monomial(i: int, j: int, k: int) -> Field:
    return lambda x, y, z: x**i * y**j * z**k


def angular_parts(shell: ShellData) -> list[Field]:
    """The functions of a shell in the order of the format, written out anew."""
    l = shell.l
    if not shell.monomial:
        return [solid_harmonic(l, m) for m in range(-l, l + 1)]
    triples = [(i, j, k) for i in range(l + 1) for j in range(l + 1) for k in range(l + 1) if i + j + k == l]
    return [monomial(*t) for t in sorted(triples, reverse=True)]


def exact(shell: ShellData, q: int, angular: Field, point: Any, center: Any) -> list[Any]:
    """Value, gradient, Laplacian at one point to 50 digits."""

    def function(*at: Any) -> Any:
        x = [p - c for p, c in zip(at, center, strict=True)]
        r = mpmath.sqrt(sum(u * u for u in x))
        radial = sum(mpmath.mpf(c) * r**n * mpmath.exp(-mpmath.mpf(a) * r**q) for a, c, n in shell.primitives)
        return radial * angular(*x)

    first, second = [], []
    for axis in range(3):
        orders = [1 if k == axis else 0 for k in range(3)]
        first.append(mpmath.diff(function, tuple(point), tuple(orders)))
        second.append(mpmath.diff(function, tuple(point), tuple(2 * o for o in orders)))
    return [function(*point), *first, sum(second)]


def compare(radial: Any, shell: ShellData) -> None:
    basis = make_basis(radial, [shell])
    found = evaluate_functions(basis, POSITIONS, POINTS)
    scale = largest_terms(basis, POSITIONS, POINTS)
    q = 2 if radial == "gaussian" else 1
    with mpmath.workdps(50):
        center = [mpmath.mpf(c) for c in POSITIONS[shell.center].tolist()]
        for p, point in enumerate(POINTS.tolist()):
            at = [mpmath.mpf(x) for x in point]
            for f, angular in enumerate(angular_parts(shell)):
                for row, wanted in enumerate(exact(shell, q, angular, at, center)):
                    error = abs(mpmath.mpf(float(found[row, p, f])) - wanted)
                    assert error <= 1e-13 * scale[row, p, f], (shell, f, row, point, float(error))


@pytest.mark.parametrize("monomial_shell", [False, True], ids=["solid", "monomial"])
@pytest.mark.parametrize("radial", ["gaussian", "slater"])
@pytest.mark.parametrize("l", range(7))
def test_contracted_functions(l: int, radial: str, monomial_shell: bool) -> None:
    compare(radial, ShellData(l % 2, l, monomial_shell, ((0.7, 1.25, 0), (2.1, -0.4, 0))))


@pytest.mark.parametrize("radial", ["gaussian", "slater"])
@pytest.mark.parametrize("l", [0, 1, 2, 4])
@pytest.mark.parametrize("power", [1, 2, 3, 6, -1])
def test_powers_of_the_distance(l: int, radial: str, power: int) -> None:
    compare(radial, ShellData(1, l, l == 2, ((0.9, 0.8, power), (1.6, 0.3, 0))))
