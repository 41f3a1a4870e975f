"""One local energy from an expansion in determinants against one from a single determinant; and the memory it takes.

The molecule is butatriene-like, C4H4: 28 electrons, a closed core of 7 orbitals, 14 electrons in 14 active orbitals,
204 functions. The entries are the largest of a random CI vector that decays with the rank of the excitation. An energy
here is all that its kinetic part needs: orbitals with gradients and Laplacians, D and gamma, and the contraction of
the two. Both sides are given the same walkers, in the same batches, with the same threads.
"""

from __future__ import annotations

from bench.harness import one_thread, side_by_side

one_thread()  # of BLAS and PySCF; qwfx makes its own

import os  # noqa: E402
import subprocess  # noqa: E402
import sys  # noqa: E402
import tempfile  # noqa: E402
import time  # noqa: E402
import tracemalloc  # noqa: E402
from collections.abc import Callable  # noqa: E402
from functools import partial  # noqa: E402
from itertools import combinations  # noqa: E402

import numpy as np  # noqa: E402

from qwfx import kernels  # noqa: E402
from qwfx.kernels.expansion import Determinants  # noqa: E402
from qwfx.model import Basis, Expansion  # noqa: E402

CORE, ACTIVE, ELECTRONS, WALKERS = 7, 14, 14, 128
SIZES = (1, 10_000, 100_000, 1_000_000)


