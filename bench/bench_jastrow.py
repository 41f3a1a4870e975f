"""Jastrow factors of 500 and 2,500 electrons: one-electron moves against a bound from their arithmetic alone.

A solid-like cluster: 0.05 electrons and 0.0125 atoms per cubic bohr; pairs within 10 bohr and electron-nucleus terms
within 4 bohr by polynomials of eight coefficients, a three-body term of 3 x 3 x 3 coefficients within 3 bohr.

The bound. J before and after a move takes, for every other electron and twice (from the old and from the new place):
a distance, 3 subtractions and 3 multiply-adds and a square root; Horner's rule, 7 multiply-adds; (r - L)^3 times it, 1
subtraction and 3 products; the sum, 1 addition. The same for every atom. For the three-body term, for the atoms near
either place: the distance of every electron (3 subtractions, 3 multiply-adds), and for the few within its cutoff a
square root, a polynomial of 2 x 3 x 3 multiply-adds and (r - L)^3. Multiply-adds count as one operation, like
additions. What the machine can do is measured in the same run: the same operations on as many numbers that lie in the
fastest cache, in loops without anything else to do. A move cannot be faster than the sum of the two.
"""

from __future__ import annotations

from bench.harness import one_thread, side_by_side

one_thread()

from typing import Any  # noqa: E402

import numpy as np  # noqa: E402
from numba import njit  # noqa: E402

from qwfx.kernels.jastrow import Jastrow  # noqa: E402
from qwfx.kernels.radial import SUM  # noqa: E402
from qwfx.model import JastrowTerm, System, Wavefunction  # noqa: E402

DENSITY = 0.05
PAIRS, NUCLEUS, THREE = 10.0, 4.0, 3.0
MOVES, WALKERS = 50, 32


def cluster(n: int) -> tuple[Wavefunction, np.ndarray]:
    """A wave function of factors alone, and its electrons (1, N, 3)."""
    rng = np.random.default_rng(n)
    edge = (n / DENSITY) ** (1 / 3)
    atoms = edge * rng.random((n // 4, 3))
    every = np.arange(len(atoms), dtype="i4")
    spins = np.array(["up_up", "up_down", "down_down"])

    def polynomial(cutoff: float, rows: int) -> dict[str, np.ndarray]:
        return {"cutoff": np.full(rows, cutoff), "coefficients": 1e-4 * rng.normal(size=(rows, 8))}

    gamma = 1e-4 * rng.normal(size=(3, 3, 3, 3))
    smooth: dict[str, Any] = {"smoothness": 3}
    terms = {
        "pairs": JastrowTerm("cutoff-polynomial", {"body": "electron-electron"} | smooth,
                             {"channel": spins, **polynomial(PAIRS, 3)}),
        "nuclei": JastrowTerm("cutoff-polynomial", {"body": "electron-nucleus"} | smooth,
                              {"channel": np.array(["up", "down"]), "atoms": every, **polynomial(NUCLEUS, 2)}),
        "three": JastrowTerm("cutoff-polynomial", {"body": "three-body"} | smooth,
                             {"channel": spins, "atoms": every, "cutoff": np.full(3, THREE),
                              "coefficients": gamma + gamma.transpose(0, 2, 1, 3)}),
    }  # fmt: skip
    labels = tuple(f"A{i}" for i in range(len(atoms)))
    system = System(n // 2, n - n // 2, labels, np.full(len(atoms), 6, "i4"), np.full(len(atoms), 4.0), atoms)
    return Wavefunction(system, jastrow=terms), edge * rng.random((1, n, 3))


@njit(**SUM)  # type: ignore[untyped-decorator]
def _arithmetic(x: Any, r: Any, roots: int, polynomials: int, squares: int) -> float:
    """`roots` distances with polynomials of eight coefficients and `squares` more distances without a root, in
    numbers that stay in the cache: `x` (3, n), `r` (n). `polynomials` more polynomials of 18 multiply-adds."""
    n = len(r)
    total = 0.0
    for _ in range(0, roots, n):
        for k in range(n):
            dx, dy, dz = 0.3 - x[0, k], 0.2 - x[1, k], 0.1 - x[2, k]
            d = np.sqrt(dx * dx + dy * dy + dz * dz)
            f = ((((((1e-3 * d + 0.1) * d + 0.2) * d + 0.3) * d + 0.4) * d + 0.5) * d + 0.6) * d + 0.7
            y = d - 10.0
            total += f * y * y * y
    for _ in range(0, squares, n):
        for k in range(n):
            dx, dy, dz = 0.3 - x[0, k], 0.2 - x[1, k], 0.1 - x[2, k]
            total += dx * dx + dy * dy + dz * dz
    for _ in range(0, polynomials, n):
        for k in range(n):
            d = np.sqrt(r[k])
            f = d
            for _ in range(18):
                f = f * d + 0.3
            total += f
    return total


def near(nuclei: np.ndarray, at: np.ndarray) -> int:
    """How many atoms the three-body term has within its cutoff."""
    return int((np.linalg.norm(nuclei - at, axis=1) < THREE).sum())


def main() -> None:
    """Ratios to the bound, and the growth of whole evaluations."""
    evaluations = {}
    for n in (500, 2500):
        wavefunction, electrons = cluster(n)
        jastrow = Jastrow(wavefunction)
        rng = np.random.default_rng(1)
        moves = [(int(rng.integers(n)), rng.normal(size=3)) for _ in range(MOVES)]
        places = [(which, electrons[:, which, None] + 0.5 * step) for which, step in moves]
        nuclei = wavefunction.system.positions
        atoms = [near(nuclei, electrons[0, which]) + near(nuclei, place[0, 0]) for which, place in places]
        inside = DENSITY * 4 / 3 * np.pi * THREE**3
        roots = 2 * MOVES * (n + n // 4) * WALKERS
        squares = int(sum(atoms) / 2 * n + 2 * MOVES * n // 4) * WALKERS
        polynomials = int(sum(atoms) * inside * 1.5) * WALKERS
        x, r = rng.random((3, 512)), rng.random(512)

        rows = np.repeat(electrons.transpose(0, 2, 1), WALKERS, axis=0)
        targets = [(which, np.repeat(place, WALKERS, axis=0)) for which, place in places]

        def all_moves(jastrow: Jastrow = jastrow, rows: np.ndarray = rows, targets: Any = targets) -> None:
            for which, place in targets:
                jastrow.change_in_rows(rows, which, place)

        def bound(x: Any = x, r: Any = r, counts: Any = (roots, polynomials, squares)) -> None:
            _arithmetic(x, r, *counts)

        side_by_side(
            f"{n} electrons, {len(nuclei)} atoms, {MOVES} moves of {WALKERS} walkers",
            {"moves": all_moves, "bound": bound},
            wanted="at most 2",
        )  # fmt: skip
        evaluations[f"{n} electrons"] = lambda jastrow=jastrow, electrons=electrons: jastrow.evaluate(electrons)
    side_by_side("whole evaluation", dict(reversed(evaluations.items())), wanted="about 25: the square of 5")


if __name__ == "__main__":
    main()
