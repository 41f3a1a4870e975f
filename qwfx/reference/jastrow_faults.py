"""What the data of a Jastrow term must be, beyond the schema of its form; see FORMAT.md, section 7."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.reference.faults import Fault

__all__ = ["CHANNELS", "PAIRS", "atom_faults", "channel_faults", "parameter_faults"]

PAIRS = ("up_up", "up_down", "down_down")
CHANNELS = {"electron-electron": PAIRS, "three-body": PAIRS, "electron-nucleus": ("up", "down")}


def channel_faults(path: str, body: str, words: Sequence[str]) -> Iterator[Fault]:
    """Channels that a term of this kind does not know, or knows twice."""
    known = CHANNELS[body]
    for i, word in enumerate(words):
        where = f"{path}/channel[{i}]"
        if word not in known:
            yield Fault(where, f"one of {', '.join(known)}", repr(word), "name the spins that the row is for")
        elif word in words[:i]:
            yield Fault(where, "each channel once", f"{word!r} again", "add up the rows, or remove one")


def atom_faults(path: str, atoms: NDArray[Any], n_atoms: int) -> Iterator[Fault]:
    """Atoms that do not exist or do not ascend."""
    atoms = np.asarray(atoms).astype(np.int64)
    for i in np.flatnonzero((atoms < 0) | (atoms >= n_atoms)):
        where = f"{path}/atoms[{i}]"
        yield Fault(where, f"0 to {n_atoms - 1}: there are {n_atoms} atoms", str(atoms[i]), "count atoms from 0")
    for i in np.flatnonzero(np.diff(atoms) <= 0):
        yield Fault(
            f"{path}/atoms[{i + 1}]",
            f"more than {atoms[i]}, the atom before it",
            str(atoms[i + 1]),
            "sort the atoms, each once: an atom that is listed twice counts twice",
        )


def parameter_faults(path: str, attributes: Mapping[str, Any], members: Mapping[str, Any]) -> Iterator[Fault]:
    """Parameters that give a pole, or a term that changes when like electrons are exchanged."""
    form = attributes["form"]
    if form == "pade":
        below = "below 0 the function has a pole at r = -1/b"
        yield from _bad(f"{path}/b", members["b"], np.less(members["b"], 0), "b of 0 or more", below)
    if form in ("cutoff-polynomial", "bspline"):
        cutoff = members["cutoff"]
        expected, remedy = "a length above 0, in bohr", "write the length of the cutoff"
        yield from _bad(f"{path}/cutoff", cutoff, np.less_equal(cutoff, 0), expected, remedy)
    if form == "cutoff-polynomial" and np.ndim(members["coefficients"]) == 4:
        yield from _exchange(path, members)
    if form == "scaled-polynomial":
        for name in ("scale", "scale_electron"):
            if name in members:
                below = "below 0 the distance has a pole"
                negative = np.less(members[name], 0)
                yield from _bad(f"{path}/{name}", members[name], negative, "a scale of 0 or more", below)
        yield from _powers(path, np.asarray(members["powers"]).astype(np.int64))


def _bad(member: str, values: Any, mask: NDArray[np.bool_], expected: str, remedy: str) -> Iterator[Fault]:
    for i in np.flatnonzero(mask):
        yield Fault(f"{member}[{i}]", expected, f"{values[i]:g}", remedy)


def _exchange(path: str, members: Mapping[str, Any]) -> Iterator[Fault]:
    for row, (word, gamma) in enumerate(zip(members["channel"], members["coefficients"], strict=True)):
        skew = np.abs(gamma - np.swapaxes(gamma, 0, 1))
        if word != "up_down" and skew.max(initial=0.0) > 1e-12 * max(1.0, float(np.abs(gamma).max(initial=0.0))):
            where = ",".join(str(int(i)) for i in np.unravel_index(int(skew.argmax()), skew.shape))
            yield Fault(
                f"{path}/coefficients[{row},{where}]",
                "gamma_lmn = gamma_mln for electrons of like spin",
                f"they differ by {skew.max():.3g}",
                "use the mean of the two: exchange of like electrons must not change J",
            )


def _powers(path: str, powers: NDArray[np.int64]) -> Iterator[Fault]:
    rows = powers.reshape(len(powers), -1)
    expected = "n >= 1" if powers.ndim == 1 else "m >= n >= 0 and o >= 0, not all 0"
    for k, row in enumerate(rows):
        told = ", ".join(str(int(i)) for i in row)
        if (row < 0).any() or not row.any() or (len(row) == 3 and row[0] < row[1]):
            yield Fault(f"{path}/powers[{k}]", expected, told, "see F23 and F24 of FORMAT.md")
        elif (rows[:k] == row).all(axis=1).any():
            yield Fault(f"{path}/powers[{k}]", "each set of powers once", f"{told} again", "add up the coefficients")
