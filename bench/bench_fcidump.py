"""FCIDUMP of 60 orbitals (1.68 million lines): PySCF's reader and qwfx, in turn; and the memory that qwfx takes."""

from __future__ import annotations

from bench.harness import one_thread, side_by_side

one_thread()

import tempfile  # noqa: E402
import tracemalloc  # noqa: E402
from pathlib import Path  # noqa: E402

import numpy as np  # noqa: E402
from pyscf.tools import fcidump  # noqa: E402

from qwfx.converters.fcidump import converter  # noqa: E402
from qwfx.model import Hamiltonian, System, TwoBody, Wavefunction  # noqa: E402

N_ORBITALS = 60


def hamiltonian(n: int) -> Wavefunction:
    """Random integrals of many magnitudes; none is zero."""
    rng = np.random.default_rng(0)
    n_pairs = n * (n + 1) // 2
    length = n_pairs * (n_pairs + 1) // 2
    values = rng.normal(size=length) * 10.0 ** rng.integers(-6, 0, length)
    one = rng.normal(size=(n, n))
    h = Hamiltonian(n, 1.5, {"both": one + one.T}, {"both": TwoBody(values)})
    nothing = np.zeros(0)
    return Wavefunction(System(2, 2, (), nothing.astype("i4"), nothing, nothing.reshape(0, 3)), hamiltonian=h)


def main() -> None:
    """Write, read with both, compare."""
    with tempfile.TemporaryDirectory() as folder:
        big, theirs = Path(folder) / "big.fcidump", Path(folder) / "pyscf.fcidump"
        wavefunction = hamiltonian(N_ORBITALS)
        converter.write(wavefunction, big, {})
        lines = big.read_bytes().count(b"\n")
        print(f"{N_ORBITALS} orbitals, {lines} lines, {big.stat().st_size / 1e6:.0f} MB")
        h = wavefunction.hamiltonian
        assert h is not None
        wanted = np.asarray(h.two_body["both"].values)
        ours = converter.read(big, {}).wavefunction.hamiltonian
        assert ours is not None
        assert np.array_equal(np.asarray(ours.two_body["both"].values), wanted)
        side_by_side(
            "reading",
            {
                "PySCF": lambda: fcidump.read(str(big), verbose=False),
                "qwfx": lambda: converter.read(big, {}),
            },
            runs=5,
            wanted="at least 10",
        )
        n = N_ORBITALS
        side_by_side(
            "writing",
            {
                "PySCF": lambda: fcidump.from_integrals(str(theirs), h.one_body["both"], wanted, n, 4, nuc=1.5),
                "qwfx": lambda: converter.write(wavefunction, big, {}),
            },
            runs=2,
        )
        tracemalloc.start()
        converter.read(big, {})
        peak = tracemalloc.get_traced_memory()[1]
        print(f"peak memory of reading / the arrays: {peak / (wanted.nbytes + n * n * 8):.2f}  (wanted: at most 3)")


if __name__ == "__main__":
    main()
