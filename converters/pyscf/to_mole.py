"""A model as PySCF molecule whose functions are exactly those of the file, up to factors that are known.

PySCF normalises every contraction and knows either spherical or Cartesian molecules. So the functions of the model are
written as ``chi_mu = sum_nu AO_nu T[nu, mu]``: T holds the factors of normalisation, the order of the functions, and,
where solid and monomial shells occur in one molecule, the Cartesian components of the solid ones (the molecule is then
Cartesian). Orbitals translate as ``mo_coeff = T C^T``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.pyscf.from_mole import element_of
from qwfx.errors import UnsupportedError
from qwfx.model import Basis, Potentials, System, Wavefunction

__all__ = ["Translation", "to_mole", "translate"]

_MOST_RADIAL_POWER = 6  # of r in a term of a core potential; tested against closed forms
_LARGEST_CHANNEL = 5  # PySCF leaves higher ones out without a word
_WHOLE_WITHIN = 1e-9


@dataclass(frozen=True)
class Translation:
    """A PySCF molecule, and the functions of the model in terms of its functions."""

    mole: Any
    matrix: NDArray[np.float64]
    """T (AO, F): ``chi_mu = sum_nu AO_nu T[nu, mu]``."""
    missing_potentials: tuple[int, ...]
    """Atoms that lack electrons of the core but have no potential in their place: no energy can be computed."""

    def coefficients(self, rows: Any) -> NDArray[Any]:
        """(AO, M) orbitals in PySCF's order and normalisation, from (M, F) of the model."""
        return np.asarray(self.matrix @ np.asarray(rows).T)


def to_mole(wavefunction: Wavefunction) -> Any:
    """The built ``pyscf.gto.Mole`` of a wave function; see `translate` for the functions and for the errors."""
    return translate(wavefunction).mole


def translate(wavefunction: Wavefunction) -> Translation:
    """The molecule, its basis and core potentials for PySCF.

    Raises
    ------
    UnsupportedError
        for Slater functions, powers of r in a Gaussian shell, cells, charges that PySCF cannot hold, core potentials
        outside PySCF's integrals, and files without nuclei or basis.
    """
    system, basis = wavefunction.system, wavefunction.basis
    _check(system, basis)
    assert basis is not None
    cores, missing = _core_electrons(system, wavefunction.potentials)
    plan = _Plan(basis, system.n_atoms)
    terms = _potential_terms(wavefunction.potentials, system.n_atoms)
    symbols = _symbols(system, [(plan.contents(atom), cores[atom], terms[atom]) for atom in range(system.n_atoms)])
    mole = _build(system, symbols, plan, cores, terms)
    return Translation(mole, _matrix(mole, basis, plan), missing)


def _check(system: System, basis: Basis | None) -> None:
    problem, expected, remedy = "", "", "this wave function cannot be handed to PySCF"
    if basis is None or not system.n_atoms:
        problem, expected = "the file has no nuclei or no basis", "both, for a PySCF molecule"
        remedy = "convert a file that has a geometry and a basis"
    elif system.cell is not None:
        problem, expected = "the system is periodic", "a molecule"
    elif basis.radial != "gaussian":
        problem, expected = "the basis is of Slater functions", "Gaussian functions: PySCF has no integrals of others"
    elif basis.powers is not None and np.any(basis.powers):
        problem, expected = "Gaussian primitives are multiplied with powers of r", "plain Gaussian primitives"
    else:
        zero = [s for s in range(basis.n_shells) if not _self_overlap(basis, s) > 0.0]
        if zero:
            problem, expected = f"the radial function of shell {zero[0]} is zero", "functions that have a norm"
            remedy = "leave the shell out of the basis"
    if problem:
        raise UnsupportedError(problem, where="conversion to PySCF", expected=expected, remedy=remedy)


def _self_overlap(basis: Basis, shell: int) -> float:
    """``int R(r)^2 r^(2l+2) dr`` over its largest single term, so that rounding shows as zero; NaN if not finite."""
    from scipy.special import gamma

    own = slice(int(basis.primitive_start[shell]), int(basis.primitive_start[shell + 1]))
    exponents, coefficients = np.asarray(basis.exponents[own]), np.asarray(basis.coefficients[own])
    half = float(basis.shell_l[shell]) + 1.5
    terms = np.outer(coefficients, coefficients) * gamma(half) / (2 * np.add.outer(exponents, exponents) ** half)
    largest = np.abs(terms).max(initial=0.0)
    share = float(terms.sum() / largest) if largest > 0.0 else 0.0
    return share if share > 1e-14 else 0.0


