"""Files without a fault, from code: small, of our own making, one for each part of the format.

Each function returns a model. Numbers come from closed forms or published tables, orbitals from symmetry or from
symmetric orthonormalisation.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from corpus.s_gaussians import ANGULAR, EXPONENTS, NORMALISED, integrals, values
from numpy.typing import NDArray

from qwfx.model import (
    Basis,
    Cell,
    Densities,
    Energies,
    Expansion,
    Hamiltonian,
    JastrowTerm,
    OrbitalSet,
    Potentials,
    Provenance,
    System,
    TwoBody,
    Wavefunction,
    Witness,
    WitnessConfigurations,
    WitnessOrbitals,
)

POINTS = np.array(
    [[0.11, -0.23, 0.31], [0.4, 0.2, 1.1], [-0.7, 0.5, 0.8], [1.3, -1.1, 0.4], [-0.2, 0.3, 2.4], [2.0, 1.5, -1.2]]
)
MADE = Provenance(({"activity": "construction", "agent": "corpus", "time": "2026-12-01T00:00:00Z"},))


def system(text: str, n_up: int, n_down: int, positions: list[list[float]], cores: int = 0) -> System:
    """Atoms from labels such as ``C1 H1 H2``, with so many core electrons on each atom beyond helium."""
    known = {"H": 1, "He": 2, "C": 6, "O": 8}
    labels = tuple(text.split())
    numbers = np.array([known[label.rstrip("0123456789")] for label in labels], dtype=np.int32)
    charges = numbers - np.where(numbers > 2, cores, 0).astype(np.float64)
    return System(n_up, n_down, labels, numbers, charges, np.array(positions, dtype=np.float64))


def hydrogen_basis(n_atoms: int) -> Basis:
    """One STO-3G function on each atom."""
    return Basis(
        radial="gaussian",
        shell_center=np.arange(n_atoms, dtype=np.int32),
        shell_l=np.zeros(n_atoms, dtype=np.int32),
        shell_monomial=np.zeros(n_atoms, dtype=np.int8),
        primitive_start=3 * np.arange(n_atoms + 1, dtype=np.int64),
        exponents=np.tile(EXPONENTS, n_atoms),
        coefficients=np.tile(NORMALISED * ANGULAR, n_atoms),
    )


def witness(positions: NDArray[np.float64], sets: dict[str, NDArray[np.generic]]) -> Witness:
    """Values of orbitals over `hydrogen_basis` by the closed form."""
    orbitals = {name: WitnessOrbitals(*values(positions, C, POINTS)) for name, C in sets.items()}
    return Witness("closed form", "1", True, POINTS, orbitals)


def lowdin(S: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rows of S^{-1/2}: orthonormal orbitals, one for each function."""
    value, vector = np.linalg.eigh(S)
    return np.asarray(vector @ np.diag(value**-0.5) @ vector.T)


def determinant(up: int, down: int, up_set: str = "main", down_set: str = "main") -> Expansion:
    """A single determinant from two bit strings."""
    return Expansion(
        up_set,
        down_set,
        np.array([[up]], dtype=np.uint64),
        np.array([[down]], dtype=np.uint64),
        np.array([0, 1], dtype=np.int64),
        np.array([0], dtype=np.int64),
        np.ones((1, 1)),
    )


def transform(
    h: NDArray[np.float64], eri: NDArray[np.float64], C: NDArray[np.float64], D: NDArray[np.float64] | None = None
):  # type: ignore[no-untyped-def]
    """One-electron integrals over rows of C and (pq|rs) with pq over C and rs over D."""
    other = C if D is None else D
    return C @ h @ C.T, np.einsum("pi,qj,ijkl,rk,sl->pqrs", C, C, eri, other, other, optimize=True)


def eightfold(eri: NDArray[np.float64]) -> NDArray[np.float64]:
    """Packed vector of real integrals of like spins."""
    n = len(eri)
    pairs = [(p, q) for p in range(n) for q in range(p + 1)]
    return np.array([eri[pair + other] for k, pair in enumerate(pairs) for other in pairs[: k + 1]])


def fourfold(eri: NDArray[np.float64]) -> NDArray[np.float64]:
    """Packed vector of real integrals of unlike spins."""
    pairs = [(p, q) for p in range(len(eri)) for q in range(p + 1)]
    return np.array([eri[pair + other] for pair in pairs for other in pairs])


