"""[STO]: functions line by line, against SciPy integrals and against the witness."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.special import gamma

from qwfx.converters.molden import converter
from qwfx.errors import ConversionError
from qwfx.kernels import evaluate_orbitals

Line = tuple[int, int, int, int, int, float]
LINES: list[Line] = [
    (1, 0, 0, 0, 0, 2.7), (1, 0, 0, 0, 1, 1.2), (1, 1, 0, 0, 0, 1.3), (1, 0, 1, 0, 0, 1.3), (1, 0, 0, 1, 0, 1.3),
    (2, 0, 0, 0, 0, 1.0), (2, 0, 1, 0, 0, 0.9), (2, 1, 1, 0, 0, 1.1), (2, 0, 2, 0, 0, 1.1),
]  # fmt: skip
POSITIONS = np.array([[0.1, -0.2, 0.3], [0.5, 1.2, -0.8]])
POINTS = np.random.default_rng(1).normal(size=(25, 3)) * 1.5


def norm(line: Line) -> float:
    _, i, j, k, n, a = line
    angular = 2 * gamma(i + 0.5) * gamma(j + 0.5) * gamma(k + 0.5) / gamma(i + j + k + 1.5)
    degree = 2 * (i + j + k + n) + 3
    return float((angular * gamma(degree) / (2 * a) ** degree) ** -0.5)


def functions(points: np.ndarray) -> np.ndarray:
    """(points, functions), each of unit norm."""
    columns = []
    for atom, i, j, k, n, a in LINES:
        x, y, z = (points - POSITIONS[atom - 1]).T
        r = np.sqrt(x**2 + y**2 + z**2)
        columns.append(norm((atom, i, j, k, n, a)) * x**i * y**j * z**k * r**n * np.exp(-a * r))
    return np.stack(columns, axis=1)


def overlap_by_quadrature() -> np.ndarray:
    """In prolate spheroidal coordinates about the two atoms, where the cusps are at the ends of the ranges."""
    a, b = POSITIONS
    half = np.linalg.norm(b - a) / 2
    axis = (b - a) / (2 * half)
    side = np.cross(axis, [1.0, 0.0, 0.0])
    side /= np.linalg.norm(side)
    other = np.cross(axis, side)
    xi, wxi = np.polynomial.laguerre.laggauss(60)
    eta, weta = np.polynomial.legendre.leggauss(60)
    phi = np.arange(16) * 2 * np.pi / 16
    s = 1.5 * half
    x, e, p = np.meshgrid(1 + xi / s, eta, phi, indexing="ij")
    weight = (wxi * np.exp(xi) / s)[:, None, None] * weta[:, None] * (2 * np.pi / 16) * half**3 * (x**2 - e**2)
    rho = half * np.sqrt((x**2 - 1) * (1 - e**2))
    points = (
        (a + b) / 2 + (half * x * e)[..., None] * axis
        + rho[..., None] * (np.cos(p)[..., None] * side + np.sin(p)[..., None] * other)
    ).reshape(-1, 3)  # fmt: skip
    values = functions(points)
    return np.asarray((values * weight.reshape(-1)[:, None]).T @ values)


@pytest.fixture(scope="module")
def orbitals() -> np.ndarray:
    values, vectors = np.linalg.eigh(overlap_by_quadrature())
    return np.asarray((vectors / np.sqrt(values)).T)


def write(path: Path, orbitals: np.ndarray, printed_norms: bool) -> None:
    out = ["[Molden Format]", "[Atoms] AU"]
    out += [f"H {i + 1} 1 {x} {y} {z}" for i, (x, y, z) in enumerate(POSITIONS)]
    out.append("[STO]")
    for line in LINES:
        atom, i, j, k, n, a = line
        out.append(f"{atom} {i} {j} {k} {n} {a} {norm(line) if printed_norms else 1.0:.16e}")
    out.append("[MO]")
    for p, row in enumerate(orbitals):
        out += [f"Ene= {p - 3}.5", "Spin= Alpha", f"Occup= {2 if p == 0 else 0}"]
        out += [f"{k + 1} {c:.16e}" for k, c in enumerate(row)]
    path.write_text("\n".join(out))


@pytest.mark.parametrize(("printed", "name"), [(True, "as-printed"), (False, "contraction-normalised")])
def test_functions(printed: bool, name: str, orbitals: np.ndarray, tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    write(path, orbitals, printed)
    reading = converter.read(path, {})
    assert any(note.startswith(f"reading {name} ") for note in reading.notes)
    wavefunction = reading.wavefunction
    basis, witness = wavefunction.basis, wavefunction.witness
    assert basis is not None
    assert witness is not None
    assert basis.n_shells == 6  # s, s, p | s, p with y alone, d with xy and yy
    rows = np.asarray(wavefunction.orbitals["spatial"].coefficients)
    ours = evaluate_orbitals(basis, wavefunction.system.positions, rows, POINTS, derivatives=0)[0]
    np.testing.assert_allclose(ours, functions(POINTS) @ orbitals.T, rtol=0, atol=1e-12)
    again = evaluate_orbitals(basis, wavefunction.system.positions, rows, witness.points, derivatives=2)
    told = witness.orbitals["spatial"]
    assert not witness.independent
    scale = np.abs(told.laplacians).max()
    np.testing.assert_allclose(again[0], told.values, rtol=0, atol=1e-12)
    np.testing.assert_allclose(np.moveaxis(again[1:4], 0, -1), told.gradients, rtol=0, atol=1e-12)
    np.testing.assert_allclose(again[4], told.laplacians, rtol=0, atol=1e-12 * scale)


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ("1 0 0 0 0 1.0", "6 entries"),
        ("1 -2 0 0 0 1.0 1.0", "powers"),
        ("1 0 0 0 -1 1.0 1.0", "powers"),
        ("1 0 0 0 0 -1.0 1.0", "exponent"),
        ("3 0 0 0 0 1.0 1.0", "no atom 3"),
        ("1 0 0 0 0 one 1.0", "one"),
    ],
)
def test_damage(line: str, said: str, tmp_path: Path) -> None:
    path = tmp_path / "case.molden"
    path.write_text(f"[Molden Format]\n[Atoms] AU\nH 1 1 0 0 0\n[STO]\n{line}\n[MO]\nOccup= 1\n1 1.0\n")
    with pytest.raises(ConversionError, match=said) as caught:
        converter.read(path, {})
    assert caught.value.where.endswith("case.molden:5")
