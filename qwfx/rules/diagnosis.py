"""What went wrong, where it is cheap to see: an orbital that disagrees is tried against the usual mistakes."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import permutations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.model import Basis
from qwfx.rules.elements import BOHR
from qwfx.rules.evaluator import evaluate_orbitals

__all__ = ["explain_mismatch"]

AGREE = 1e-5
COMPONENTS = "xyz"


def explain_mismatch(
    basis: Basis,
    positions: NDArray[np.float64],
    C: NDArray[Any],
    points: NDArray[np.float64],
    witness: dict[str, NDArray[Any]],
    word: str,
    bad: NDArray[np.bool_],
) -> str:
    """A clause that names the mistake that would explain all orbitals marked `bad`, or an empty string.

    Parameters
    ----------
    basis, positions, C : the file's functions, (A, 3) bohr, and (M, F) coefficients.
    points : (N, 3) bohr.
    witness : ``values`` (N, M), ``gradients`` (N, M, 3), ``laplacians`` (N, M).
    word : which of the three disagrees.
    bad : (M) the orbitals that disagree.
    """
    ours = np.asarray(evaluate_orbitals(basis, positions, C, points, derivatives=2))
    mine = {"values": ours[0], "gradients": np.moveaxis(ours[1:4], 0, -1), "laplacians": ours[4]}[word]
    factor = _common_factor(mine[:, bad], witness[word][:, bad])
    if factor:
        return factor
    if word == "gradients":
        return _swapped_components(mine[:, bad], witness[word][:, bad])
    if word != "values":
        return ""
    theirs = witness["values"]
    if text := _other_order(mine, theirs, bad):
        return text
    for text, changed in _reordered(basis, C):
        trial = np.asarray(evaluate_orbitals(basis, positions, changed, points, derivatives=0))[0]
        if _agree(trial[:, bad], theirs[:, bad]):
            return f"they agree if {text}"
    for text, scale in (("the witness points are in angstrom", 1 / BOHR), ("the positions are in angstrom", BOHR)):
        at, centers = (points * scale, positions) if scale > 1 else (points, positions / BOHR)
        trial = np.asarray(evaluate_orbitals(basis, centers, C, at, derivatives=0))[0]
        if _agree(trial[:, bad], theirs[:, bad]):
            return f"they agree if {text}"
    return ""


def _agree(a: NDArray[Any], b: NDArray[Any]) -> bool:
    scale = np.maximum(np.abs(b).max(axis=0, initial=0.0), 1e-300)
    return bool((np.abs(a - b).max(axis=0, initial=0.0) / scale < AGREE).all())


def _common_factor(mine: NDArray[Any], theirs: NDArray[Any]) -> str:
    """One factor per orbital between ours and theirs."""
    n_bad = mine.shape[1]
    a = np.moveaxis(mine, 1, 0).reshape(n_bad, -1)
    b = np.moveaxis(theirs, 1, 0).reshape(n_bad, -1)
    norm = np.einsum("pi,pi->p", a.conj(), a)
    if not (np.abs(norm) > 0).all():
        return ""
    factor = np.einsum("pi,pi->p", a.conj(), b) / norm
    if not _agree((factor[:, None] * a).T, b.T):
        return ""
    if np.allclose(factor, -1, atol=AGREE):
        return "the sign is opposite"
    if np.allclose(factor, factor[0], rtol=AGREE):
        return f"the witness is {np.real_if_close(factor[0]):.6g} times ours throughout"
    return f"the witness is a multiple of ours, {np.real_if_close(factor[0]):.6g} for the first orbital concerned"


def _swapped_components(mine: NDArray[Any], theirs: NDArray[Any]) -> str:
    for order in permutations(range(3)):
        for signs in np.ndindex(2, 2, 2):
            sign = 1.0 - 2.0 * np.array(signs)
            if _agree((mine[..., order] * sign).reshape(-1, 1), theirs.reshape(-1, 1)):
                names = ", ".join(("-" if s < 0 else "") + COMPONENTS[k] for k, s in zip(order, sign, strict=True))
                return f"the witness gives the components in the order {names}"
    return ""


def _other_order(mine: NDArray[Any], theirs: NDArray[Any], bad: NDArray[np.bool_]) -> str:
    """The same orbitals in another order, up to sign."""
    index = np.flatnonzero(bad)
    if len(index) < 2:
        return ""
    pairs = []
    for p in index:
        scale = max(float(np.abs(theirs[:, p]).max()), 1e-300)
        hits = [q for q in index for s in (1, -1) if np.abs(s * mine[:, q] - theirs[:, p]).max() / scale < AGREE]
        if not hits:
            return ""
        pairs.append((int(p), int(hits[0])))
    return f"the orbitals are in another order: the witness's orbital {pairs[0][0]} is orbital {pairs[0][1]} of the set"


def _reordered(basis: Basis, C: NDArray[Any]) -> Iterator[tuple[str, NDArray[Any]]]:
    """Coefficients as they would stand if the functions of the shells had been written in another usual order."""
    start, angular, monomial = basis.function_start, basis.shell_l, basis.shell_monomial.astype(bool)

    def rearranged(order_of: dict[int, list[int]]) -> NDArray[Any]:
        changed = C.copy()
        for s, ell in enumerate(angular.tolist()):
            if not monomial[s] and ell in order_of:
                # Column k of the file belongs to the component order_of[ell][k] of the shell.
                changed[:, start[s] + np.array(order_of[ell])] = C[:, start[s] : start[s + 1]]
        return changed

    solid = sorted({int(ell) for ell, m in zip(angular, monomial, strict=True) if not m and ell > 0})
    if 1 in solid:
        yield "p functions stand in the order x, y, z", rearranged({1: [2, 0, 1]})
    if solid:
        zigzag = {ell: [ell] + [k for m in range(1, ell + 1) for k in (ell + m, ell - m)] for ell in solid}
        higher = {ell: order for ell, order in zigzag.items() if ell > 1}
        yield "solid functions stand in the order m = 0, 1, -1, 2, -2, ...", rearranged(zigzag)
        if higher and 1 in solid:
            yield (
                "p functions stand in the order x, y, z and the others in the order m = 0, 1, -1, ...",
                rearranged({**higher, 1: [2, 0, 1]}),
            )
            yield "solid functions beyond p stand in the order m = 0, 1, -1, ...", rearranged(higher)
        odd = C.copy()
        for s, ell in enumerate(angular.tolist()):
            if not monomial[s]:
                for m in range(-ell, ell + 1):
                    if m % 2:
                        odd[:, start[s] + ell + m] *= -1
        yield "functions of odd m have the opposite sign (the Condon-Shortley phase)", odd