def energies(*rows: tuple[int, str, float, float, str]) -> Energies:
    """A table from rows (state, method, value, uncertainty, quantity)."""
    state, method, value, uncertainty, quantity = zip(*rows, strict=True)
    return Energies(np.array(state, dtype=np.int32), method, np.array(value), np.array(uncertainty), quantity)


def hydrogen() -> Wavefunction:
    """H2 at 1.4 bohr in the minimal basis: the textbook's Hartree-Fock, with every kind of group."""
    atoms = system("H1 H2", 1, 1, [[0, 0, 0], [0, 0, 1.4]])
    S, h, eri = integrals(atoms.positions, atoms.effective_charges)
    s = S[0, 1]
    C = np.array([[1, 1], [1, -1]]) / np.sqrt([[2 * (1 + s)], [2 * (1 - s)]])
    one, two = transform(h, eri, C)
    total = 2 * one[0, 0] + two[0, 0, 0, 0] + 1 / 1.4
    orbital = np.array([one[0, 0] + two[0, 0, 0, 0], one[1, 1] + 2 * two[1, 1, 0, 0] - two[1, 0, 0, 1]])
    return Wavefunction(
        system=atoms,
        basis=hydrogen_basis(2),
        orbitals={
            "main": OrbitalSet(
                "both", C, orbital, np.array([2.0, 0.0]), roles=("occupied", "virtual"), irreps=("A1g", "A1u")
            )
        },
        expansion=determinant(1, 1),
        hamiltonian=Hamiltonian(
            2,
            1 / 1.4,
            {"both": one},
            {"both": TwoBody(eightfold(two))},
            up_set="main",
            down_set="main",
            orbital_symmetry=np.array([0, 5], dtype=np.int32),
            state_symmetry=0,
        ),
        densities=Densities(one_body={"both": np.array([[[2.0, 0.0], [0.0, 0.0]]])}),
        energies=energies((0, "RHF", total, 0.0, "total"), (0, "RHF", 1 / 1.4, 0.0, "nuclear-repulsion")),
        witness=witness(atoms.positions, {"main": C}),
        provenance=MADE,
    )


def helium() -> Wavefunction:
    """He with two Slater functions (exponents of Clementi and Roetti's double-zeta table)."""
    zeta = np.array([1.45363, 2.91093])
    S = np.array([[1.0, 0.0], [0.0, 1.0]])
    S[0, 1] = S[1, 0] = (2 * math.sqrt(zeta[0] * zeta[1]) / zeta.sum()) ** 3
    C = np.array([[0.84289, 0.18091]])
    C /= np.sqrt(C @ S @ C.T)
    factor = np.sqrt(zeta**3 / np.pi)
    r = np.linalg.norm(POINTS, axis=1)[:, None]
    function = factor * np.exp(-zeta * r)
    slope = -zeta * function
    gradient = slope[:, :, None] * POINTS[:, None, :] / r[:, :, None]
    laplacian = (zeta**2 - 2 * zeta / r) * function
    seen = WitnessOrbitals(function @ C.T, np.einsum("nfd,pf->npd", gradient, C), laplacian @ C.T)
    return Wavefunction(
        system=system("He", 1, 1, [[0, 0, 0]]),
        basis=Basis(
            "slater",
            np.zeros(2, dtype=np.int32),
            np.zeros(2, dtype=np.int32),
            np.zeros(2, dtype=np.int8),
            np.arange(3, dtype=np.int64),
            zeta,
            factor * ANGULAR,
            np.zeros(2, dtype=np.int32),
        ),
        orbitals={"main": OrbitalSet("both", C, occupations=np.array([2.0]))},
        expansion=determinant(1, 1),
        energies=energies((0, "RHF", -2.8617, 0.0, "total")),
        witness=Witness("closed form", "1", True, POINTS, {"main": seen}),
        provenance=MADE,
    )


