"""Tier *consistency*: Jastrow terms, as far as their data go; their formulas are FORMAT.md's section 7."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, listed

__all__: list[str] = []

TRIAL: tuple[Purpose, ...] = ("trial",)
JASTROW = Premise(members=("/jastrow", "/system"), rules=("finite-numbers",))
PAIRS = ("up_up", "up_down", "down_down")
CHANNELS = {"electron-electron": PAIRS, "three-body": PAIRS, "electron-nucleus": ("up", "down")}


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
        for i, word in enumerate(words):
            if word not in known:
                yield Problem(
                    at(member, i), f"one of {', '.join(known)}", repr(word), "name the spins that the row is for"
                )
            elif word in words[:i]:
                yield Problem(at(member, i), "each channel once", f"{word!r} again", "add up the rows, or remove one")
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
        member = f"{path}/atoms"
        atoms = file.read(member).astype(np.int64)
        for i in np.flatnonzero((atoms < 0) | (atoms >= n_atoms)):
            yield Problem(
                at(member, i), f"0 to {n_atoms - 1}: there are {n_atoms} atoms", str(atoms[i]), "count atoms from 0"
            )
        for i in np.flatnonzero(np.diff(atoms) <= 0):
            yield Problem(
                at(member, i + 1),
                f"more than {atoms[i]}, the atom before it",
                str(atoms[i + 1]),
                "sort the atoms, each once: an atom that is listed twice counts twice",
            )
    yield Covered(f"terms {listed(path.rpartition('/')[2] for path in with_atoms)}")


Check = Callable[[Inspection, str], Iterator[Problem]]


def _bad(member: str, mask: NDArray[np.bool_], values: NDArray[Any], expected: str, remedy: str) -> Iterator[Problem]:
    for i in np.flatnonzero(mask):
        yield Problem(at(member, i), expected, f"{values[i]:g}", remedy)


def _pade(file: Inspection, path: str) -> Iterator[Problem]:
    b = file.read(f"{path}/b")
    yield from _bad(f"{path}/b", b < 0, b, "b of 0 or more", "below 0 the function has a pole at r = -1/b")


def _cutoff(file: Inspection, path: str) -> Iterator[Problem]:
    cutoff = file.read(f"{path}/cutoff")
    yield from _bad(
        f"{path}/cutoff", cutoff <= 0, cutoff, "a length above 0, in bohr", "write the length of the cutoff"
    )


def _cutoff_polynomial(file: Inspection, path: str) -> Iterator[Problem]:
    yield from _cutoff(file, path)
    if file.integer(path, "smoothness") < 3:
        yield Problem(
            f"{path}@smoothness",
            "3 or more, so that the local energy is continuous at the cutoff",
            str(file.attribute(path, "smoothness")),
            "nothing, if it is meant: 2 leaves a jump of the local energy at the cutoff",
            Severity.NOTE,
        )
    gamma = file.read(f"{path}/coefficients")
    if gamma.ndim == 4:
        for row, word in enumerate(file.strings(f"{path}/channel")):
            skew = np.abs(gamma[row] - np.swapaxes(gamma[row], 0, 1))
            if word != "up_down" and skew.max(initial=0.0) > 1e-12 * max(
                1.0, float(np.abs(gamma[row]).max(initial=0.0))
            ):
                where = tuple(int(i) for i in np.unravel_index(int(skew.argmax()), skew.shape))
                yield Problem(
                    at(f"{path}/coefficients", (row, *where)),
                    "gamma_lmn = gamma_mln for electrons of like spin",
                    f"they differ by {skew.max():.3g}",
                    "use the mean of the two: exchange of like electrons must not change J",
                )


def _scaled_polynomial(file: Inspection, path: str) -> Iterator[Problem]:
    for name in ("scale", "scale_electron"):
        if file.has(f"{path}/{name}"):
            scale = file.read(f"{path}/{name}")
            yield from _bad(
                f"{path}/{name}", scale < 0, scale, "a scale of 0 or more", "below 0 the distance has a pole"
            )
    powers = file.read(f"{path}/powers").astype(np.int64)
    rows = powers.reshape(len(powers), -1)
    expected = "n >= 1" if powers.ndim == 1 else "m >= n >= 0 and o >= 0, not all 0"
    for k, row in enumerate(rows):
        wrong = (row < 0).any() or not row.any() or (len(row) == 3 and row[0] < row[1])
        if wrong:
            yield Problem(at(f"{path}/powers", k), expected, listed(row), "see F23 and F24 of FORMAT.md")
        elif (rows[:k] == row).all(axis=1).any():
            yield Problem(
                at(f"{path}/powers", k), "each set of powers once", f"{listed(row)} again", "add up the coefficients"
            )


FORMS: dict[str, Check] = {
    "pade": _pade,
    "cutoff-polynomial": _cutoff_polynomial,
    "scaled-polynomial": _scaled_polynomial,
    "bspline": _cutoff,
}


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
        if check := FORMS.get(str(file.attribute(path, "form"))):
            yield from check(file, path)
    yield Covered(f"terms {listed(file.members('/jastrow'))}")
