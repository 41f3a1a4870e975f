"""Published Slater-type atoms as wave functions, and their energies from closed-form radial integrals.

Everything is computed from the model alone (as loaded from a file): the radial parts are read off its basis and its
orbital coefficients. Nothing of the package's evaluators takes part.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Basis, OrbitalSet, System, Wavefunction

Terms = list[tuple[int, float, float]]
"""``P(r) = r R(r)`` as (n, zeta, c): sum of ``c r^n exp(-zeta r)``."""


@dataclass(frozen=True)
class Atom:
    """An atom as printed: exponents (n, zeta), and coefficients of each orbital over normalised Slater functions."""

    charge: int
    n_up: int
    n_down: int
    s: Sequence[tuple[int, float]]
    s_orbitals: Sequence[Sequence[float]]
    energy: float
    p: Sequence[tuple[int, float]] = field(default_factory=tuple)
    p_orbital: Sequence[float] = field(default_factory=tuple)
    p_electrons: int = 0


def _numbers(text: str) -> list[float]:
    return [float(word) for word in text.split()]


def _bunge(
    charge: int, spins: tuple[int, int], kinds: str, zeta: str, orbitals: Sequence[str], energy: float,
    p: tuple[str, str] | None = None,
) -> Atom:  # fmt: skip
    n = [int(kind) for kind in kinds.split()]
    s = list(zip(n, _numbers(zeta), strict=True))
    rows = [_numbers(row) for row in orbitals]
    assert all(len(row) == len(s) for row in rows)
    if p is None:
        return Atom(charge, *spins, s, rows, energy)
    p_shells = [(2, z) for z in _numbers(p[0])]
    return Atom(charge, *spins, s, rows, energy, p_shells, _numbers(p[1]), charge - 4)


# C. F. Bunge, J. A. Barrientos, A. V. Bunge, At. Data Nucl. Data Tables 53, 113 (1993): ground terms.
_MOST = "1 1 3 2 2 2 2"
_BE_B = "1 1 3 3 2 2 2"
BUNGE: Mapping[str, Atom] = {
    "He": _bunge(
        2, (1, 1), "1 3 2 2", "1.4595 5.3244 2.6298 1.7504", ["1.347900 -0.001613 -0.100506 -0.270779"], -2.861679993,
    ),
    "Li": _bunge(
        3, (2, 1), _MOST, "4.3069 2.4573 6.7850 7.4527 1.8504 0.7667 0.6364",
        ["0.141279 0.874231 -0.005201 -0.002307 0.006985 -0.000305 0.000760",
         "-0.022416 -0.135791 0.000389 -0.000068 -0.076544 0.340542 0.715708"], -7.432726924,
    ),
    "Be": _bunge(
        4, (2, 2), _BE_B, "5.7531 3.7156 9.9670 3.7128 4.4661 1.2919 0.8555",
        ["0.285107 0.474813 -0.001620 0.052852 0.243499 0.000106 -0.000032",
         "-0.016378 -0.155066 0.000426 -0.059234 -0.031925 0.387968 0.685674"], -14.57302313,
    ),
    "B": _bunge(
        5, (3, 2), _BE_B, "7.0178 3.9468 12.7297 2.7646 5.7420 1.5436 1.0802",
        ["0.381607 0.423958 -0.001316 -0.000822 0.237016 0.001062 -0.000137",
         "-0.022549 0.321716 -0.000452 -0.072032 -0.050313 -0.484281 -0.518986"], -24.52906069,
        ("5.7416 2.6341 1.8340 1.1919 0.8494", "0.007600 0.045137 0.184206 0.394754 0.432795"),
    ),
    "C": _bunge(
        6, (4, 2), _MOST, "8.4936 4.8788 15.4660 7.0500 2.2640 1.4747 1.1639",
        ["0.352872 0.473621 -0.001199 0.210887 0.000886 0.000465 -0.000119",
         "-0.071727 0.438307 -0.000383 -0.091194 -0.393105 -0.579121 -0.126067"], -37.68861890,
        ("7.0500 3.2275 2.1908 1.4413 1.0242", "0.006977 0.070877 0.230802 0.411931 0.350701"),
    ),
    "N": _bunge(
        7, (5, 2), _MOST, "9.9051 5.7429 17.9816 8.3087 2.7611 1.8223 1.4191",
        ["0.354839 0.472579 -0.001038 0.208492 0.001687 0.000206 0.000064",
         "-0.067498 0.434142 -0.000315 -0.080331 -0.374128 -0.522775 -0.207735"], -54.40093415,
        ("8.3490 3.8827 2.5920 1.6946 1.1914", "0.006323 0.082938 0.260147 0.418361 0.308272"),
    ),
    "O": _bunge(
        8, (5, 3), _MOST, "11.2970 6.5966 20.5019 9.5546 3.2482 2.1608 1.6411",
        ["0.360063 0.466625 -0.000918 0.208441 0.002018 0.000216 0.000133",
         "-0.064363 0.433186 -0.000275 -0.072497 -0.369900 -0.512627 -0.227421"], -74.80939840,
        ("9.6471 4.3323 2.7502 1.7525 1.2473", "0.005626 0.126618 0.328966 0.395422 0.231788"),
    ),
    "F": _bunge(
        9, (5, 4), _MOST, "12.6074 7.4101 23.2475 10.7416 3.7543 2.5009 1.8577",
        ["0.377498 0.443947 -0.000797 0.213846 0.002183 0.000335 0.000147",
         "-0.058489 0.426450 -0.000274 -0.063457 -0.358939 -0.516660 -0.239143"], -99.40934928,
        ("11.0134 4.9962 3.1540 1.9722 1.3632", "0.004879 0.130794 0.337876 0.396122 0.225374"),
    ),
    "Ne": _bunge(
        10, (5, 5), _MOST, "13.9074 8.2187 26.0325 11.9249 4.2635 2.8357 2.0715",
        ["0.392290 0.425817 -0.000702 0.217206 0.002300 0.000463 0.000147",
         "-0.053023 0.419502 -0.000263 -0.055723 -0.349457 -0.523070 -0.246038"], -128.5470980,
        ("12.3239 5.6525 3.5570 2.2056 1.4948", "0.004391 0.133955 0.342978 0.395742 0.221831"),
    ),
}  # fmt: skip

# E. Clementi and C. Roetti, At. Data Nucl. Data Tables 14, 177 (1974).
CLEMENTI_ROETTI: Mapping[str, Atom] = {
    "He": _bunge(
        2, (1, 1), "1 1 1 1 1", "1.41714 2.37682 4.39628 6.52699 7.94252",
        ["0.76838 0.22346 0.04082 -0.00994 0.00230"], -2.8616799,
    ),
    "Be": _bunge(
        4, (2, 2), "1 1 2 2 2 2", "3.47116 6.36861 0.77820 0.94067 1.48725 2.71830",
        ["0.91796 0.08724 0.00108 -0.00199 0.00176 0.00628",
         "-0.17092 -0.01455 0.21186 0.62499 0.26662 -0.09919"], -14.573021,
    ),
}  # fmt: skip


def wavefunction(atom: Atom, label: str) -> Wavefunction:
    """The atom as printed: one solid shell per Slater function, occupied orbitals 1s, 2s, 2p_y, 2p_z, 2p_x."""
    shells = [(0, n, zeta) for n, zeta in atom.s] + [(1, n, zeta) for n, zeta in atom.p]
    n_s = len(atom.s)
    rows = [[*row, *([0.0] * (3 * len(atom.p)))] for row in atom.s_orbitals]
    occupations = [2.0] * len(rows)
    if atom.charge == 3:
        occupations[1] = 1.0
    if atom.p:
        for m in range(3):
            row = np.zeros(n_s + 3 * len(atom.p))
            row[n_s + m :: 3] = atom.p_orbital
            rows.append(row.tolist())
        occupations += [1.0 + (m < atom.p_electrons - 3) for m in range(3)]
        if atom.p_electrons < 3:
            occupations[len(atom.s_orbitals) :] = [float(m < atom.p_electrons) for m in range(3)]
    system = System(
        atom.n_up, atom.n_down, (label,), np.array([atom.charge], dtype=np.int32), np.array([float(atom.charge)]),
        np.zeros((1, 3)),
    )  # fmt: skip
    basis = Basis(
        radial="slater",
        shell_center=np.zeros(len(shells), dtype=np.int32),
        shell_l=np.array([shell[0] for shell in shells], dtype=np.int32),
        shell_monomial=np.zeros(len(shells), dtype=np.int8),
        primitive_start=np.arange(len(shells) + 1),
        exponents=np.array([zeta for _, _, zeta in shells]),
        coefficients=np.array([(2 * zeta) ** (n + 0.5) / math.sqrt(math.factorial(2 * n)) for _, n, zeta in shells]),
        powers=np.array([n - 1 - l for l, n, _ in shells], dtype=np.int32),
    )
    orbitals = OrbitalSet("both", np.array(rows), occupations=np.array(occupations))
    return Wavefunction(system, basis=basis, orbitals={"spatial": orbitals})


def radial_parts(wf: Wavefunction) -> list[tuple[int, float, Terms]]:
    """(l, occupation, P) of each orbital of the set ``spatial``, read off basis and coefficients."""
    basis, orbitals = wf.basis, wf.orbitals["spatial"]
    assert basis is not None
    assert basis.powers is not None
    assert orbitals.occupations is not None
    parts = []
    for row, occupation in zip(np.asarray(orbitals.coefficients), orbitals.occupations, strict=True):
        terms: Terms = []
        angular: set[tuple[int, int]] = set()
        for s in range(basis.n_shells):
            l = int(basis.shell_l[s])
            own = row[basis.function_start[s] : basis.function_start[s + 1]]
            for m in np.flatnonzero(own):
                angular.add((l, int(m)))
                for k in range(int(basis.primitive_start[s]), int(basis.primitive_start[s + 1])):
                    n = int(basis.powers[k]) + l + 1
                    terms.append((n, float(basis.exponents[k]), float(own[m] * basis.coefficients[k])))
        assert len(angular) == 1, "an atomic orbital has one l and one m"
        parts.append((angular.pop()[0], float(occupation), terms))
    return parts


def moment(left: Terms, right: Terms, power: int) -> float:
    """``int P P' r^power dr``."""
    return sum(
        c * d * math.factorial(n + m + power) / (a + b) ** (n + m + power + 1) for n, a, c in left for m, b, d in right
    )