def dressed() -> Wavefunction:
    """Two helium atoms with a Jastrow term of each form."""
    one = helium()
    assert one.basis is not None
    far = system("He1 He2", 2, 2, [[0, 0, 0], [0, 0, 6.0]])
    doubled = {
        name: np.tile(getattr(one.basis, name), 2)
        for name in ("shell_l", "shell_monomial", "exponents", "coefficients")
    }
    basis = Basis(
        radial="slater",
        shell_center=np.array([0, 0, 1, 1], dtype=np.int32),
        primitive_start=np.arange(5, dtype=np.int64),
        **doubled,
    )
    c = np.asarray(one.orbitals["main"].coefficients)[0]
    from qwfx.reference import overlap

    C = np.zeros((2, 4))
    C[0, :2] = C[1, 2:] = c
    C = lowdin(C @ overlap(basis, far.positions) @ C.T) @ C
    return Wavefunction(
        system=far,
        basis=basis,
        orbitals={"main": OrbitalSet("both", C, occupations=np.array([2.0, 2.0]))},
        expansion=determinant(3, 3),
        jastrow={
            "pairs": JastrowTerm(
                "pade",
                {"body": "electron-electron"},
                {"channel": np.array(["up_down", "up_up"]), "a": np.array([0.5, 0.25]), "b": np.array([1.0, 1.0])},
            ),
            "nuclei": JastrowTerm(
                "cutoff-polynomial",
                {"body": "electron-nucleus", "smoothness": 3},
                {
                    "channel": np.array(["up", "down"]),
                    "atoms": np.array([0, 1], dtype=np.int32),
                    "cutoff": np.array([4.0, 4.0]),
                    "coefficients": np.array([[0.01, 0.01 * 3 / 4], [0.01, 0.01 * 3 / 4]]),
                },
            ),
            "inner": JastrowTerm(
                "scaled-polynomial",
                {"body": "three-body"},
                {
                    "channel": np.array(["up_down", "up_up", "down_down"]),
                    "atoms": np.array([0, 1], dtype=np.int32),
                    "scale": np.ones(3),
                    "scale_electron": np.ones(3),
                    "powers": np.array([[2, 2, 2], [2, 0, 2]], dtype=np.int32),  # which touch no cusp
                    "coefficients": np.full((3, 2), -0.05),
                },
            ),
            "splines": JastrowTerm(
                "bspline",
                {"body": "electron-electron"},
                {
                    "channel": np.array(["up_down", "up_up", "down_down"]),
                    "cutoff": np.full(3, 5.0),
                    # No slope at 0, but for down_down, for which there is no other term: (c_2 - c_0) / (2 L / 4).
                    "coefficients": np.array([[0.2, 0.1, 0.2, 0.02]] * 2 + [[0.2, 0.1, 0.2 + 0.25 * 2.5, 0.02]]),
                },
            ),
        },
        provenance=MADE,
    )


def triplet() -> Wavefunction:
    """Helium 1s2p with complex p orbitals of m = +1, and no down electron."""
    a_s, a_p = 1.2, 0.25
    s = ANGULAR * (2 * a_s / math.pi) ** 0.75
    p = math.sqrt(4 * math.pi / 3) * 2 * math.sqrt(a_p) * (2 * a_p / math.pi) ** 0.75
    # Functions: s; p in the order y, z, x. The orbital is (x + i y) / sqrt(2).
    C = np.array([[1, 0, 0, 0], [0, 1j / math.sqrt(2), 0, 1 / math.sqrt(2)]])
    return Wavefunction(
        system=system("He", 2, 0, [[0, 0, 0]]),
        basis=Basis(
            "gaussian",
            np.zeros(2, dtype=np.int32),
            np.array([0, 1], dtype=np.int32),
            np.zeros(2, dtype=np.int8),
            np.arange(3, dtype=np.int64),
            np.array([a_s, a_p]),
            np.array([s, p]),
        ),
        orbitals={"main": OrbitalSet("both", C, occupations=np.array([1.0, 1.0]))},
        expansion=determinant(3, 0),
        provenance=MADE,
    )


def _pair(rows: tuple[NDArray[np.float64], NDArray[np.float64]], p: int, q: int) -> NDArray[np.float64]:
    """Determinant of two electrons in orbitals p < q; rows: (..., M) of the first and of the second electron."""
    return np.asarray(rows[0][..., p] * rows[1][..., q] - rows[0][..., q] * rows[1][..., p])


