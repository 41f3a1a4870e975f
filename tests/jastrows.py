"""Random Jastrow terms of every form and body for the tests."""

from __future__ import annotations

from typing import Any

import numpy as np

from qwfx.model import JastrowTerm

__all__ = ["KINDS", "random_term"]

KINDS = (
    ("pade", "electron-electron"), ("pade", "electron-nucleus"),
    ("cutoff-polynomial", "electron-electron"), ("cutoff-polynomial", "electron-nucleus"),
    ("cutoff-polynomial", "three-body"), ("scaled-polynomial", "electron-electron"),
    ("scaled-polynomial", "electron-nucleus"), ("scaled-polynomial", "three-body"),
    ("bspline", "electron-electron"), ("bspline", "electron-nucleus"),
)  # fmt: skip


def random_term(rng: np.random.Generator, form: str, body: str, n_atoms: int, every: bool = False) -> JastrowTerm:
    """A term with all or some of its channels, at some of the atoms."""
    known = ["up", "down"] if body == "electron-nucleus" else ["up_up", "up_down", "down_down"]
    words = known if every else [known[k] for k in rng.permutation(len(known))[: rng.integers(1, len(known) + 1)]]
    rows = len(words)
    members: dict[str, np.ndarray] = {"channel": np.array(words)}
    attributes: dict[str, Any] = {"body": body}
    if body != "electron-electron":
        members["atoms"] = np.sort(rng.permutation(n_atoms)[: rng.integers(1, n_atoms + 1)]).astype(np.int32)
    if form == "pade":
        members |= {"a": rng.normal(size=rows), "b": rng.uniform(0, 2, rows)}
    elif form == "cutoff-polynomial":
        attributes["smoothness"] = int(rng.integers(2, 4))
        members["cutoff"] = rng.uniform(1.0, 5.0, rows)
        shape = (rows, 3, 3, 4) if body == "three-body" else (rows, int(rng.integers(1, 6)))
        c = 0.3 * rng.normal(size=shape)
        power = attributes["smoothness"] * (2 if body == "three-body" else 1)  # of order 1 at the origin
        c /= members["cutoff"].reshape(-1, *[1] * (c.ndim - 1)) ** power
        if body == "three-body":
            for row, word in enumerate(words):
                if word != "up_down":
                    c[row] = c[row] + c[row].transpose(1, 0, 2)
        members["coefficients"] = c
    elif form == "scaled-polynomial":
        members["scale"] = rng.uniform(0.2, 2.0, rows)
        if body == "three-body":
            members["scale_electron"] = rng.uniform(0.2, 2.0, rows)
            powers = [(0, 0, 1), (0, 0, 2), (2, 0, 0), (2, 2, 0), (2, 0, 2), (3, 1, 1), (1, 1, 4), (1, 0, 0)]
            members["powers"] = np.array([powers[k] for k in rng.permutation(8)[:5]], dtype=np.int32)
        else:
            members["powers"] = np.array([1, 2, 4], dtype=np.int32)
        members["coefficients"] = rng.normal(size=(rows, len(members["powers"])))
    else:
        members["cutoff"] = rng.uniform(1.0, 5.0, rows)
        members["coefficients"] = rng.normal(size=(rows, int(rng.integers(3, 9))))
    return JastrowTerm(form, attributes, members)
