"""A Jastrow factor to start from: the cusps where electrons meet, and no other parameter than a length."""

from __future__ import annotations

import numpy as np

from qwfx.errors import EvaluationError, UnsupportedError
from qwfx.model import JastrowTerm, System

__all__ = ["SLOPES", "starting_jastrow"]

SLOPES = {"up_up": 0.25, "up_down": 0.5, "down_down": 0.25}
"""u'(0) by the cusp conditions of FORMAT.md, F19 (Kato 1957; Pack and Byers Brown 1966)."""
CUTOFF = 1.0
"""Short on purpose: nothing here holds the electrons at the nuclei, and a longer factor drives them away."""
SMOOTHNESS = 3


def starting_jastrow(system: System, cutoff: float = CUTOFF) -> dict[str, JastrowTerm]:
    """Terms for ``/jastrow`` that satisfy the cusp conditions of the electrons and do nothing else.

    The function is ``u(r) = Gamma (r - L)^3 / (3 L^2)`` inside the cutoff L, Gamma the slope that the cusp asks for:
    a cutoff polynomial (F21) with a single coefficient. It rises steadily, as ``u' = Gamma (r - L)^2 / L^2``, and has
    the curvature of a Pade function with ``b = 1/L`` at 0.

    Parameters
    ----------
    system : electrons of which spins there are. Only pairs that it has get a row.
    cutoff : L in bohr. 1 bohr lowers the energy of helium, of neon and of the nitrogen molecule from that of their
        Hartree-Fock determinants; 3 bohr, without electron-nucleus terms, raises it for all but the lightest atoms.

    Returns
    -------
    dict
        One term, or none for a system without pairs of electrons.

    Raises
    ------
    EvaluationError : a cutoff that is no length above 0.
    UnsupportedError : a periodic system, in which J is not defined.
    """
    if system.cell is not None:
        raise UnsupportedError(
            "the system is periodic", where="/system/cell", expected="a molecule", remedy="do without a Jastrow factor"
        )
    if not (np.isfinite(cutoff) and cutoff > 0):
        raise EvaluationError(f"{cutoff:g}", where="cutoff", expected="a finite length above 0, in bohr")
    up, down = system.n_up, system.n_down
    present = {"up_up": up > 1, "up_down": up > 0 and down > 0, "down_down": down > 1}
    words = [word for word in SLOPES if present[word]]
    if not words:
        return {}
    slopes = np.array([SLOPES[word] for word in words])
    members = {
        "channel": np.array(words),
        "cutoff": np.full(len(words), float(cutoff)),
        "coefficients": slopes[:, None] / (SMOOTHNESS * cutoff ** (SMOOTHNESS - 1)),
    }
    attributes: dict[str, str | int | float] = {"body": "electron-electron", "smoothness": SMOOTHNESS}
    return {"pairs": JastrowTerm("cutoff-polynomial", attributes, members)}