def _configurations(
    positions: NDArray[np.float64], C: NDArray[np.float64], expansion: Expansion, places: NDArray[np.float64]
) -> WitnessConfigurations:
    """D of two up and two down electrons by the product rule, written out; places (m, 4, 3)."""
    value, gradient, laplacian = values(positions, C, places.reshape(-1, 3))
    n_places, n_states = len(places), len(expansion.coefficients)
    phi = np.concatenate([value[None], np.moveaxis(gradient, -1, 0), laplacian[None]]).reshape(5, n_places, 4, -1)
    D = np.zeros((n_states, n_places))
    derivative = np.zeros((n_states, n_places, 4, 4))
    for row, up in enumerate(np.asarray(expansion.up_strings)[:, 0]):
        for entry in range(expansion.row_start[row], expansion.row_start[row + 1]):
            down = np.asarray(expansion.down_strings)[expansion.columns[entry], 0]
            pairs = [[k for k in range(4) if int(string) >> k & 1] for string in (up, down)]
            c = np.asarray(expansion.coefficients)[:, entry]
            plain = [_pair((phi[0][:, 2 * s], phi[0][:, 2 * s + 1]), *pairs[s]) for s in (0, 1)]
            D += np.multiply.outer(c, plain[0] * plain[1])
            for i in range(4):
                s = i // 2
                for k in range(4):
                    rows = [phi[0][:, 2 * s], phi[0][:, 2 * s + 1]]
                    rows[i % 2] = phi[k + 1][:, i]
                    derivative[:, :, i, k] += np.multiply.outer(c, _pair((rows[0], rows[1]), *pairs[s]) * plain[1 - s])
    ratio = derivative / D[:, :, None, None]
    total = ratio[..., 3].sum(axis=2)
    potential = np.tile([_coulomb(place, positions) for place in places], (n_states, 1))
    return WitnessConfigurations(
        places, np.log(np.abs(D)), np.sign(D), ratio[..., :3], total, potential, potential - total / 2
    )


def _coulomb(electrons: NDArray[np.float64], protons: NDArray[np.float64]) -> float:
    """Potential energy of electrons and protons, pair by pair."""
    particles = [(-1, r) for r in electrons] + [(1, r) for r in protons]
    return sum(q * p / float(np.linalg.norm(r - s)) for k, (q, r) in enumerate(particles) for p, s in particles[:k])


def square() -> Wavefunction:
    """Four hydrogen atoms on a rectangle: an expansion of two states over the strings of an active space."""
    atoms = system("H1 H2 H3 H4", 2, 2, [[0, 0, 0], [1.6, 0, 0], [0, 1.8, 0], [1.6, 1.8, 0]])
    S, _, _ = integrals(atoms.positions, atoms.effective_charges)
    C = lowdin(S)
    strings = np.array([[0b0011], [0b0101], [0b1010], [0b1100]], dtype=np.uint64)
    entries = [(0, 0), (0, 3), (1, 1), (1, 2), (2, 1), (2, 2), (3, 0), (3, 3)]
    # Singlets: the determinants with four singly occupied orbitals belong together.
    first = np.array([0.8, -0.2, 0.3, -0.2, -0.2, 0.3, -0.2, 0.3])
    second = np.array([0.1, 0.5, -0.2, 0.5, 0.5, 0.2, 0.5, 0.2])
    first /= np.linalg.norm(first)
    second -= first * (first @ second)
    second /= np.linalg.norm(second)
    kept = math.sqrt(1 - 0.01)
    expansion = Expansion(
        "main",
        "main",
        strings,
        strings,
        np.array([0, 2, 4, 6, 8], dtype=np.int64),
        np.array([j for _, j in entries], dtype=np.int64),
        kept * np.array([first, second]),
        discarded_weight=np.array([0.01, 0.01]),
    )
    return Wavefunction(
        system=atoms,
        basis=hydrogen_basis(4),
        orbitals={"main": OrbitalSet("both", C, roles=("active",) * 4)},
        expansion=expansion,
        witness=witness(atoms.positions, {"main": C}),
        provenance=MADE,
    )