def expansion_of(n_entries: int) -> Expansion:
    """The `n_entries` largest entries of a random vector over all pairs of strings."""
    rng = np.random.default_rng(1)
    strings = np.array(list(combinations(range(ACTIVE), ELECTRONS // 2)))
    words = (1 << (strings + CORE)).sum(axis=1) + (1 << CORE) - 1
    order = np.argsort(words)
    strings, words = strings[order], words[order].astype(np.uint64)[:, None]
    rank = (strings >= ELECTRONS // 2).sum(axis=1)
    vector = rng.normal(size=(len(words), len(words)))
    vector *= 0.2 ** (rank[:, None] + rank)
    vector[0, 0] = 1.0
    size = np.abs(vector).ravel()
    chosen = np.sort(np.argpartition(size, len(size) - n_entries)[-n_entries:]) if n_entries > 1 else np.zeros(1, int)
    rows, columns = np.divmod(chosen, len(words))
    up, row = np.unique(rows, return_inverse=True)
    down, column = np.unique(columns, return_inverse=True)
    offsets = np.concatenate([[0], np.cumsum(np.bincount(row, minlength=len(up)))]).astype(np.int64)
    return Expansion(
        "hf", "hf", words[up], words[down], offsets, column.astype(np.int64), vector.ravel()[chosen][None].copy()
    )


def molecule() -> tuple[Basis, np.ndarray, np.ndarray]:
    """Basis, centres and orbitals (M, F) of the one-electron Hamiltonian and a guessed field."""
    from pyscf import gto, lib, scf

    from qwfx.converters.pyscf.from_mole import basis_of, function_order

    lib.num_threads(1)
    atoms = [("C", (0, 0, z)) for z in (-1.9, -0.63, 0.63, 1.9)]
    atoms += [("H", (0, y, z)) for z in (-2.45, 2.45) for y in (-0.93, 0.93)]
    mol = gto.M(atom=atoms, basis={"C": "aug-cc-pvtz", "H": "cc-pvdz"}, verbose=0)
    field = scf.RHF(mol).density_fit()
    _, orbitals = field.eig(field.get_fock(dm=field.get_init_guess(key="minao")), mol.intor("int1e_ovlp"))
    return basis_of(mol), mol.atom_coords(), np.ascontiguousarray(orbitals[function_order(mol)].T[: CORE + ACTIVE])


def places_about(centers: np.ndarray) -> np.ndarray:
    """(W, 28, 3) electrons scattered about the atoms, of each spin a number on every atom by its charge."""
    rng = np.random.default_rng(2)
    own = np.repeat(centers, [3, 3, 3, 3, 0, 1, 1, 0], axis=0)
    own = np.concatenate([own, own])
    return own + rng.normal(size=(WALKERS, *own.shape)) * 0.8


def energy_of(
    found: Determinants, basis: Basis, centers: np.ndarray, orbitals: np.ndarray, electrons: np.ndarray, threads: int
) -> Callable[[], np.ndarray]:
    """(S, W) kinetic energies of all walkers, as a function to be timed."""
    n = electrons.shape[1] // 2

    def run() -> np.ndarray:
        phi = []
        for spin, used in enumerate((found.used_up, found.used_down)):
            places = electrons[:, spin * n : (spin + 1) * n].reshape(-1, 3)
            values = kernels.evaluate_orbitals(basis, centers, orbitals[used], places, threads=threads)
            phi.append(values.reshape(5, len(electrons), n, len(used)))
        values = found.evaluate(phi[0][0], phi[1][0], threads=threads)
        total = 0.0
        for one, gamma in zip(phi, (values.gamma_up, values.gamma_down), strict=True):
            ratios = np.einsum("kwip,swpi->skwi", one[1:], gamma)
            total = total - 0.5 * ratios[:, 3].sum(axis=-1)
        return np.asarray(total)

    return run


MEMBERS = ("up_strings", "down_strings", "row_start", "columns", "coefficients")


def memory(path: str) -> None:
    """What making and evaluating an expansion takes, by tracemalloc, in a process of its own."""
    with np.load(path) as file:
        expansion = Expansion("hf", "hf", *(file[member] for member in MEMBERS))
    stored = sum(np.asarray(getattr(expansion, member)).nbytes for member in MEMBERS)
    rng = np.random.default_rng(3)
    n, M = CORE + ELECTRONS // 2, CORE + ACTIVE
    phi = rng.normal(size=(2, 16, n, M))
    few = Expansion(
        "hf", "hf", expansion.up_strings[:2], expansion.down_strings[:2], np.arange(3), np.arange(2), np.ones((1, 2))
    )
    small = Determinants(few, n, n, M, M)
    small.evaluate(phi[0][..., small.used_up], phi[1][..., small.used_down])  # compiled, libraries loaded
    tracemalloc.start()
    found = Determinants(expansion, n, n, M, M)
    kept, built = tracemalloc.get_traced_memory()
    found.evaluate(phi[0][..., found.used_up], phi[1][..., found.used_down])
    _, peak = tracemalloc.get_traced_memory()
    print(
        f"  {len(expansion.columns)} entries in {stored / 1e6:.1f} MB: {1 + kept / stored:.2f} times that when made, "
        f"{1 + built / stored:.2f} at most on the way, {1 + peak / stored:.2f} when 16 walkers are evaluated"
        "  (wanted: below 3)"
    )


def main() -> None:
    """Times, then memory."""
    print("memory, the expansion itself included, by NumPy's own count")
    for n_entries in SIZES[2:]:
        with tempfile.TemporaryDirectory() as folder:
            expansion, path = expansion_of(n_entries), f"{folder}/expansion.npz"
            np.savez(path, **{member: np.asarray(getattr(expansion, member)) for member in MEMBERS})
            subprocess.run([sys.executable, "-m", "bench.bench_determinants", path], check=True)
    basis, centers, orbitals = molecule()
    electrons = places_about(centers)
    n, M = CORE + ELECTRONS // 2, CORE + ACTIVE
    print(f"{basis.n_functions} functions, {2 * n} electrons, {WALKERS} walkers")
    made = {size: Determinants(expansion_of(size), n, n, M, M) for size in SIZES}
    for threads in sorted({1, os.cpu_count() or 1}):
        title = f"local energy, {threads} thread" + "s" * (threads > 1)
        energies = {
            f"{size} entries": energy_of(found, basis, centers, orbitals, electrons, threads)
            for size, found in made.items()
        }
        one = energies.pop("1 entries")
        for name, run in {"one determinant": one, **energies}.items():
            run()
            start = time.perf_counter()
            run()
            print(f"  {name}: {(time.perf_counter() - start) / WALKERS * 1e6:.0f} microseconds a walker")
        for name, run in energies.items():
            side_by_side(
                title, {name: run, "one determinant": one},
                wanted="at most 40, target 20" if name.startswith("1000000") else "linear in entries",
            )  # fmt: skip
        single = made[1]
        phi = partial(kernels.evaluate_orbitals, basis, centers, orbitals[: len(single.used_up)], threads=threads)
        matrices = phi(electrons.reshape(-1, 3))[0].reshape(2 * WALKERS, n, n)

        def bare(phi: Callable[..., np.ndarray] = phi, matrices: np.ndarray = matrices) -> None:
            for spin in range(2):
                phi(electrons[:, spin * n : (spin + 1) * n].reshape(-1, 3))
            np.linalg.inv(matrices)

        side_by_side(
            title, {"one determinant": one, "orbitals and LAPACK's inverse": bare}, runs=9, wanted="at most 1.5"
        )


if __name__ == "__main__":
    if len(sys.argv) > 1:
        memory(sys.argv[1])
    else:
        main()
