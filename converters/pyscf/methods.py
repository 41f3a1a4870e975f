"""The text of a method in ``/energies``, and back: what it takes to compute the same energy again.

``RHF``, ``ROHF``, ``UHF``; ``RKS/b3lyp``, ``ROKS/pbe,pbe``, ``UKS/lda,vwn`` with PySCF's name of the functional;
then, in parentheses and separated by semicolons, whatever departs from PySCF's defaults: ``grid level 5``,
``grid 75,302``, ``density fitting with H=cc-pvdz-jkfit, O=cc-pvdz-jkfit`` (``Coulomb fitting with ...`` where only
the Coulomb part is fitted), ``scalar X2C``, ``dispersion d3bj``.
Anything else is a method that qwfx does not recompute, such as ``CCSD(T)``.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from qwfx.errors import UnsupportedError

__all__ = ["ActiveSpace", "MeanField", "parse_active_space", "parse_mean_field"]

# Details come after a space: a functional may have parentheses of its own, as in RSH(0.3,0.2,0.1).
_MEAN_FIELD = re.compile(r"(?P<kind>RO|R|U)(?P<theory>HF|KS)(?:/(?P<xc>\S.*?))?(?: +\((?P<details>.*)\))?")
_ACTIVE_SPACE = re.compile(r"CAS(?:SCF|CI)\s*\(\s*(?P<electrons>\d+)\s*,\s*(?P<orbitals>\d+)\s*\)")
DEFAULT_GRID_LEVEL = 3


@dataclass(frozen=True)
class MeanField:
    """A self-consistent-field method of one determinant."""

    kind: str
    """``R``, ``RO`` or ``U``."""
    functional: str | None = None
    """PySCF's name of the exchange-correlation functional; None for Hartree-Fock."""
    grid_level: int = DEFAULT_GRID_LEVEL
    grid: tuple[int, int] | None = None
    """(radial, angular) points, the same for all atoms; None: those of `grid_level`."""
    auxiliary: Mapping[str, str] = field(default_factory=dict)
    """Element -> name of the auxiliary basis of a density-fitted calculation; empty: exact integrals."""
    only_coulomb: bool = False
    """Whether the exchange of a density-fitted calculation is exact."""
    scalar_x2c: bool = False
    dispersion: str | None = None
    unrecorded: tuple[str, ...] = ()
    """Settings that the energy depends on, but that this text cannot hold: it is then not recomputed."""

    def __str__(self) -> str:
        name = f"{self.kind}{'HF' if self.functional is None else f'KS/{self.functional}'}"
        details = []
        if self.grid:
            details.append(f"grid {self.grid[0]},{self.grid[1]}")
        elif self.grid_level != DEFAULT_GRID_LEVEL:
            details.append(f"grid level {self.grid_level}")
        if self.auxiliary:
            pairs = ", ".join(f"{element}={name}" for element, name in self.auxiliary.items())
            details.append(f"{'Coulomb' if self.only_coulomb else 'density'} fitting with {pairs}")
        if self.scalar_x2c:
            details.append("scalar X2C")
        if self.dispersion:
            details.append(f"dispersion {self.dispersion}")
        details += self.unrecorded
        return f"{name} ({'; '.join(details)})" if details else name


@dataclass(frozen=True)
class ActiveSpace:
    """A complete-active-space method."""

    electrons: int
    orbitals: int


def parse_active_space(text: str) -> ActiveSpace | None:
    """``CASSCF(6,6)`` or ``CASCI(6,6)``: electrons, orbitals. None for any other text."""
    match = _ACTIVE_SPACE.fullmatch(text.strip())
    return ActiveSpace(int(match["electrons"]), int(match["orbitals"])) if match else None


def parse_mean_field(text: str) -> MeanField | None:
    """The method that `text` names; None if it is no mean-field method. Raises UnsupportedError for details unknown."""
    match = _MEAN_FIELD.fullmatch(text.strip())
    if match is None:
        return None
    if (match["theory"] == "KS") != (match["xc"] is not None):
        return None  # Kohn-Sham without a functional, or a functional for Hartree-Fock
    settings: dict[str, object] = {}
    for detail in filter(None, (d.strip() for d in (match["details"] or "").split(";"))):
        settings.update(_parse_detail(detail, text))
    return MeanField(kind=match["kind"], functional=match["xc"], **settings)  # type: ignore[arg-type]


def _parse_detail(detail: str, text: str) -> dict[str, object]:
    if match := re.fullmatch(r"grid level (\d)", detail):
        return {"grid_level": int(match[1])}
    if match := re.fullmatch(r"grid (\d+),\s*(\d+)", detail):
        return {"grid": (int(match[1]), int(match[2]))}
    if match := re.fullmatch(r"(density|Coulomb) fitting with (.+)", detail):
        pairs = [pair.partition("=") for pair in re.split(r",\s+", match[2])]
        if all(separator for _, separator, _ in pairs):
            auxiliary = {key.strip(): value.strip() for key, _, value in pairs}
            return {"auxiliary": auxiliary, "only_coulomb": match[1] == "Coulomb"}
    if detail == "scalar X2C":
        return {"scalar_x2c": True}
    if match := re.fullmatch(r"dispersion (\S+)", detail):
        return {"dispersion": match[1]}
    raise UnsupportedError(
        f"the detail {detail!r} of the method is not known",
        where=f"method {text!r}",
        expected="grid level N; grid RADIAL,ANGULAR; density fitting with ELEMENT=BASIS, ...; scalar X2C; "
        "dispersion NAME",
        remedy="name the method in full; what the text cannot hold cannot be repeated",
    )