def watched() -> Wavefunction:
    """`square` with a witness of D at whole configurations."""
    whole = square()
    assert whole.expansion is not None
    assert whole.witness is not None
    places = np.array(
        [
            [[0.1, 0.2, 0.3], [1.5, 0.1, -0.2], [0.2, 1.6, 0.1], [1.4, 1.9, -0.3]],
            [[0.9, -0.4, 0.2], [0.3, 1.2, 0.8], [1.1, 0.7, -0.6], [-0.5, 0.4, 0.1]],
            [[2.1, 1.0, 0.4], [0.0, 2.2, -0.7], [1.6, -0.3, 0.5], [0.6, 1.3, 1.1]],
        ]
    )
    seen = _configurations(
        whole.system.positions, np.asarray(whole.orbitals["main"].coefficients), whole.expansion, places
    )
    return replace(whole, witness=replace(whole.witness, configurations=seen))


def carbon() -> Wavefunction:
    """The carbon atom with a correlation-consistent core potential (Bennett et al., J. Chem. Phys. 147, 224106)."""
    a_s, a_p = 0.45, 0.35
    s = ANGULAR * (2 * a_s / math.pi) ** 0.75
    p = math.sqrt(4 * math.pi / 3) * 2 * math.sqrt(a_p) * (2 * a_p / math.pi) ** 0.75
    return Wavefunction(
        system=system("C", 3, 1, [[0, 0, 0]], cores=2),
        potentials=Potentials(
            center=np.zeros(4, dtype=np.int32),
            channel=np.array([-1, -1, -1, 0], dtype=np.int32),
            power=np.array([-1, 1, 0, 0], dtype=np.int32),
            exponent=np.array([14.43502, 8.39889, 7.38188, 7.76079]),
            coefficient=np.array([4.0, 57.74008, -25.81955, 52.13345]),
        ),
        basis=Basis(
            "gaussian",
            np.zeros(2, dtype=np.int32),
            np.array([0, 1], dtype=np.int32),
            np.array([0, 1], dtype=np.int8),
            np.arange(3, dtype=np.int64),
            np.array([a_s, a_p]),
            np.array([s, p * math.sqrt(3 / (4 * math.pi))]),
        ),
        orbitals={"main": OrbitalSet("both", np.eye(4), occupations=np.array([2.0, 1.0, 1.0, 0.0]))},
        expansion=determinant(0b0111, 0b0001),
        provenance=MADE,
    )


def water() -> Wavefunction:
    """Water with solid and monomial shells up to d; orbitals only."""
    from qwfx.reference import overlap

    atoms = system("O H1 H2", 5, 5, [[0, 0, 0.22], [0, 1.43, -0.89], [0, -1.43, -0.89]])
    shells = [(0, 0, 0, 12.0), (0, 0, 0, 0.9), (0, 1, 0, 0.8), (0, 2, 1, 0.7), (1, 0, 0, 0.5), (1, 1, 0, 0.6),
              (2, 0, 0, 0.5), (2, 1, 0, 0.6)]  # fmt: skip
    center, angular, monomial, exponent = zip(*shells, strict=True)
    basis = Basis(
        "gaussian",
        np.array(center, dtype=np.int32),
        np.array(angular, dtype=np.int32),
        np.array(monomial, dtype=np.int8),
        np.arange(len(shells) + 1, dtype=np.int64),
        np.array(exponent),
        np.ones(len(shells)),
    )
    C = lowdin(overlap(basis, atoms.positions))
    return Wavefunction(
        system=atoms,
        basis=basis,
        orbitals={"main": OrbitalSet("both", C)},
        energies=energies((0, "RHF", 9.0883, 0.0, "nuclear-attraction-guess")),
        provenance=MADE,
    )


