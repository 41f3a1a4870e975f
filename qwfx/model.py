"""The wave function as plain data: frozen dataclasses, no file and no formula.

All quantities are in hartree atomic units. Every number enters the formulas of FORMAT.md exactly as it stands here;
nothing is normalised, reordered or converted. Each class mirrors one group of the file, each field one member of it.
Dimensions in the docstrings: A atoms, T potential terms, S shells, P primitives, F functions, M orbitals of a set,
U/D distinct up/down strings, W words of a string, E entries, n orbitals of a Hamiltonian, N witness points.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Literal, Protocol, TypeAlias, runtime_checkable

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "FORMAT_NAME", "FORMAT_VERSION", "Array", "Basis", "Cell", "Densities", "Energies", "Expansion", "Hamiltonian",
    "JastrowTerm", "LazyArray", "Node", "OrbitalSet", "Potentials", "Provenance", "Spin", "System",
    "TwoBody", "Wavefunction", "Witness", "WitnessConfigurations", "WitnessOrbitals",
]  # fmt: skip

FORMAT_NAME = "qwfx"
FORMAT_VERSION = "1.0"

Spin: TypeAlias = Literal["both", "up", "down"]
Radial: TypeAlias = Literal["gaussian", "slater"]
Packing: TypeAlias = Literal["eightfold", "fourfold", "pairs"]


@runtime_checkable
class LazyArray(Protocol):
    """A big member that stays in the file until it is sliced; ``numpy.asarray(x)`` reads the whole of it."""

    @property
    def shape(self) -> tuple[int, ...]:
        """Extent along each axis."""

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of an element in memory, always in native byte order."""

    def __len__(self) -> int: ...

    def __getitem__(self, key: Any) -> Any: ...

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> NDArray[Any]: ...


Array: TypeAlias = NDArray[Any] | LazyArray
"""Either a NumPy array or a `LazyArray`. Call ``numpy.asarray`` where the whole is needed."""


def _frozen(mapping: Mapping[str, Any]) -> Mapping[str, Any]:
    return MappingProxyType(dict(mapping))


@dataclass(frozen=True, eq=False)
class Cell:
    """``/system/cell``: periodicity (stored and checked; not evaluated by this version)."""

    vectors: NDArray[np.float64]
    """(3, 3) lattice vectors as rows, bohr."""
    kpoints: NDArray[np.float64]
    """(K, 3) k-points in units of the reciprocal vectors (reduced)."""


@dataclass(frozen=True, eq=False)
class System:
    """``/system``: nuclei and electrons. A = 0 for a Hamiltonian that came without a geometry."""

    n_up: int
    n_down: int
    labels: tuple[str, ...]
    """(A) the user's names of the atoms, such as ``C1``; a ghost atom has effective charge 0."""
    atomic_numbers: NDArray[np.int32]
    """(A) element of each centre, that of the underlying element for a ghost atom, 0 if it has none."""
    effective_charges: NDArray[np.float64]
    """(A) charge that the electrons feel: atomic number less the electrons in the core potential; 0 for a ghost."""
    positions: NDArray[np.float64]
    """(A, 3) bohr."""
    cell: Cell | None = None

    @property
    def n_atoms(self) -> int:
        """Number of centres, ghosts included."""
        return len(self.labels)

    @property
    def n_electrons(self) -> int:
        """Electrons that the wave function describes."""
        return self.n_up + self.n_down


@dataclass(frozen=True, eq=False)
class Potentials:
    """``/potentials``: semi-local core potentials as a flat table of terms ``c r^p exp(-a r^2)``."""

    center: NDArray[np.int32]
    """(T) atom of the term, from 0."""
    channel: NDArray[np.int32]
    """(T) -1 for the local part, else the angular momentum l of the projector."""
    power: NDArray[np.int32]
    """(T) p, the power of r exactly as it enters the formula (0 for r^{n-2} tables with n = 2)."""
    exponent: NDArray[np.float64]
    """(T) a, bohr^-2."""
    coefficient: NDArray[np.float64]
    """(T) c, hartree bohr^-p."""


