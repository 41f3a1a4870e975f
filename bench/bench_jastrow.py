"""Jastrow factors of 500 and 2,500 electrons: one-electron moves against bounds from their arithmetic alone.

A solid-like cluster: 0.05 electrons and 0.0125 atoms per cubic bohr; pairs and electron-nucleus terms by polynomials of
eight coefficients, a three-body term of 3 x 3 x 3 coefficients. The cutoff of the pairs is 5 bohr, then 10; those of
the other terms are 4 and 3 bohr.

The bounds count what J before and after a move consists of, with nothing else to do. Multiply-adds count once.

- a near point: 3 subtractions, 3 multiply-adds and a square root; Horner's rule, 7 multiply-adds; (r - L)^3 times it, 1
  subtraction and 3 products; the sum, 1 addition.
- a far point: 3 subtractions, 3 multiply-adds: the square of a distance, which tells that it is far.
- a triple of an atom, the electron that moves and another: r_ij, 3 subtractions, 3 multiply-adds and a square root; for
  each of 3 powers of r_jA Horner's rule in r_ij, 2 multiply-adds, and 1 for the product: 15 multiply-adds and additions
  in all. r_jA and (r_jA - L)^3 r_jA^m, 4 products, 1 subtraction and a square root, are needed once for both places, so
  that a triple has half of them. Sums over powers of r_iA are done once for an atom, and left out.

All pairs: every other electron and every atom, once from the old and once from the new place, is a near point, as if
there were no cutoff. By cutoffs: those are near points that are within the cutoff, all others are far. In both, for
each atom within the three-body cutoff of either place, the others of all electrons are far points once, and those
within that cutoff of the atom too make triples. A move can be faster than both: who is far from the old place by more
than the step and the cutoff is far from the new one too, and is looked at once.

What the machine can do is measured in the same run: these operations on as many numbers that lie in the fastest cache,
in loops that the compiler turns into vector instructions.
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
NUCLEUS, THREE = 4.0, 3.0
MOVES, WALKERS = 50, 32


def cluster(n: int, pairs: float) -> tuple[Wavefunction, np.ndarray]:
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
                             {"channel": spins, **polynomial(pairs, 3)}),
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
def _arithmetic(x: Any, r: Any, near: int, far: int, triples: int) -> float:
    """The operations of so many points and triples, in multiples of the length of `x` (3, n) and `r` (n)."""
    n = len(r)
    total = 0.0
    for _ in range(0, near, n):
        for k in range(n):
            dx, dy, dz = 0.3 - x[0, k], 0.2 - x[1, k], 0.1 - x[2, k]
            d = np.sqrt(dx * dx + dy * dy + dz * dz)
            f = ((((((1e-3 * d + 0.1) * d + 0.2) * d + 0.3) * d + 0.4) * d + 0.5) * d + 0.6) * d + 0.7
            y = d - 10.0
            total += f * y * y * y
    for _ in range(0, far, n):
        for k in range(n):
            dx, dy, dz = 0.3 - x[0, k], 0.2 - x[1, k], 0.1 - x[2, k]
            total += dx * dx + dy * dy + dz * dz
    for _ in range(0, triples, 2 * n):  # two with the same atom and partner
        for k in range(n):
            y = np.sqrt(r[k])
            edge = (y - 3.0) * (y - 3.0) * (y - 3.0)
            one, two = edge * y, edge * y * y
            dx, dy, dz = 0.3 - x[0, k], 0.2 - x[1, k], 0.1 - x[2, k]
            d = np.sqrt(dx * dx + dy * dy + dz * dz)
            f = ((0.1 * d + 0.2) * d + 0.3) * edge + ((0.4 * d + 0.5) * d + 0.6) * one
            total += f + ((0.7 * d + 0.8) * d + 0.9) * two
            dx, dy, dz = 0.6 - x[0, k], 0.5 - x[1, k], 0.4 - x[2, k]
            d = np.sqrt(dx * dx + dy * dy + dz * dz)
            f = ((0.1 * d + 0.2) * d + 0.3) * edge + ((0.4 * d + 0.5) * d + 0.6) * one
            total += f + ((0.7 * d + 0.8) * d + 0.9) * two
    return total


def counts(electrons: np.ndarray, nuclei: np.ndarray, pairs: float, which: int, place: np.ndarray) -> np.ndarray:
    """Near and far points and triples of one move, by all pairs and by cutoffs: (2, 3)."""
    others = np.delete(electrons, which, axis=0)
    ends = (electrons[which], place)
    to_electrons = [np.linalg.norm(others - end, axis=1) for end in ends]
    to_nuclei = [np.linalg.norm(nuclei - end, axis=1) for end in ends]
    atoms = np.flatnonzero(np.minimum(*to_nuclei) < THREE)
    partners = {a: (np.linalg.norm(others - nuclei[a], axis=1) < THREE).sum() for a in atoms}
    triples = sum(partners[a] for d in to_nuclei for a in np.flatnonzero(d < THREE))
    points = 2 * (len(others) + len(nuclei))
    near = sum((d < pairs).sum() for d in to_electrons) + sum((d < NUCLEUS).sum() for d in to_nuclei)
    once = len(atoms) * len(others)
    return np.array([[points, once, triples], [near, points - near + once, triples]])


def main() -> None:
    """Ratios to the bounds, and the growth of whole evaluations."""
    rng = np.random.default_rng(1)
    x, r = rng.random((3, 512)), rng.random(512)
    evaluations = {}
    for pairs in (5.0, 10.0):
        for n in (500, 2500):
            wavefunction, electrons = cluster(n, pairs)
            jastrow, nuclei = Jastrow(wavefunction), wavefunction.system.positions
            moves = [(int(rng.integers(n)), 0.5 * rng.normal(size=3)) for _ in range(MOVES)]
            places = [(which, electrons[:, which, None] + step) for which, step in moves]
            each = [counts(electrons[0], nuclei, pairs, which, place[0, 0]) for which, place in places]
            needed = WALKERS * np.sum(each, axis=0)
            rows = np.repeat(electrons.transpose(0, 2, 1), WALKERS, axis=0)
            targets = [(which, np.repeat(place, WALKERS, axis=0)) for which, place in places]

            def all_moves(jastrow: Jastrow = jastrow, rows: np.ndarray = rows, targets: Any = targets) -> None:
                for which, place in targets:
                    jastrow.change_in_rows(rows, which, place)

            bounds = {
                name: lambda count=count: _arithmetic(x, r, *count.tolist())
                for name, count in zip(("bound of all pairs", "bound by cutoffs"), needed, strict=True)
            }
            side_by_side(
                f"{n} electrons, {len(nuclei)} atoms, pairs within {pairs:g} bohr, {MOVES} moves of {WALKERS} walkers",
                {"moves": all_moves, **bounds}, runs=9, wanted="at most 2",
            )  # fmt: skip
            evaluations[f"{n} electrons"] = lambda jastrow=jastrow, electrons=electrons: jastrow.evaluate(electrons)
    side_by_side("whole evaluation", dict(reversed(evaluations.items())), wanted="about 25: the square of 5")


if __name__ == "__main__":
    main()
