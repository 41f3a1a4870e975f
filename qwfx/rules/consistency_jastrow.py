"""Tier *consistency*: Jastrow terms, as far as their data go; their formulas are FORMAT.md's section 7."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from qwfx.findings import Severity
from qwfx.reference.jastrow_faults import CHANNELS, atom_faults, channel_faults, parameter_faults
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import listed

__all__: list[str] = []

TRIAL: tuple[Purpose, ...] = ("trial",)
JASTROW = Premise(members=("/jastrow", "/system"), rules=("finite-numbers",))


def _terms(file: Inspection) -> list[str]:
    """Paths of the terms that the schema found sound."""
    paths = [f"/jastrow/{name}" for name in file.members("/jastrow")]
    sound = [path for path in paths if file.usable(path, "finite-numbers")]
    if not sound:
        raise PremiseError("the file has no sound Jastrow term")
    return sound


@rule(
    name="jastrow-channels",
    tier="consistency",
    severity=Severity.ERROR,
    premise=JASTROW,
    purposes=TRIAL,
    summary="channels of Jastrow terms are spins that their kind of term knows, each once",
)
def jastrow_channels(file: Inspection) -> Iterator[Remark]:
    n_up, n_down = file.integer("/system", "n_up"), file.integer("/system", "n_down")
    present = {"up": n_up > 0, "down": n_down > 0, "up_up": n_up > 1, "down_down": n_down > 1}
    present["up_down"] = n_up > 0 and n_down > 0
    for path in _terms(file):
        member = f"{path}/channel"
        known = CHANNELS[str(file.attribute(path, "body"))]
        words = file.strings(member)
        yield from map(Problem.of, channel_faults(path, str(file.attribute(path, "body")), words))
        idle = [word for word in known if present[word] and word not in words]
        if idle:
            yield Problem(
                member,
                f"a row for each kind that the electrons have: {listed(w for w in known if present[w])}",
                f"none for {listed(idle)}, for which the term is zero",
                "nothing, if that is meant; else write the row, with like parameters where spins are not told apart",
                Severity.NOTE,
            )
    yield Covered(f"terms {listed(file.members('/jastrow'))}")


@rule(
    name="jastrow-atoms",
    tier="consistency",
    severity=Severity.ERROR,
    premise=JASTROW,
    purposes=TRIAL,
    summary="atoms of Jastrow terms exist and ascend",
)
def jastrow_atoms(file: Inspection) -> Iterator[Remark]:
    n_atoms = file.shape("/system/labels")[0] if file.usable("/system/labels") else 0
    with_atoms = [path for path in _terms(file) if file.has(f"{path}/atoms")]
    if not with_atoms:
        raise PremiseError("no Jastrow term is about atoms")
    for path in with_atoms:
        yield from map(Problem.of, atom_faults(path, file.read(f"{path}/atoms"), n_atoms))
    yield Covered(f"terms {listed(path.rpartition('/')[2] for path in with_atoms)}")


@rule(
    name="jastrow-parameters",
    tier="consistency",
    severity=Severity.ERROR,
    premise=JASTROW,
    purposes=TRIAL,
    summary="parameters of Jastrow terms give functions without poles, symmetric under exchange of like electrons",
)
def jastrow_parameters(file: Inspection) -> Iterator[Remark]:
    for path in _terms(file):
        attributes = dict(file.raw.attributes(path))
        parameters = [name for name in file.members(path) if name != "channel"]
        members: dict[str, Any] = {name: file.read(f"{path}/{name}") for name in parameters}
        members["channel"] = file.strings(f"{path}/channel")
        yield from map(Problem.of, parameter_faults(path, attributes, members))
        if attributes["form"] == "cutoff-polynomial" and attributes["smoothness"] < 3:
            yield Problem(
                f"{path}@smoothness",
                "3 or more, so that the local energy is continuous at the cutoff",
                str(attributes["smoothness"]),
                "nothing, if it is meant: 2 leaves a jump of the local energy at the cutoff"
                if attributes["smoothness"] == 2
                else "choose 3: J has a kink at the cutoff, where its Laplacian is infinite",
                Severity.NOTE if attributes["smoothness"] == 2 else Severity.WARNING,
            )
    yield Covered(f"terms {listed(file.members('/jastrow'))}")