@dataclass(frozen=True, eq=False)
class Basis:
    """``/basis``: contracted functions. Shell s owns primitives ``primitive_start[s]:primitive_start[s+1]``.

    ``R(r) = sum_k c_k r^{n_k} exp(-a_k r^q)``, q = 2 (gaussian) or 1 (slater); times ``S_lm`` (m = -l..l) for a solid
    shell or ``x^i y^j z^k`` (i descending, then j descending) for a monomial one. No component is normalised.
    """

    radial: Radial
    shell_center: NDArray[np.int32]
    """(S) atom of each shell, from 0."""
    shell_l: NDArray[np.int32]
    """(S) angular momentum."""
    shell_monomial: NDArray[np.int8]
    """(S) 0 solid, 1 monomial."""
    primitive_start: NDArray[np.int64]
    """(S+1) offsets into the primitives."""
    exponents: NDArray[np.float64]
    """(P) a_k, bohr^-2 (gaussian) or bohr^-1 (slater)."""
    coefficients: NDArray[np.float64]
    """(P) c_k, every factor of normalisation included."""
    powers: NDArray[np.int32] | None = None
    """(P) n_k; absent means 0 throughout."""

    @property
    def n_shells(self) -> int:
        """Number of shells S."""
        return len(self.shell_l)

    @property
    def shell_size(self) -> NDArray[np.int64]:
        """(S) number of functions of each shell: 2l+1 solid, (l+1)(l+2)/2 monomial."""
        angular = np.asarray(self.shell_l, dtype=np.int64)
        monomial = np.asarray(self.shell_monomial, dtype=bool)
        return np.where(monomial, (angular + 1) * (angular + 2) // 2, 2 * angular + 1)

    @property
    def function_start(self) -> NDArray[np.int64]:
        """(S+1) offsets of the shells in the list of functions."""
        return np.concatenate([np.zeros(1, dtype=np.int64), np.cumsum(self.shell_size)])

    @property
    def n_functions(self) -> int:
        """Number of functions F."""
        return int(self.shell_size.sum())


@dataclass(frozen=True, eq=False)
class OrbitalSet:
    """``/orbitals/<set>``: a named set of orbitals, ``phi_p = sum_mu C[p, mu] chi_mu``."""

    spin: Spin
    coefficients: Array
    """(M, F) real or complex, one row per orbital."""
    energies: NDArray[np.float64] | None = None
    """(M) hartree."""
    occupations: NDArray[np.float64] | None = None
    """(M) electrons in the orbital: 0..2 where spin is ``both``, else 0..1."""
    roles: tuple[str, ...] | None = None
    """(M) ``core``, ``active``, ``virtual`` or ``occupied``."""
    irreps: tuple[str, ...] | None = None
    """(M) irreducible representation of each orbital, in the producer's spelling."""
    kpoint: NDArray[np.int32] | None = None
    """(M) index into ``cell.kpoints``."""

    @property
    def n_orbitals(self) -> int:
        """Number of orbitals M."""
        return int(self.coefficients.shape[0])


@dataclass(frozen=True, eq=False)
class Expansion:
    """``/expansion``: a CI expansion as a sparse matrix over spin strings (see FORMAT.md, Expansion)."""

    up_set: str
    down_set: str
    up_strings: Array
    """(U, W) uint64, unique and strictly ascending, least significant word first."""
    down_strings: Array
    """(D, W) uint64."""
    row_start: Array
    """(U+1) int64 offsets into the entries."""
    columns: Array
    """(E) int64 index of the down string, strictly ascending within a row."""
    coefficients: Array
    """(states, E) real or complex."""
    discarded_weight: NDArray[np.float64] | None = None
    """(states) sum of |c|^2 of the entries that the producer left out."""


@dataclass(frozen=True, eq=False)
class JastrowTerm:
    """``/jastrow/<term>``: one term of J. What belongs to it is listed by the schema of its form."""

    form: str
    attributes: Mapping[str, str | int | float] = field(default_factory=dict)
    """Everything but ``form``."""
    members: Mapping[str, NDArray[Any]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        object.__setattr__(self, "attributes", _frozen(self.attributes))
        object.__setattr__(self, "members", _frozen(self.members))


@dataclass(frozen=True, eq=False)
class TwoBody:
    """Packed two-electron integrals ``(pq|rs)``, chemists' notation, of one pair of spins.

    ``values`` is dense (the packed vector of FORMAT.md) when `index` is None; else `index` gives the strictly
    ascending positions in the packed vector of the values that are stored, and the others are zero.
    """

    values: Array
    """(L) real or complex, L the packed length, or (number stored)."""
    index: Array | None = None
    """(number stored) uint64."""


@dataclass(frozen=True, eq=False)
class Hamiltonian:
    """``/hamiltonian``: ``core_energy + sum h_pq p+ q + 1/2 sum (pq|rs) p+ r+ s q`` over n spatial orbitals.

    Spin-restricted: keys are ``"both"`` in `one_body` and `two_body`. Spin-resolved: ``"up"``, ``"down"`` in
    `one_body`; ``"up_up"``, ``"up_down"``, ``"down_down"`` in `two_body`.

    Packing (p, q, r, s from 0). ``eightfold`` (real orbitals, like spins): pair pq = p(p+1)/2 + q for p >= q, then
    position pq(pq+1)/2 + rs for pq >= rs. ``fourfold`` (real, used for ``up_down``): position pq * n_pair + rs.
    ``pairs`` (complex orbitals): pair pq = p n + q; like spins pq(pq+1)/2 + rs for pq >= rs, unlike spins
    pq * n^2 + rs.
    """

    n_orbitals: int
    core_energy: float
    one_body: Mapping[str, Array]
    """(n, n) per key, hartree; Hermitian."""
    two_body: Mapping[str, TwoBody]
    complex_orbitals: bool = False
    """True: packing ``pairs``; False: ``eightfold`` and ``fourfold``."""
    up_set: str | None = None
    """Orbital set of the up orbitals where the file has one."""
    down_set: str | None = None
    orbital_energies: Mapping[str, NDArray[np.float64]] = field(default_factory=dict)
    """(n) per key as in `one_body`, hartree; empty where the source has none."""
    orbital_symmetry: NDArray[np.int32] | None = None
    """(n) irrep of each orbital, from 0 (totally symmetric) in the order where products are bitwise exclusive-or."""
    state_symmetry: int | None = None
    """Irrep of the target state, from 0, in the same order."""

    def __post_init__(self) -> None:
        for name in ("one_body", "two_body", "orbital_energies"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))

    @property
    def spin_resolved(self) -> bool:
        """Whether up and down orbitals differ."""
        return "up" in self.one_body


@dataclass(frozen=True, eq=False)
class Densities:
    """``/densities``: reduced density matrices per state."""

    one_body: Mapping[str, Array] = field(default_factory=dict)
    """spin (``both``, ``up``, ``down``) -> (states, n, n), ``gamma_pq = <p+ q>``."""
    two_body: Mapping[str, Array] = field(default_factory=dict)
    """spin pair (``both``, ``up_up``, ``up_down``, ``down_down``) -> (states, n, n, n, n): ``<p+ r+ s q>`` at pqrs."""


@dataclass(frozen=True, eq=False)
class Energies:
    """``/energies``: a table of reference energies, one row per number."""

    state: NDArray[np.int32]
    method: tuple[str, ...]
    """Such as ``RHF`` or ``CASSCF(6,6)``."""
    value: NDArray[np.float64]
    """hartree."""
    uncertainty: NDArray[np.float64]
    """hartree; one standard error, 0 for a deterministic number."""
    quantity: tuple[str, ...]
    """``total``, ``nuclear-repulsion``, ``electronic`` or another word."""


@dataclass(frozen=True, eq=False)
class WitnessOrbitals:
    """``/witness/orbitals/<set>``: what another program says of the orbitals of one set at the witness points."""

    values: NDArray[Any]
    """(N, M)."""
    gradients: NDArray[Any]
    """(N, M, 3)."""
    laplacians: NDArray[Any]
    """(N, M)."""


@dataclass(frozen=True, eq=False)
class WitnessConfigurations:
    """``/witness/configurations``: D (and Psi) at whole configurations of electrons, up electrons first."""

    positions: NDArray[np.float64]
    """(m, n_up + n_down, 3) bohr."""
    log_abs: NDArray[np.float64]
    """(states, m) log |D|."""
    sign: NDArray[Any]
    """(states, m) sign, or phase factor for complex orbitals."""
    gradients: NDArray[Any]
    """(states, m, electrons, 3) of log D."""
    laplacian: NDArray[Any]
    """(states, m) of D, summed over electrons, divided by D."""
    potential: NDArray[Any] | None = None
    """(states, m) (V Psi) / Psi, hartree; Psi = D exp(J)."""
    local_energy: NDArray[Any] | None = None
    """(states, m) (H Psi) / Psi, hartree."""


@dataclass(frozen=True, eq=False)
class Witness:
    """``/witness``: values computed by the producer's software, for any reader to reproduce."""

    evaluator: str
    """Program that computed the values, such as ``pyscf``."""
    evaluator_version: str
    independent: bool
    """True if no code of qwfx took part in the evaluation."""
    points: NDArray[np.float64]
    """(N, 3) bohr."""
    orbitals: Mapping[str, WitnessOrbitals] = field(default_factory=dict)
    configurations: WitnessConfigurations | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "orbitals", _frozen(self.orbitals))


