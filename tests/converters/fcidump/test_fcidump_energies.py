"""Orbitals may be rotated, each spin by itself, by complex matrices too: the full-CI energy of the file stays."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from qwfx.converters.fcidump import converter
from qwfx.converters.pyscf import fci_energy
from qwfx.kernels.packing import dense, pack, unpack
from qwfx.model import Hamiltonian, TwoBody, Wavefunction

BASELINE = Path(__file__).parent / "corpus" / "z_z01_baseline_amp_end" / "case.fcidump"
ENERGY = -108.84862093447916


def rotation(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[np.generic]:
    matrix = rng.normal(size=(n, n)) + (1j * rng.normal(size=(n, n)) if is_complex else 0)
    return np.asarray(np.linalg.qr(matrix)[0])


@pytest.mark.parametrize("is_complex", [False, True])
@pytest.mark.parametrize("layout", ["restricted", "interleaved", "blocks"])
def test_energy_of_rotated_orbitals(tmp_path: Path, layout: str, is_complex: bool) -> None:
    wavefunction = converter.read(BASELINE, {}).wavefunction
    h = wavefunction.hamiltonian
    assert h is not None
    n, rng = h.n_orbitals, np.random.default_rng(3)
    one = np.asarray(h.one_body["both"])
    two = unpack(dense(h.two_body["both"].values, h.two_body["both"].index, "eightfold", n), "eightfold", n)
    up = rotation(rng, n, is_complex)
    down = up if layout == "restricted" else rotation(rng, n, is_complex)
    pairs = {"up_up": (up, up), "up_down": (up, down), "down_down": (down, down)}
    packed = {}
    for key, (a, b) in pairs.items():
        like = key != "up_down"
        packing = "pairs" if is_complex else "eightfold" if like else "fourfold"
        full = np.einsum("pqrs,pa,qb,rc,sd->abcd", two, a.conj(), a, b.conj(), b, optimize=True)
        packed[key] = TwoBody(pack(full, packing, like))
    matrices = {"up": up.conj().T @ one @ up, "down": down.conj().T @ one @ down}
    if layout == "restricted":
        matrices, packed = {"both": matrices["up"]}, {"both": packed["up_up"]}
    rotated = Hamiltonian(n, h.core_energy, matrices, packed, complex_orbitals=is_complex)
    path = tmp_path / "x.fcidump"
    options = {} if layout == "restricted" else {"spin-layout": layout}
    converter.write(Wavefunction(wavefunction.system, hamiltonian=rotated), path, options)
    found = converter.read(path, {}).wavefunction
    assert found.hamiltonian is not None
    assert found.hamiltonian.complex_orbitals == is_complex
    assert fci_energy(found) == pytest.approx(ENERGY, abs=1e-8)
