"""One electron of each walker moves: ratio and update against evaluation from scratch. 100 electrons, 100 walkers."""

from __future__ import annotations

from bench.harness import one_thread, side_by_side

one_thread()

import numpy as np  # noqa: E402

from qwfx.model import Basis, Expansion, JastrowTerm, OrbitalSet, System, Wavefunction  # noqa: E402
from qwfx.trial import Trial  # noqa: E402

ELECTRONS, WALKERS, ATOMS = 100, 100, 25


def system_of(with_jastrow: bool) -> Wavefunction:
    """A chain of atoms with nine contracted functions each, random orthonormal orbitals, one determinant."""
    rng = np.random.default_rng(1)
    positions = np.array([[0.0, 0.7 * (i % 2), 2.6 * i] for i in range(ATOMS)])
    l = np.tile([0, 0, 1, 1], ATOMS).astype("i4")
    n = len(l)
    basis = Basis(
        "gaussian", np.repeat(np.arange(ATOMS), 4).astype("i4"), l, np.zeros(n, "i1"), 3 * np.arange(n + 1),
        np.tile([71.6, 13.0, 3.5, 2.9, 0.68, 0.22, 2.9, 0.68, 0.22, 0.9, 0.3, 0.1], ATOMS), rng.uniform(0.2, 1, 3 * n),
    )  # fmt: skip
    C = np.linalg.qr(rng.normal(size=(basis.n_functions, ELECTRONS // 2)))[0].T
    half = [(1 << (ELECTRONS // 2)) - 1]
    string = np.array([half], "u8")
    expansion = Expansion("hf", "hf", string, string, np.array([0, 1]), np.array([0]), np.ones((1, 1)))
    terms = {}
    if with_jastrow:
        channels = np.array(["up_up", "up_down", "down_down"])
        terms["pairs"] = JastrowTerm("bspline", {"body": "electron-electron"}, {
            "channel": channels, "cutoff": np.full(3, 6.0), "coefficients": 0.1 * rng.normal(size=(3, 10)),
        })  # fmt: skip
    charges = np.full(ATOMS, 4.0)
    labels = tuple(f"C{i}" for i in range(ATOMS))
    system = System(ELECTRONS // 2, ELECTRONS // 2, labels, np.full(ATOMS, 6, "i4"), charges, positions)
    return Wavefunction(system, None, basis, {"hf": OrbitalSet("both", C)}, expansion, terms)


def main() -> None:
    """Ratios: how many moves cost as much as one evaluation of all walkers."""
    rng = np.random.default_rng(2)
    for with_jastrow in (False, True):
        wavefunction = system_of(with_jastrow)
        trial = Trial(wavefunction, threads=1)
        electrons = np.tile(np.repeat(wavefunction.system.positions, 2, axis=0), (WALKERS, 2, 1))
        walkers = trial.walkers(electrons + rng.normal(size=electrons.shape))
        accepted = rng.random(WALKERS) < 0.5

        def move(walkers: object = walkers, accepted: np.ndarray = accepted) -> None:
            which = int(rng.integers(ELECTRONS))
            places = walkers.electrons[:, which] + 0.3 * rng.normal(size=(WALKERS, 3))  # type: ignore[attr-defined]
            walkers.ratio(which, places)  # type: ignore[attr-defined]
            walkers.accept(accepted)  # type: ignore[attr-defined]

        what = "with a spline of pairs" if with_jastrow else "determinants alone"
        for name, scratch in (
            ("Psi from scratch", lambda trial=trial, walkers=walkers: trial.log(walkers.electrons)),
            ("local energy from scratch", lambda trial=trial, walkers=walkers: trial.evaluate(walkers.electrons)),
        ):
            title = f"{ELECTRONS} electrons, {WALKERS} walkers, {what}"
            side_by_side(title, {name: scratch, "one move": move}, runs=25, wanted="at least 20")


if __name__ == "__main__":
    main()
