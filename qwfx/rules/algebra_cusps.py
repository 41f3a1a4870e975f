"""Tier *algebra*: what Psi does where two particles meet, seen from Psi itself: determinants times Jastrow factor."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.model import JastrowTerm
from qwfx.rules.algebra_orbitals import BASIS_RULES
from qwfx.rules.evaluator import evaluate_orbitals, expansion_of
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import figure, listed

__all__: list[str] = []

TRIAL: tuple[Purpose, ...] = ("trial",)
CUSPS = Premise(
    members=("/jastrow", "/basis", "/orbitals", "/expansion", "/system"),
    absent=("/system/cell",),
    rules=(
        *BASIS_RULES, "string-electrons", "string-range", "row-offsets", "column-order", "jastrow-channels",
        "jastrow-atoms", "jastrow-parameters",
    ),
)  # fmt: skip
MANY_ENTRIES = 20_000
MANY_ATOMS = 24
TRIES = 16
"""Arrangements of the other electrons; the one where Psi is largest decides."""
PAIR_STEP, NUCLEUS_STEP = 1e-4, 1e-5
"""bohr. Errors of the slopes are of second order in them; Gaussian functions at a nucleus are narrow."""
PAIR_SLACK = 0.01
NUCLEUS_SLACK = 0.05
"""In units of the charge, or of 1/bohr if that is more."""
DIRECTIONS = np.concatenate([np.eye(3), -np.eye(3)])


@dataclass(frozen=True)
class _Psi:
    """Psi of state 0 at electrons (W, N, 3), up to a positive factor, by plain sums."""

    function: Callable[[NDArray[np.float64]], NDArray[np.complex128]]
    n_up: int
    n_down: int
    electrons: NDArray[np.float64]
    """(TRIES, N, 3) where electrons may be."""


def _psi(file: Inspection) -> _Psi:
    if file.shape("/expansion/columns")[0] > MANY_ENTRIES:
        raise PremiseError(f"more than {MANY_ENTRIES} entries, which are summed up one by one here")
    from qwfx.reference import jastrow

    total = expansion_of(file)
    n_up, n_down = total.up.shape[1], total.down.shape[1]
    sets = [file.attribute("/expansion", f"{spin}_set") for spin in ("up", "down")]
    C = [np.asarray(file.read(f"/orbitals/{name}/coefficients")) for name in sets]
    terms = {name: _term(file, name) for name in file.members("/jastrow")}
    positions = file.positions

    def function(electrons: NDArray[np.float64]) -> NDArray[np.complex128]:
        determinants = []
        for spin, strings in ((0, total.up), (1, total.down)):
            places = electrons[:, :n_up] if spin == 0 else electrons[:, n_up:]
            n = places.shape[1]
            if not n:
                determinants.append(np.ones((len(strings), len(electrons))))
                continue
            phi = evaluate_orbitals(file.basis, positions, C[spin], places.reshape(-1, 3), derivatives=0)[0]
            phi = phi.reshape(len(electrons), n, -1)
            determinants.append(np.array([np.linalg.det(phi[:, :, string]) for string in strings]))
        D = (total.coefficients[0][:, None] * determinants[0][total.rows] * determinants[1][total.columns]).sum(axis=0)
        with np.errstate(all="ignore"):  # of J alone, where particles coincide its derivatives are not looked at
            J = jastrow.evaluate(terms, n_up, positions, electrons)[0]
        return np.asarray(D * np.exp(np.clip(J - level, -600, 600)), dtype=np.complex128)

    rng = np.random.default_rng(1)
    charges = np.maximum(file.read("/system/effective_charges").astype(np.float64), 0)
    share = charges / charges.sum() if charges.sum() > 0 else np.full(len(charges), 1 / len(charges))
    host = positions[rng.choice(len(positions), size=(TRIES, n_up + n_down), p=share)]
    somewhere = host + 0.8 * rng.normal(size=host.shape)
    level = float(np.median(jastrow.evaluate(terms, n_up, positions, somewhere)[0]))
    return _Psi(function, n_up, n_down, somewhere)


def _term(file: Inspection, name: str) -> JastrowTerm:
    path = f"/jastrow/{name}"
    attributes = dict(file.raw.attributes(path))
    members = {key: file.read(f"{path}/{key}") for key in file.members(path) if key != "channel"}
    return JastrowTerm(
        str(attributes.pop("form")), attributes, members | {"channel": np.array(file.strings(f"{path}/channel"))}
    )


def _pair_slope(psi: _Psi, i: int, j: int, like: bool) -> float:
    """The slope of log Psi in the distance of electrons i and j where they meet, averaged over opposite directions.

    Of like spins Psi changes its sign there: it is the slope of Psi over the distance.
    """
    h = PAIR_STEP
    radii = np.array([h / 2, h, 2 * h])
    best, slope = -1.0, np.nan
    for electrons in psi.electrons:
        d = DIRECTIONS[[0, 3, 1, 4, 2, 5]] if not like else DIRECTIONS[:3]
        there = np.repeat(electrons[None], 1 + len(radii) * len(d), axis=0)
        there[:, j] = there[:, i] = electrons[i]
        offsets = (radii[:, None, None] * d / 2).reshape(-1, 3)
        there[1:, i] += offsets
        there[1:, j] -= offsets
        values = psi.function(there)
        along = values[1:].reshape(len(radii), len(d))
        if like:
            q = along / radii[:, None]
            k = int(np.abs(q[0]).argmax())
            size, found = float(np.abs(q[0, k])), (q[1:, k] / q[:-1, k] - 1) / radii[:-1]
        else:
            size, found = float(np.abs(values[0])), (along[:2].mean(axis=1) / values[0] - 1) / radii[:2]
        if np.isfinite(size) and size > best:
            best, slope = size, float((2 * found[0] - found[1]).real)
    return slope


def _nucleus_slope(psi: _Psi, i: int, nucleus: NDArray[np.float64]) -> float:
    """The slope of log Psi, averaged over directions, in the distance of electron i from a nucleus, where it is 0."""
    radii = np.array([NUCLEUS_STEP / 2, NUCLEUS_STEP])
    best, slope = -1.0, np.nan
    for electrons in psi.electrons:
        there = np.repeat(electrons[None], 1 + len(radii) * len(DIRECTIONS), axis=0)
        there[:, i] = nucleus
        there[1:, i] += (radii[:, None, None] * DIRECTIONS).reshape(-1, 3)
        values = psi.function(there)
        along = values[1:].reshape(len(radii), len(DIRECTIONS))
        # Where Psi at the nucleus is small, as beside another electron of this spin, tails of other atoms decide.
        size = float(np.abs(values[0]))
        found = (along[:2].mean(axis=1) / values[0] - 1) / radii[:2]
        if np.isfinite(size) and size > best:
            best, slope = size, float((2 * found[0] - found[1]).real)
    return slope


@rule(
    name="electron-cusps",
    tier="algebra",
    severity=Severity.ERROR,
    premise=CUSPS,
    cost="some dozens of evaluations of Psi",
    purposes=TRIAL,
    summary="where two electrons meet, Psi rises with the slope 1/2 for unlike and 1/4 for like spins",
)
def electron_cusps(file: Inspection) -> Iterator[Remark]:
    bodies = {str(file.attribute(f"/jastrow/{name}", "body")) for name in file.members("/jastrow")}
    if bodies == {"electron-nucleus"}:
        raise PremiseError("no Jastrow term couples electrons")
    psi = _psi(file)
    n_up, n = psi.n_up, psi.n_up + psi.n_down
    pairs = {"up_up": (0, 1, n_up > 1), "up_down": (0, n_up, n_up > 0 and n > n_up),
             "down_down": (n_up, n_up + 1, n - n_up > 1)}  # fmt: skip
    present = [word for word, pair in pairs.items() if pair[2]]
    if not present:
        raise PremiseError("there are no two electrons")
    for word in present:
        i, j, _ = pairs[word]
        wanted = 0.5 if word == "up_down" else 0.25
        slope = _pair_slope(psi, i, j, word != "up_down")
        yield Measured(f"{word}: {slope:.5f}, should be {wanted}")
        if not abs(slope - wanted) <= PAIR_SLACK:
            one, other = word.split("_")
            yield Problem(
                "/jastrow",
                f"a slope of {wanted} of log Psi where {'an' if one == 'up' else 'a'} {one} and "
                f"{'an' if other == 'up' else 'a'} {other} electron meet",
                f"{slope:.4f}",
                "change the terms of this pair of spins so that their slopes at r = 0 add up to that: see F19; of "
                "three-body terms, see F22",
            )
    yield Covered(f"pairs {listed(present)}")


@rule(
    name="nuclear-cusps",
    tier="algebra",
    severity=Severity.WARNING,
    premise=CUSPS,
    cost="some dozens of evaluations of Psi for each atom",
    purposes=TRIAL,
    summary="where an electron meets a nucleus, Psi falls with the slope -Z, or has none over a core potential",
)
def nuclear_cusps(file: Inspection) -> Iterator[Remark]:
    psi = _psi(file)
    charges = file.read("/system/effective_charges").astype(np.float64)
    cores = set(file.read("/potentials/center").tolist()) if file.usable("/potentials/center") else set()
    touched: set[int] = set()
    for name in file.members("/jastrow"):
        if file.has(f"/jastrow/{name}/atoms"):
            touched |= {int(atom) for atom in file.read(f"/jastrow/{name}/atoms")}
    labels = file.strings("/system/labels")
    atoms = [atom for atom in range(len(charges)) if charges[atom] > 0]
    spins = [(spin, i) for spin, i, there in (("up", 0, psi.n_up), ("down", psi.n_up, psi.n_down)) if there]
    worst = 0.0
    for atom in atoms[:MANY_ATOMS]:
        wanted = 0.0 if atom in cores else -float(charges[atom])
        for spin, i in spins:
            slope = _nucleus_slope(psi, i, file.positions[atom])
            off = abs(slope - wanted)
            worst = max(worst, off)
            if not off <= NUCLEUS_SLACK * max(1.0, -wanted):
                over = ", which has a core potential" if atom in cores else ""
                yield Problem(
                    f"/system/positions[{atom}]",
                    f"a slope of {wanted:g} of log Psi where {'an' if spin == 'up' else 'a'} {spin} electron meets "
                    f"{labels[atom]}{over}",
                    f"{slope:.4f}",
                    "change the electron-nucleus terms of this atom so that their slope at r = 0 makes up for that of "
                    "the orbitals: see F19"
                    if atom in touched
                    else "nothing, if it is known that Gaussian functions have no cusp; else add an electron-nucleus "
                    "term, or use orbitals that have one",
                    None if atom in touched else Severity.NOTE,
                )
    yield Measured(f"largest deviation {figure(worst)}")
    left_out = f"; {len(atoms) - MANY_ATOMS} more not looked at" if len(atoms) > MANY_ATOMS else ""
    yield Covered(f"{min(len(atoms), MANY_ATOMS)} nuclei{left_out}")