def derivative(terms: Terms) -> Terms:
    """``dP/dr``."""
    return [(n - 1, a, n * c) for n, a, c in terms] + [(n, a, -a * c) for n, a, c in terms]


def orthonormalised(parts: list[tuple[int, float, Terms]]) -> list[tuple[int, float, Terms]]:
    """Schmidt's procedure among orbitals of the same l (of different m they are orthogonal by symmetry)."""
    done: list[tuple[int, float, Terms]] = []
    for l, occupation, terms in parts:
        new = list(terms)
        if l == 0:
            for other_l, _, other in done:
                if other_l == 0:
                    factor = moment(new, other, 0)
                    new = new + [(n, a, -factor * c) for n, a, c in other]
        norm = math.sqrt(moment(new, new, 0))
        done.append((l, occupation, [(n, a, c / norm) for n, a, c in new]))
    return done


def kinetic(l: int, terms: Terms) -> float:
    """``<P| -1/2 d^2/dr^2 + l(l+1)/2r^2 |P>``."""
    slope = derivative(terms)
    return moment(slope, slope, 0) / 2 + l * (l + 1) / 2 * moment(terms, terms, -2)


def _products(left: Terms, right: Terms) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64]]:
    table = [(n + m, a + b, c * d) for n, a, c in left for m, b, d in right]
    return np.array([t[0] for t in table]), np.array([t[1] for t in table]), np.array([t[2] for t in table])