def radical() -> Wavefunction:
    """Three hydrogen atoms in a row with different orbitals for different spins, and their Hamiltonian."""
    atoms = system("H1 H2 H3", 2, 1, [[0, 0, 0], [0, 0, 1.7], [0, 0, 3.5]])
    S, h, eri = integrals(atoms.positions, atoms.effective_charges)
    up = lowdin(S)
    angle = 0.3
    turn = np.array([[math.cos(angle), math.sin(angle), 0], [-math.sin(angle), math.cos(angle), 0], [0, 0, 1]])
    down = turn @ up
    h_up, up_up = transform(h, eri, up)
    h_down, down_down = transform(h, eri, down)
    _, up_down = transform(h, eri, up, down)
    packed = eightfold(down_down)
    index = np.flatnonzero(np.abs(packed) > 1e-2).astype(np.uint64)
    repulsion = 1 / 1.7 + 1 / 1.8 + 1 / 3.5
    return Wavefunction(
        system=atoms,
        basis=hydrogen_basis(3),
        orbitals={
            "up": OrbitalSet("up", up, occupations=np.array([1.0, 1.0, 0.0])),
            "down": OrbitalSet("down", down, occupations=np.array([1.0, 0.0, 0.0])),
        },
        expansion=determinant(0b011, 0b001, "up", "down"),
        hamiltonian=Hamiltonian(
            3,
            repulsion,
            {"up": h_up, "down": h_down},
            {
                "up_up": TwoBody(eightfold(up_up)),
                "up_down": TwoBody(fourfold(up_down)),
                "down_down": TwoBody(packed[index.astype(np.int64)], index),
            },
            up_set="up",
            down_set="down",
        ),
        energies=energies((0, "UHF", repulsion, 0.0, "nuclear-repulsion")),
        witness=witness(atoms.positions, {"up": up, "down": down}),
        provenance=MADE,
    )


def integrals_only() -> Wavefunction:
    """The Hamiltonian of `radical` with its nuclei, without the functions that it came from."""
    whole = radical()
    assert whole.hamiltonian is not None
    alone = replace(whole.hamiltonian, up_set=None, down_set=None)
    return Wavefunction(system=whole.system, hamiltonian=alone, energies=whole.energies, provenance=MADE)


def crystal() -> Wavefunction:
    """A chain of hydrogen molecules in a cell, with Bloch orbitals at two k-points."""
    atoms = system("H1 H2", 1, 1, [[0, 0, 0], [1.4, 0, 0]])
    cell = Cell(np.diag([4.0, 12.0, 12.0]), np.array([[0.0, 0, 0], [0.25, 0, 0]]))
    C = np.array([[0.55, 0.55], [0.5 + 0.1j, 0.5 - 0.1j]])
    return Wavefunction(
        system=System(1, 1, atoms.labels, atoms.atomic_numbers, atoms.effective_charges, atoms.positions, cell),
        basis=hydrogen_basis(2),
        orbitals={"main": OrbitalSet("both", C, kpoint=np.array([0, 1], dtype=np.int32))},
        expansion=determinant(1, 1),
        provenance=MADE,
    )


def _lattice(n_up: int, n_down: int, hamiltonian: Hamiltonian) -> Wavefunction:
    nothing = System(n_up, n_down, (), np.zeros(0, dtype=np.int32), np.zeros(0), np.zeros((0, 3)))
    return Wavefunction(system=nothing, hamiltonian=hamiltonian, provenance=MADE)


def lattice() -> Wavefunction:
    """A Hubbard model of two sites, sparse: a Hamiltonian without a geometry."""
    values = TwoBody(np.array([4.0, 4.0]), np.array([0, 5], dtype=np.uint64))
    return _lattice(1, 1, Hamiltonian(2, 0.0, {"both": np.array([[0.0, -1.0], [-1.0, 0.0]])}, {"both": values}))


def ring() -> Wavefunction:
    """The same two sites in complex orbitals: packing by pairs."""
    U = np.array([[1, 1j], [1j, 1]]) / math.sqrt(2) @ np.diag([1, np.exp(0.7j)])
    U = U @ np.array([[math.cos(0.4), math.sin(0.4)], [-math.sin(0.4), math.cos(0.4)]])
    h = U.conj().T @ np.array([[0.0, -1.0], [-1.0, 0.2]]) @ U
    eri = 4.0 * np.einsum("ip,iq,ir,is->pqrs", U.conj(), U, U.conj(), U)
    pairs = [(p, q) for p in range(2) for q in range(2)]
    packed = np.array([eri[pair + other] for k, pair in enumerate(pairs) for other in pairs[: k + 1]])
    return _lattice(1, 1, Hamiltonian(2, 0.0, {"both": h}, {"both": TwoBody(packed)}, complex_orbitals=True))


VALID: dict[str, Callable[[], Wavefunction]] = {
    f.__name__: f
    for f in (
        hydrogen,
        helium,
        dressed,
        triplet,
        square,
        watched,
        carbon,
        water,
        radical,
        integrals_only,
        crystal,
        lattice,
        ring,
    )
}
