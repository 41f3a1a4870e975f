"""Which member of which group holds which field of the model: the one table that reading and writing share."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal, TypeAlias

from qwfx import model

__all__ = ["DIGESTED", "GROUPS", "SPINS", "SPIN_PAIRS", "AttributeSpec", "GroupSpec", "Kind", "MemberSpec"]

Kind: TypeAlias = Literal["int8", "int32", "int64", "uint64", "float64", "number", "text"]
"""``number`` is float64 or complex128, whichever the data are."""

DIGESTED = (
    "system",
    "potentials",
    "basis",
    "orbitals",
    "expansion",
    "jastrow",
    "hamiltonian",
    "densities",
    "energies",
)
"""Groups whose content is the wave function: those that the content digest covers."""

SPINS = ("both", "up", "down")
SPIN_PAIRS = ("both", "up_up", "up_down", "down_down")


@dataclass(frozen=True)
class AttributeSpec:
    """One attribute of a group and the field of the same name."""

    name: str
    kind: Literal["int", "text", "flag"]
    optional: bool = False


@dataclass(frozen=True)
class MemberSpec:
    """One dataset of a group and the field of the same name."""

    name: str
    kind: Kind
    rank: int
    optional: bool = False
    big: bool = False
    """Left in the file until it is asked for, when it is large."""


@dataclass(frozen=True)
class GroupSpec:
    """A group that mirrors one dataclass."""

    build: type[Any]
    attributes: tuple[AttributeSpec, ...] = ()
    members: tuple[MemberSpec, ...] = ()


GROUPS: dict[str, GroupSpec] = {
    "system": GroupSpec(
        model.System,
        (AttributeSpec("n_up", "int"), AttributeSpec("n_down", "int")),
        (
            MemberSpec("labels", "text", 1),
            MemberSpec("atomic_numbers", "int32", 1),
            MemberSpec("effective_charges", "float64", 1),
            MemberSpec("positions", "float64", 2),
        ),
    ),
    "system/cell": GroupSpec(
        model.Cell, (), (MemberSpec("vectors", "float64", 2), MemberSpec("kpoints", "float64", 2))
    ),
    "potentials": GroupSpec(
        model.Potentials,
        (),
        (
            MemberSpec("center", "int32", 1),
            MemberSpec("channel", "int32", 1),
            MemberSpec("power", "int32", 1),
            MemberSpec("exponent", "float64", 1),
            MemberSpec("coefficient", "float64", 1),
        ),
    ),
    "basis": GroupSpec(
        model.Basis,
        (AttributeSpec("radial", "text"),),
        (
            MemberSpec("shell_center", "int32", 1),
            MemberSpec("shell_l", "int32", 1),
            MemberSpec("shell_monomial", "int8", 1),
            MemberSpec("primitive_start", "int64", 1),
            MemberSpec("exponents", "float64", 1),
            MemberSpec("coefficients", "float64", 1),
            MemberSpec("powers", "int32", 1, optional=True),
        ),
    ),
    "orbitals/*": GroupSpec(
        model.OrbitalSet,
        (AttributeSpec("spin", "text"),),
        (
            MemberSpec("coefficients", "number", 2, big=True),
            MemberSpec("energies", "float64", 1, optional=True),
            MemberSpec("occupations", "float64", 1, optional=True),
            MemberSpec("roles", "text", 1, optional=True),
            MemberSpec("irreps", "text", 1, optional=True),
            MemberSpec("kpoint", "int32", 1, optional=True),
        ),
    ),
    "expansion": GroupSpec(
        model.Expansion,
        (AttributeSpec("up_set", "text"), AttributeSpec("down_set", "text")),
        (
            MemberSpec("up_strings", "uint64", 2, big=True),
            MemberSpec("down_strings", "uint64", 2, big=True),
            MemberSpec("row_start", "int64", 1, big=True),
            MemberSpec("columns", "int64", 1, big=True),
            MemberSpec("coefficients", "number", 2, big=True),
            MemberSpec("discarded_weight", "float64", 1, optional=True),
        ),
    ),
    "energies": GroupSpec(
        model.Energies,
        (),
        (
            MemberSpec("state", "int32", 1),
            MemberSpec("method", "text", 1),
            MemberSpec("value", "float64", 1),
            MemberSpec("uncertainty", "float64", 1),
            MemberSpec("quantity", "text", 1),
        ),
    ),
    "witness": GroupSpec(
        model.Witness,
        (
            AttributeSpec("evaluator", "text"),
            AttributeSpec("evaluator_version", "text"),
            AttributeSpec("independent", "flag"),
        ),
        (MemberSpec("points", "float64", 2),),
    ),
    "witness/orbitals/*": GroupSpec(
        model.WitnessOrbitals,
        (),
        (
            MemberSpec("values", "number", 2),
            MemberSpec("gradients", "number", 3),
            MemberSpec("laplacians", "number", 2),
        ),
    ),
    "witness/configurations": GroupSpec(
        model.WitnessConfigurations,
        (),
        (
            MemberSpec("positions", "float64", 3),
            MemberSpec("log_abs", "float64", 2),
            MemberSpec("sign", "number", 2),
            MemberSpec("gradients", "number", 4),
            MemberSpec("laplacian", "number", 2),
            MemberSpec("potential", "number", 2, optional=True),
            MemberSpec("local_energy", "number", 2, optional=True),
        ),
    ),
    "hamiltonian/two_body/*": GroupSpec(
        model.TwoBody,
        (),
        (MemberSpec("values", "number", 1, big=True), MemberSpec("index", "uint64", 1, optional=True, big=True)),
    ),
}
"""Path pattern -> what is there. ``/hamiltonian`` itself, ``/densities``, ``/jastrow`` and ``/extensions`` hold members
whose names are data and are read and written by functions of their own."""
