"""Tier *consistency*: orbital sets: occupations, roles, spins, k-points, and the sets that others name."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, every, listed

__all__: list[str] = []

ORBITALS: tuple[Purpose, ...] = ("orbitals", "trial")
ROLES = ("core", "active", "virtual", "occupied")
OCCUPATION_SLACK = 1e-3
"""Electrons by which printed or correlated occupations may stray (five printed digits over many orbitals)."""


def sets_with(file: Inspection, member: str, *rules: str) -> list[str]:
    """Names of the orbital sets that have a sound data set `member`."""
    return [name for name in file.orbital_sets if file.usable(f"/orbitals/{name}/{member}", *rules)]


@rule(
    name="occupation-range",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/orbitals",), rules=("finite-numbers",)),
    purposes=ORBITALS,
    summary="occupations lie between 0 and 2, or 1 for orbitals of one spin",
)
def occupation_range(file: Inspection) -> Iterator[Remark]:
    chosen = sets_with(file, "occupations", "finite-numbers")
    if not chosen:
        raise PremiseError("no orbital set has occupations")
    for name in chosen:
        member = f"/orbitals/{name}/occupations"
        most = 2 if file.spin(name) == "both" else 1
        values = file.read(member)
        outside = (values < -OCCUPATION_SLACK) | (values > most + OCCUPATION_SLACK)
        if outside.any():
            i = int(np.argmax(outside))
            yield Problem(
                at(member, i),
                f"0 to {most} electrons (spin {file.spin(name)})",
                f"{values[i]:g}",
                "correct the occupations or the spin of the set",
                count=int(outside.sum()),
            )
    yield Covered(f"sets {listed(chosen)}")


@rule(
    name="occupation-sum",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/orbitals", "/system"), rules=("finite-numbers", "electron-count")),
    purposes=ORBITALS,
    summary="occupations of a set add up to the electrons of its spin",
)
def occupation_sum(file: Inspection) -> Iterator[Remark]:
    chosen = sets_with(file, "occupations", "finite-numbers")
    if not chosen:
        raise PremiseError("no orbital set has occupations")
    n_up, n_down = file.integer("/system", "n_up"), file.integer("/system", "n_down")
    electrons = {"both": n_up + n_down, "up": n_up, "down": n_down}
    for name in chosen:
        member = f"/orbitals/{name}/occupations"
        spin = file.spin(name)
        total, wanted = float(file.read(member).sum()), electrons.get(spin, 0)
        yield Measured(f"{name}: {total:.6g} of {wanted}")
        if wanted and not file.read(member).any():
            yield Problem(
                member,
                f"occupations that add up to {wanted}",
                "zero throughout",
                "leave the data set out if the occupations are not known",
                Severity.NOTE,
            )
        elif abs(total - wanted) > OCCUPATION_SLACK:
            hint = (
                ", half of it: as if of one spin"
                if spin == "both" and abs(2 * total - wanted) < OCCUPATION_SLACK
                else ""
            )
            yield Problem(
                member,
                f"{wanted} electrons of spin {spin}",
                f"{total:.6g}{hint}",
                "correct the occupations, n_up and n_down, or the spin of the set",
            )


@rule(
    name="role-words",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/orbitals",)),
    purposes=ORBITALS,
    summary="roles of orbitals are core, active, virtual or occupied",
)
def role_words(file: Inspection) -> Iterator[Remark]:
    chosen = sets_with(file, "roles")
    if not chosen:
        raise PremiseError("no orbital set has roles")
    for name in chosen:
        member = f"/orbitals/{name}/roles"
        for i, word in enumerate(file.strings(member)):
            if word not in ROLES:
                yield Problem(at(member, i), " or ".join(ROLES), repr(word), "use one of the words of FORMAT.md")
    yield Covered(f"sets {listed(chosen)}")


@rule(
    name="kpoint-indices",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(members=("/orbitals",)),
    purposes=ORBITALS,
    summary="orbitals name k-points that the cell lists",
)
def kpoint_indices(file: Inspection) -> Iterator[Remark]:
    chosen = sets_with(file, "kpoint")
    if not chosen:
        raise PremiseError("no orbital set names k-points")
    listed_points = file.shape("/system/cell/kpoints")[0] if file.usable("/system/cell/kpoints") else 0
    for name in chosen:
        member = f"/orbitals/{name}/kpoint"
        index = file.read(member)
        outside = (index < 0) | (index >= listed_points)
        if outside.any():
            i = int(np.argmax(outside))
            yield Problem(
                at(member, i),
                f"an index of /system/cell/kpoints, which lists {listed_points}",
                str(index[i]),
                "count k-points from 0, and list them all in the cell",
                count=int(outside.sum()),
            )
    yield Covered(f"sets {listed(chosen)}")


@rule(
    name="spin-partners",
    tier="consistency",
    severity=Severity.WARNING,
    premise=Premise(members=("/orbitals", "/system"), rules=("electron-count",)),
    purposes=ORBITALS,
    summary="there are orbitals for each spin that has electrons",
)
def spin_partners(file: Inspection) -> Iterator[Remark]:
    spins = {name: file.spin(name) for name in file.orbital_sets}
    if not spins:
        raise PremiseError("the file has no orbital set")
    lonely = [s for s in ("up", "down") if file.integer("/system", f"n_{s}") and not {s, "both"} & set(spins.values())]
    if lonely:
        electrons = " and ".join(f"{file.integer('/system', f'n_{s}')} {s}" for s in lonely)
        yield Problem(
            "/orbitals",
            f"a set with spin {' or '.join(lonely)}, or both, for {electrons} electrons",
            listed(f"{n} (spin {s})" for n, s in spins.items()),
            "add the set of the other spin, or mark the set as both",
        )
    yield Covered(every(len(spins), "orbital set"))


@rule(
    name="named-sets",
    tier="consistency",
    severity=Severity.ERROR,
    premise=Premise(any_of=("/expansion", "/hamiltonian")),
    summary="orbital sets that the expansion and the Hamiltonian name exist, with a fitting spin and size",
)
def named_sets(file: Inspection) -> Iterator[Remark]:
    looked = []
    for group in ("/expansion", "/hamiltonian"):
        for spin in ("up", "down"):
            name = file.attribute(group, f"{spin}_set") if file.has(group) else None
            if name is None or (group == "/hamiltonian" and not file.has("/orbitals")):
                continue
            where = f"{group}@{spin}_set"
            looked.append(where)
            if name not in file.orbital_sets:
                yield Problem(
                    where,
                    f"the name of an orbital set: {listed(file.orbital_sets) or 'the file has none'}",
                    repr(name),
                    "write the set, or name one that is there",
                )
            elif file.spin(name) not in (spin, "both") and file.integer("/system", f"n_{spin}"):
                yield Problem(
                    where,
                    f"a set with spin {spin} or both",
                    f"{name!r}, whose spin is {file.spin(name)!r}",
                    "name the set of this spin",
                )
            elif group == "/hamiltonian" and file.usable(f"/orbitals/{name}/coefficients"):
                rows, n = file.shape(f"/orbitals/{name}/coefficients")[0], file.integer(group, "n_orbitals")
                if rows != n:
                    yield Problem(
                        where,
                        f"a set of {n} orbitals, as n_orbitals says",
                        f"{name!r} with {rows}",
                        "name the set that holds exactly the orbitals of the integrals",
                    )
    if not looked:
        raise PremiseError("no orbital set is named")
    yield Covered(listed(looked))