class _Plan:
    """Which shells of PySCF hold which shells of the model.

    Shells of one atom and one l whose exponents lie within those of a larger one become a general contraction: PySCF
    then computes the integrals over primitives once, as it does for the bases of its own library.
    """

    def __init__(self, basis: Basis, n_atoms: int) -> None:
        self.basis = basis
        self.groups: list[list[list[int]]] = [[] for _ in range(n_atoms)]
        """Per atom, in PySCF's order: the shells of the model in each of PySCF's shells."""
        for atom in range(n_atoms):
            own = np.flatnonzero(np.asarray(basis.shell_center) == atom)
            for angular in np.unique(np.asarray(basis.shell_l)[own]):
                self.groups[atom] += self._grouped([int(s) for s in own if basis.shell_l[s] == angular])
        needs_cartesian = np.any((np.asarray(basis.shell_l) > 1) & (np.asarray(basis.shell_monomial) == 1))
        self.cartesian = bool(needs_cartesian)

    def exponents(self, shell: int) -> NDArray[np.float64]:
        start = self.basis.primitive_start
        return np.asarray(self.basis.exponents[start[shell] : start[shell + 1]], dtype=np.float64)

    def coefficients(self, shell: int) -> NDArray[np.float64]:
        start = self.basis.primitive_start
        return np.asarray(self.basis.coefficients[start[shell] : start[shell + 1]], dtype=np.float64)

    def _grouped(self, shells: list[int]) -> list[list[int]]:
        hosts: list[tuple[int, set[float], list[int]]] = []
        for shell in sorted(shells, key=lambda s: (-len(self.exponents(s)), s)):
            own = self.exponents(shell).tolist()
            distinct = set(own)
            if len(distinct) == len(own):
                host = next((h for h in hosts if distinct <= h[1]), None)
                if host:
                    host[2].append(shell)
                    continue
                hosts.append((shell, distinct, [shell]))
            else:
                hosts.append((shell, set(), [shell]))  # repeated exponents: a shell to itself
        return [sorted(members) for _, _, members in sorted(hosts, key=lambda h: min(h[2]))]

    def contents(self, atom: int) -> list[list[Any]]:
        """The basis of one atom in PySCF's input form: contraction coefficients over normalised primitives."""
        from pyscf.gto.mole import gto_norm

        shells = []
        for group in self.groups[atom]:
            angular = int(self.basis.shell_l[group[0]])
            widest = max(group, key=lambda s: len(self.exponents(s)))
            exponents = self.exponents(widest)
            columns = np.zeros((len(exponents), len(group)))
            for column, shell in enumerate(group):
                for a, c in zip(self.exponents(shell), self.coefficients(shell), strict=True):
                    rows = np.flatnonzero(exponents == a)
                    row = rows[0] if len(group) > 1 or len(rows) == 1 else rows[columns[rows, column] == 0.0][0]
                    columns[row, column] = c / gto_norm(angular, a)
            table = np.column_stack([exponents, columns])
            shells.append([angular, *table.tolist()])
        return shells


def _core_electrons(system: System, potentials: Potentials | None) -> tuple[list[int], tuple[int, ...]]:
    """Electrons in the core of each atom, and the atoms whose core has no potential."""
    with_terms = set() if potentials is None else set(np.asarray(potentials.center).tolist())
    cores, missing = [], []
    for atom, (number, charge) in enumerate(
        zip(system.atomic_numbers.tolist(), system.effective_charges.tolist(), strict=True)
    ):
        if charge == 0.0 and atom not in with_terms:
            cores.append(0)  # a ghost
            continue
        core = round(number - charge)
        if abs(number - charge - core) > _WHOLE_WITHIN or core < 0 or number == 0:
            raise UnsupportedError(
                f"an atom of number {number} has the effective charge {charge:g}",
                where=f"atom {atom} ({system.labels[atom]})",
                expected="the atomic number less a whole number of core electrons, or 0 for a ghost",
                remedy="PySCF cannot hold this charge; correct it, or use point charges outside the wave function",
            )
        cores.append(core)
        if core and atom not in with_terms:
            missing.append(atom)
    return cores, tuple(missing)


def _potential_terms(potentials: Potentials | None, n_atoms: int) -> list[list[Any]]:
    """Per atom the core potential in PySCF's form: ``[[channel, [terms of n = 0, terms of n = 1, ...]], ...]``."""
    tables: list[dict[int, list[list[list[float]]]]] = [{} for _ in range(n_atoms)]
    if potentials is not None:
        for center, channel, power, exponent, coefficient in zip(
            potentials.center.tolist(),
            potentials.channel.tolist(),
            potentials.power.tolist(),
            potentials.exponent.tolist(),
            potentials.coefficient.tolist(),
            strict=True,
        ):
            if not -2 <= power <= _MOST_RADIAL_POWER or not -1 <= channel <= _LARGEST_CHANNEL:
                raise UnsupportedError(
                    f"a core potential has a term r^{power} in channel {channel}",
                    where=f"potential of atom {center}",
                    expected=f"powers from -2 to {_MOST_RADIAL_POWER}, channels from -1 to {_LARGEST_CHANNEL}",
                    remedy="PySCF has no integrals of this term",
                )
            by_power = tables[center].setdefault(channel, [[] for _ in range(_MOST_RADIAL_POWER + 3)])
            by_power[power + 2].append([exponent, coefficient])
    return [[[channel, table[channel]] for channel in sorted(table)] for table in tables]


