"""Core potentials by name from the library that comes with PySCF."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import UnsupportedError
from qwfx.model import Potentials

__all__ = ["potentials_from_library"]


def potentials_from_library(
    names: Mapping[str, str], labels: Sequence[str], atomic_numbers: Sequence[int]
) -> tuple[Potentials | None, NDArray[np.int32]]:
    """The core potentials of a molecule from PySCF's library.

    Parameters
    ----------
    names : element symbol, label of an atom, or ``default`` -> name in the library, such as ``{"I": "def2-svp"}``.
        A label comes before an element, an element before the default. The default passes over elements that the named
        set has no potential for.
    labels : (A) the user's names of the atoms.
    atomic_numbers : (A); 0 for a ghost that is to have no potential.

    Returns
    -------
    The table of terms (None if no atom has one), and (A) the electrons that each potential stands for.

    Raises
    ------
    UnsupportedError if the library lacks the potential of an element that was named, or a name fits no atom.
    """
    from pyscf.data.elements import ELEMENTS

    lowered = {key.lower(): value for key, value in names.items()}
    symbols = [ELEMENTS[number] if number else "" for number in atomic_numbers]
    used = set()
    cores = np.zeros(len(symbols), dtype=np.int32)
    rows: list[tuple[int, int, int, float, float]] = []
    for atom, (label, symbol) in enumerate(zip(labels, symbols, strict=True)):
        if not symbol:
            continue
        key = next((k for k in (label.lower(), symbol.lower(), "default") if k in lowered), None)
        if key is None:
            continue
        used.add(key)
        entry = _load(lowered[key], symbol, required=key != "default")
        if entry is None:
            continue
        cores[atom] = int(entry[0])
        for channel, by_power in entry[1]:
            for n, terms in enumerate(by_power):
                rows += [(atom, int(channel), n - 2, float(term[0]), float(term[1])) for term in terms]
    unused = sorted(set(lowered) - used - {"default"})
    if unused:
        raise UnsupportedError(
            f"no atom is called {', '.join(unused)}",
            where="core potentials",
            expected="elements or labels of this molecule: " + ", ".join(dict.fromkeys([*symbols, *labels])),
            remedy="correct the names",
        )
    if not rows:
        return None, cores
    center, channel, power, exponent, coefficient = zip(*rows, strict=True)
    table = Potentials(
        center=np.array(center, dtype=np.int32),
        channel=np.array(channel, dtype=np.int32),
        power=np.array(power, dtype=np.int32),
        exponent=np.array(exponent, dtype=np.float64),
        coefficient=np.array(coefficient, dtype=np.float64),
    )
    return table, cores


def _load(name: str, symbol: str, *, required: bool) -> list[Any] | None:
    from pyscf.gto import basis

    try:
        entry = basis.load_ecp(name, symbol)
    except (KeyError, RuntimeError, OSError, ValueError, AssertionError, IndexError):
        entry = None  # PySCF's parser fails in several ways on names and elements that it does not have
    if not entry:
        if required:
            raise UnsupportedError(
                f"the library has no core potential {name!r} of {symbol}",
                where="core potentials",
                expected="a name of PySCF's library, such as def2-svp, ccecp, stuttgart, lanl2dz, crenbl",
                remedy="correct the name",
            )
        return None
    return list(entry)
