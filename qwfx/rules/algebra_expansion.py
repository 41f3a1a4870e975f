"""Tier *algebra*: the CI expansion's norm, its states, and the occupations that it implies."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from qwfx.findings import Severity
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Covered, Measured, Premise, PremiseError, Problem, Purpose, Remark, rule
from qwfx.rules.wording import at, figure, listed

__all__: list[str] = []

TRIAL: tuple[Purpose, ...] = ("trial",)
COEFFICIENTS = "/expansion/coefficients"
NORM_SLACK = 1e-6
"""Coefficients printed with seven decimals, over some thousands of entries."""
OVERLAP_SLACK = 1e-5


def gram(file: Inspection) -> NDArray[np.complex128]:
    """(states, states) sums of conj(c_i) c_j, a piece of the entries at a time."""
    states = file.shape(COEFFICIENTS)[0]
    total = np.zeros((states, states), dtype=np.complex128)
    if file.shape(COEFFICIENTS)[1] < states:
        c = np.asarray(file.read(COEFFICIENTS))
        return np.asarray(c.conj() @ c.T, dtype=np.complex128)
    for _, c in file.pieces(COEFFICIENTS):
        total += c.conj() @ c.T
    return total


@rule(
    name="expansion-norm",
    tier="algebra",
    severity=Severity.ERROR,
    premise=Premise(members=("/expansion",), rules=("finite-numbers",)),
    cost="one pass over the coefficients",
    purposes=TRIAL,
    summary="each state is normalised: sum |c|^2 + discarded weight = 1",
)
def expansion_norm(file: Inspection) -> Iterator[Remark]:
    norms = np.diag(gram(file)).real
    member = "/expansion/discarded_weight"
    stated = file.usable(member)
    discarded = file.read(member).astype(np.float64) if stated else np.zeros(len(norms))
    for i in np.flatnonzero((discarded < 0) | (discarded > 1)):
        yield Problem(
            at(member, i),
            "a weight from 0 to 1",
            f"{discarded[i]:g}",
            "write the sum of |c|^2 of the entries that were left out",
        )
    for state, norm in enumerate(norms.tolist()):
        deviation = norm + discarded[state] - 1
        yield Measured(f"state {state}: sum deviates from 1 by {figure(deviation)}")
        if norm < 1e-12:
            yield Problem(
                at(COEFFICIENTS, state),
                "a state that does not vanish",
                "every coefficient is 0",
                "write the coefficients of the state",
            )
        elif abs(deviation) > NORM_SLACK:
            # Quantum Monte Carlo does not mind the norm, but a file that contradicts itself may mean another state.
            yield Problem(
                at(COEFFICIENTS, state),
                "sum |c|^2 + discarded_weight = 1" if stated else "sum |c|^2 = 1, or discarded_weight",
                f"{norm + discarded[state]:.8f}",
                "correct discarded_weight or the coefficients"
                if stated
                else "normalise the state, or state the weight of what was left out",
                Severity.WARNING,
            )
    yield Covered(f"all {file.shape(COEFFICIENTS)[1]} entries of {len(norms)} states")


@rule(
    name="state-orthogonality",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(members=("/expansion",), rules=("finite-numbers", "expansion-norm")),
    cost="one pass over the coefficients for each pair of states",
    purposes=TRIAL,
    summary="states of one expansion are orthogonal to each other",
)
def state_orthogonality(file: Inspection) -> Iterator[Remark]:
    products = gram(file)
    norms = np.sqrt(np.diag(products).real)
    if len(norms) < 2:
        raise PremiseError("the expansion has one state")
    off = np.abs(products) / np.outer(norms, norms)
    np.fill_diagonal(off, 0.0)
    yield Measured(f"largest overlap of two states {figure(off.max())}, tolerance {OVERLAP_SLACK:.0e}")
    discarded = file.read("/expansion/discarded_weight").max() if file.usable("/expansion/discarded_weight") else 0.0
    if off.max() > max(OVERLAP_SLACK, 2 * float(discarded)):
        i, j = divmod(int(off.argmax()), len(off))
        yield Problem(
            at(COEFFICIENTS, max(i, j)),
            f"states that overlap by less than {OVERLAP_SLACK:.0e}",
            f"states {min(i, j)} and {max(i, j)} overlap by {off[i, j]:.3g}",
            "check that rows are states of one calculation, in one order of entries",
        )
    yield Covered(f"all pairs of {len(norms)} states")


def _always_and_ever(file: Inspection, member: str, n_orbitals: int) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """(M) orbitals occupied in all strings, and (M) in any string."""
    n_words = file.shape(member)[1]
    every = np.full(n_words, np.iinfo(np.uint64).max, dtype=np.uint64)
    some = np.zeros(n_words, dtype=np.uint64)
    for _, block in file.blocks(member):
        words = np.ascontiguousarray(block, dtype=np.uint64)
        every &= np.bitwise_and.reduce(words, axis=0)
        some |= np.bitwise_or.reduce(words, axis=0)
    index = np.arange(n_orbitals)
    inside = index < 64 * n_words
    word, bit = np.minimum(index // 64, n_words - 1), (index % 64).astype(np.uint64)
    one = np.uint64(1)
    return ((every[word] >> bit) & one).astype(bool) & inside, ((some[word] >> bit) & one).astype(bool) & inside


OCCUPATION_SLACK = 1e-3


@rule(
    name="string-occupations",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(
        members=("/expansion", "/orbitals"),
        rules=("finite-numbers", "named-sets", "string-electrons", "string-range", "occupation-range"),
    ),
    cost="one pass over the strings",
    purposes=TRIAL,
    summary="orbitals that all strings occupy are full and those that none occupies are empty",
)
def string_occupations(file: Inspection) -> Iterator[Remark]:
    """For a single determinant this is the whole of the occupations; for an expansion, its core and its virtuals."""
    names = {spin: str(file.attribute("/expansion", f"{spin}_set")) for spin in ("up", "down")}
    chosen = [n for n in dict.fromkeys(names.values()) if file.usable(f"/orbitals/{n}/occupations", "finite-numbers")]
    chosen = [n for n in chosen if file.read(f"/orbitals/{n}/occupations").any()]
    if not chosen:
        raise PremiseError("the sets of the expansion have no occupations")
    discarded = file.read("/expansion/discarded_weight").max() if file.usable("/expansion/discarded_weight") else 0.0
    slack = OCCUPATION_SLACK + 2 * float(discarded)
    for name in chosen:
        member = f"/orbitals/{name}/occupations"
        values = file.read(member)
        least, most = np.zeros(len(values)), np.zeros(len(values))
        for spin, used in names.items():
            if used == name:
                always, ever = _always_and_ever(file, f"/expansion/{spin}_strings", len(values))
                least += always
                most += ever
        if file.spin(name) == "both" and names["up"] != names["down"]:
            most += 1  # the other spin's electrons in these orbitals are not told by the strings of this set
        wrong = (values < least - slack) | (values > most + slack)
        if wrong.any():
            p = int(np.argmax(wrong))
            bounds = f"{least[p]:g}" if least[p] == most[p] else f"{least[p]:g} to {most[p]:g}"
            yield Problem(
                at(member, p),
                f"{bounds}, from the strings of the expansion",
                f"{values[p]:g}",
                "correct the strings or the occupations: they speak of different states, or of "
                "different orders of the orbitals",
                count=int(wrong.sum()),
            )
    yield Covered(f"all orbitals of sets {listed(chosen)}")


@rule(
    name="string-roles",
    tier="algebra",
    severity=Severity.WARNING,
    premise=Premise(
        members=("/expansion", "/orbitals"),
        rules=("named-sets", "string-electrons", "string-range", "role-words"),
    ),
    cost="one pass over the strings",
    purposes=TRIAL,
    summary="all strings occupy core orbitals and none occupies virtual ones",
)
def string_roles(file: Inspection) -> Iterator[Remark]:
    names = {spin: str(file.attribute("/expansion", f"{spin}_set")) for spin in ("up", "down")}
    chosen = [n for n in dict.fromkeys(names.values()) if file.usable(f"/orbitals/{n}/roles")]
    if not chosen:
        raise PremiseError("the sets of the expansion have no roles")
    for name in chosen:
        member = f"/orbitals/{name}/roles"
        roles = np.array(file.strings(member))
        for spin in (s for s in ("up", "down") if names[s] == name):
            always, ever = _always_and_ever(file, f"/expansion/{spin}_strings", len(roles))
            for word, wrong in (("core", (roles == "core") & ~always), ("virtual", (roles == "virtual") & ever)):
                if wrong.any():
                    yield Problem(
                        at(member, int(np.argmax(wrong))),
                        f"an orbital that {'every' if word == 'core' else 'no'} {spin} string occupies",
                        f"{word!r}, though {'not all do' if word == 'core' else 'some do'}",
                        "correct the roles, or the strings",
                        count=int(wrong.sum()),
                    )
    yield Covered(f"all orbitals of sets {listed(chosen)}")