def _symbols(system: System, contents: list[tuple[Any, int, Any]]) -> list[str]:
    """A PySCF symbol for each atom: the label where PySCF reads it as this atom, else element and number.

    PySCF keys bases and potentials by symbol, so a label stays only if all atoms that carry it are alike.
    """
    from pyscf.data.elements import ELEMENTS

    identities = []
    for atom, (number, charge) in enumerate(
        zip(system.atomic_numbers.tolist(), system.effective_charges.tolist(), strict=True)
    ):
        identities.append((number, charge == 0.0 and not contents[atom][2]))
    kept = [_as_symbol(label) for label in system.labels]
    first: dict[str, Any] = {}
    if all(
        symbol and element_of(symbol) == identities[atom] and first.setdefault(symbol, contents[atom]) == contents[atom]
        for atom, symbol in enumerate(kept)
    ):
        return [symbol for symbol in kept if symbol]
    plain = [f"{'GHOST-' if ghost else ''}{ELEMENTS[number] if number else ''}" for number, ghost in identities]
    return [_as_symbol(f"{symbol.rstrip('-')}{atom + 1}") for atom, symbol in enumerate(plain)]


def _as_symbol(label: str) -> str:
    """The label as PySCF would spell it, or nothing if PySCF does not take it."""
    from pyscf.gto.mole import format_atom

    try:
        return str(format_atom([[label, (0.0, 0.0, 0.0)]], unit="Bohr")[0][0])
    except (RuntimeError, KeyError, IndexError, ValueError):
        return ""


def _build(system: System, symbols: list[str], plan: _Plan, cores: list[int], terms: list[Any]) -> Any:
    from pyscf.gto import Mole

    mole = Mole()
    mole.verbose = 0
    mole.unit = "Bohr"
    mole.cart = plan.cartesian
    mole.atom = [[symbol, tuple(xyz)] for symbol, xyz in zip(symbols, system.positions.tolist(), strict=True)]
    # Set past the parser, which refuses atoms without functions and would print to the terminal.
    mole.basis = {}
    mole._basis = {symbol: plan.contents(atom) for atom, symbol in enumerate(symbols)}
    mole.ecp = {s: [cores[a], terms[a]] for a, s in enumerate(symbols) if cores[a] or terms[a]}
    mole.charge = round(float(system.effective_charges.sum())) - system.n_electrons
    mole.spin = system.n_up - system.n_down
    mole.build(dump_input=False, parse_arg=False)
    mole.basis = mole._basis
    return mole


def _matrix(mole: Any, basis: Basis, plan: _Plan) -> NDArray[np.float64]:
    from pyscf.gto.mole import cart2sph

    matrix = np.zeros((mole.nao_nr(), basis.n_functions))
    starts = basis.function_start
    row = 0
    for position, group in enumerate(group for groups in plan.groups for group in groups):
        angular = mole.bas_angular(position)
        exponents = mole.bas_exp(position)
        contractions = mole._libcint_ctr_coeff(position)
        for column, shell in enumerate(group):
            factor = _ratio(plan.exponents(shell), plan.coefficients(shell), exponents, contractions[:, column])
            if angular < 2 and (plan.cartesian or basis.shell_monomial[shell]):
                factor /= np.sqrt((2 * angular + 1) / (4 * np.pi))
            block = np.eye(int(basis.shell_size[shell]))
            if not basis.shell_monomial[shell] and angular == 1:
                block = block[[2, 0, 1]]  # rows x, y, z; columns y, z, x
            if plan.cartesian and not basis.shell_monomial[shell]:
                block = np.sqrt((2 * angular + 1) / (4 * np.pi)) * block if angular < 2 else cart2sph(angular)
            matrix[row : row + len(block), starts[shell] : starts[shell + 1]] = factor * block
            row += len(block)
    return matrix


def _ratio(
    exponents: NDArray[np.float64],
    coefficients: NDArray[np.float64],
    theirs: NDArray[np.float64],
    contraction: NDArray[np.float64],
) -> float:
    """Our radial part over PySCF's: one number for all primitives, by least squares."""
    order = np.lexsort((coefficients, exponents))[::-1]  # PySCF's order: descending
    contraction = contraction[np.isin(theirs, exponents)]
    return float(coefficients[order] @ contraction / (contraction @ contraction))
