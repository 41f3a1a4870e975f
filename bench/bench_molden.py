"""Reading a Molden file of 900 functions and 900 orbitals, orthonormality test and witness included."""

from __future__ import annotations

import tempfile
import tracemalloc
from pathlib import Path

from bench.harness import one_thread, side_by_side

ATOMS = 30
BOHR_BETWEEN = 2.7


def _write(path: Path) -> int:
    """A chain of carbon atoms, cc-pVTZ, with orthonormalised orbitals; the number of functions."""
    import numpy as np
    from pyscf import gto
    from pyscf.tools import molden

    mol = gto.M(
        atom=[("C", (BOHR_BETWEEN * i, 0.4 * (i % 2), 0.3 * (i % 3))) for i in range(ATOMS)],
        unit="Bohr", basis="cc-pvtz", verbose=0,
    )  # fmt: skip
    values, vectors = np.linalg.eigh(mol.intor("int1e_ovlp"))
    orbitals = vectors / np.sqrt(values)
    occupations = np.where(np.arange(len(values)) < mol.nelectron // 2, 2.0, 0.0)
    molden.from_mo(mol, str(path), orbitals, occ=occupations)
    return len(values)


def main() -> None:
    """Time and memory against PySCF's own reader, which tests nothing."""
    one_thread()
    import numpy as np
    from pyscf.tools import molden

    from qwfx.converters.molden import converter

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "chain.molden"
        n = _write(path)
        side_by_side(
            f"Molden file, {n} functions and orbitals, {path.stat().st_size / 1e6:.0f} MB",
            {
                "pyscf.tools.molden.load": lambda: molden.load(str(path)),
                "qwfx (with orthonormality test and witness)": lambda: converter.read(path, {}),
            },
            runs=3,
            wanted="10",
        )
        tracemalloc.start()
        reading = converter.read(path, {})
        _, peak = tracemalloc.get_traced_memory()
        tracemalloc.stop()
        orbitals = np.asarray(reading.wavefunction.orbitals["spatial"].coefficients).nbytes
        print(f"  peak memory / orbital coefficients and overlap: {peak / (2 * orbitals):.2f}  (wanted: 3)")
        print("  " + "; ".join(reading.notes))


if __name__ == "__main__":
    main()