@dataclass(frozen=True, eq=False)
class Provenance:
    """``/provenance``: how the file came to be, oldest step first, in the terms of W3C PROV."""

    steps: tuple[Mapping[str, Any], ...] = ()
    """Each: ``activity``, ``agent``, ``time`` (ISO 8601 UTC), ``used`` and ``generated`` (lists of entities, an input
    with its ``sha256``), ``notes`` (list of text)."""


@dataclass(frozen=True, eq=False)
class Node:
    """A piece of ``/extensions``, carried along untouched: attributes, arrays and further nodes by name."""

    attributes: Mapping[str, Any] = field(default_factory=dict)
    members: Mapping[str, NDArray[Any] | Node] = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class Wavefunction:
    """Everything that one ``.qwfx`` file holds. Only `system` is required."""

    system: System
    potentials: Potentials | None = None
    basis: Basis | None = None
    orbitals: Mapping[str, OrbitalSet] = field(default_factory=dict)
    expansion: Expansion | None = None
    jastrow: Mapping[str, JastrowTerm] = field(default_factory=dict)
    hamiltonian: Hamiltonian | None = None
    densities: Densities | None = None
    energies: Energies | None = None
    witness: Witness | None = None
    provenance: Provenance = field(default_factory=Provenance)
    extensions: Mapping[str, Node] = field(default_factory=dict)
    unread: tuple[str, ...] = ()
    """Members of a newer minor version that this reader did not understand; `save` refuses to drop them silently."""

    def __post_init__(self) -> None:
        for name in ("orbitals", "jastrow", "extensions"):
            object.__setattr__(self, name, _frozen(getattr(self, name)))

    def orbital_sets(self, spin: Literal["up", "down"]) -> Iterator[tuple[str, OrbitalSet]]:
        """The sets that hold orbitals of one spin: those marked with it and those marked ``both``."""
        return ((name, s) for name, s in self.orbitals.items() if s.spin in (spin, "both"))
