"""Tier *consistency*: sparse indices, symmetries and capacity of the Hamiltonian."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.reference.packing import packed_length
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every

HAMILTONIAN: tuple[Purpose, ...] = ("hamiltonian",)
IRREPS = 8
"""Irreps of D2h, the largest group whose products are a bitwise exclusive-or in FCIDUMP order."""


@rule(
    name="sparse-index",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/hamiltonian/two_body",)),
    cost="one pass over the index of two-electron integrals",
    purposes=HAMILTONIAN,
    summary="positions of sparse two-electron integrals are strictly ascending and within the packed vector",
)
def sparse_index(file: Inspection) -> Iterator[Remark]:
    n, packing = file.integer("/hamiltonian", "n_orbitals"), file.attribute("/hamiltonian", "packing")
    sparse = 0
    for key in file.members("/hamiltonian/two_body"):
        member = f"/hamiltonian/two_body/{key}/index"
        if not file.usable(member):
            continue
        sparse += 1
        like = key != "up_down"
        length = packed_length("pairs" if packing == "complex" else "eightfold" if like else "fourfold", n, like)
        outside = disorder = 0
        first_outside, first_disorder = (0, 0), (0, 0, 0)
        for start, block in file.blocks(member, overlap=1):
            beyond = np.asarray(block >= length) | np.asarray(block < 0)
            if beyond.any() and not outside:
                k = int(np.argmax(beyond))
                first_outside = (start + k, int(block[k]))
            outside += int(beyond[1 if start else 0 :].sum())
            wrong = block[1:] <= block[:-1]
            if wrong.any() and not disorder:
                k = int(np.argmax(wrong))
                first_disorder = (start + k + 1, int(block[k]), int(block[k + 1]))
            disorder += int(wrong.sum())
        if outside:
            yield Problem(
                at(member, first_outside[0]),
                f"a position below {length}, the packed length for {n} orbitals",
                str(first_outside[1]),
                "number positions as FORMAT.md says",
                count=outside,
            )
        if disorder:
            index, before, here = first_disorder
            yield Problem(
                at(member, index),
                f"more than {before}, the position before it",
                str(here),
                "sort the integrals by position, each once",
                count=disorder,
            )
    if not sparse:
        raise PremiseError("the two-electron integrals are dense")
    yield Covered(f"all positions of {sparse} sparse data sets")


@rule(
    name="symmetry-numbers",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/hamiltonian/orbital_symmetry",)),
    purposes=HAMILTONIAN,
    summary="irreps of the Hamiltonian's orbitals are numbered 0 to 7",
)
def symmetry_numbers(file: Inspection) -> Iterator[Remark]:
    numbers = file.read("/hamiltonian/orbital_symmetry")
    outside = (numbers < 0) | (numbers >= IRREPS)
    if outside.any():
        i = int(np.argmax(outside))
        yield Problem(
            at("/hamiltonian/orbital_symmetry", i),
            f"0 to {IRREPS - 1}, totally symmetric first",
            str(numbers[i]),
            "count irreps from 0",
            count=int(outside.sum()),
        )
    state = file.attribute("/hamiltonian", "state_symmetry")
    if state is not None and not 0 <= int(state) < IRREPS:
        yield Problem("/hamiltonian@state_symmetry", f"0 to {IRREPS - 1}", str(state), "count irreps from 0")
    yield Covered(every(len(numbers), "orbital"))


@rule(
    name="orbital-capacity",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/hamiltonian", "/system"), rules=("electron-count",)),
    purposes=HAMILTONIAN,
    summary="the electrons fit into the orbitals of the Hamiltonian",
)
def orbital_capacity(file: Inspection) -> Iterator[Remark]:
    n = file.integer("/hamiltonian", "n_orbitals")
    for spin in ("up", "down"):
        electrons = file.integer("/system", f"n_{spin}")
        if electrons > n:
            yield Problem(
                f"/system@n_{spin}",
                f"at most {n} electrons of a spin: the Hamiltonian has {n} orbitals",
                str(electrons),
                "write integrals over all orbitals, or count only the electrons they describe",
                # With orbitals beside it the Hamiltonian may be that of an active space over a frozen core.
                Severity.NOTE if file.has("/orbitals") else None,
            )
    yield Measured(f"{n} orbitals")


@rule(
    name="density-orbitals",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/densities",), rules=("named-sets",)),
    summary="density matrices number orbitals that the file has",
)
def density_orbitals(file: Inspection) -> Iterator[Remark]:
    """Those of the Hamiltonian, else of the sets that the expansion names, else of the only set for the spin."""
    looked = 0
    for order in ("one_body", "two_body"):
        for key in file.members(f"/densities/{order}"):
            member = f"/densities/{order}/{key}"
            shape = file.shape(member)
            for axis, spin in ((1, key.partition("_")[0]), (len(shape) - 1, key.rpartition("_")[2])):
                wanted = _orbitals_of(file, spin)
                looked += 1
                if wanted is None:
                    yield Problem(
                        member,
                        "a Hamiltonian, an expansion or a single orbital set, whose orbitals the matrix numbers",
                        "none of the three",
                        "write the orbitals, or leave the densities out",
                    )
                elif shape[axis] != wanted:
                    yield Problem(
                        member,
                        f"{wanted} orbitals of spin {spin}",
                        f"extent {shape[axis]} of axis {axis}",
                        "write the matrix over all orbitals, zeros included",
                    )
    yield Covered(f"density matrices of {looked // 2} kinds of spin")


def _orbitals_of(file: Inspection, spin: str) -> int | None:
    if file.usable("/hamiltonian"):
        return file.integer("/hamiltonian", "n_orbitals")
    if file.usable("/expansion"):
        sets = [str(file.attribute("/expansion", f"{'down' if spin == 'down' else 'up'}_set"))]
    else:
        sets = [name for name in file.orbital_sets if file.spin(name) in (spin, "both")]
    if len(sets) != 1 or not file.usable(f"/orbitals/{sets[0]}/coefficients"):
        return None
    return file.shape(f"/orbitals/{sets[0]}/coefficients")[0]