def slater_integral(k: int, one: tuple[Terms, Terms], two: tuple[Terms, Terms]) -> float:
    """``int int one(r) two(s) min(r,s)^k / max(r,s)^(k+1)`` for products of two radial parts, as finite sums.

    ``int_r^inf s^m e^(-bs) ds = m!/b^(m+1) e^(-br) sum_j (br)^j / j!``; the inner part from 0 to r becomes the same by
    exchange of the two integrations. All terms are positive for positive coefficients.
    """
    total = 0.0
    for first, second in ((_products(*one), _products(*two)), (_products(*two), _products(*one))):
        n, a, c = (column[:, None] for column in first)
        for m, b, d in zip(*second, strict=True):
            top = int(m) - k - 1
            inner = np.zeros_like(a)
            for j in range(top + 1):
                degree = n + k + j
                gamma = np.vectorize(math.factorial)(degree).astype(float)
                inner += b**j / math.factorial(j) * gamma / (a + b) ** (degree + 1)
            total += float(d * math.factorial(top) / b ** (top + 1) * np.sum(c * inner))
    return total


# Energy of p^N in its ground term: N(N-1)/2 F0(pp) + f F2(pp) (E. U. Condon and G. H. Shortley, The Theory of Atomic
# Spectra (1935), chapter 7: 3P of p^2 F0 - 5 F_2, 4S of p^3 3 F0 - 15 F_2, ..., F_2 = F2/25).
P_SHELL = {0: 0.0, 1: 0.0, 2: -5 / 25, 3: -15 / 25, 4: -15 / 25, 5: -20 / 25, 6: -30 / 25}


def energies(wf: Wavefunction) -> tuple[float, float]:
    """(total, kinetic) energy of the ground term, orbitals orthonormalised first; hartree."""
    parts = orthonormalised(radial_parts(wf))
    charge = float(wf.system.effective_charges[0])
    shells = [(l, q, P) for l, q, P in parts if l == 0]
    p_parts = [(q, P) for l, q, P in parts if l == 1]
    if p_parts:
        shells.append((1, sum(q for q, _ in p_parts), p_parts[0][1]))
    total_kinetic = sum(q * kinetic(l, P) for l, q, P in shells)
    total = total_kinetic - charge * sum(q * moment(P, P, -1) for _, q, P in shells)
    for i, (l, q, P) in enumerate(shells):
        total += q * (q - 1) / 2 * slater_integral(0, (P, P), (P, P))
        if l == 1:
            total += P_SHELL[round(q)] * slater_integral(2, (P, P), (P, P))
        for other_l, other_q, other in shells[:i]:
            exchange = slater_integral(l - other_l, (P, other), (P, other)) / (2 if l == other_l else 6)
            total += q * other_q * (slater_integral(0, (P, P), (other, other)) - exchange)
    return total, total_kinetic


def stored(wf: Wavefunction, folder: Path) -> Wavefunction:
    """The wave function as it comes back from a file."""
    from qwfx.storage import load, save

    path = folder / "published.qwfx"
    save(wf, path)
    return load(path)
