"""Which orbitals and spins the indices of a file mean."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.converters.fcidump.header import Header
from qwfx.converters.fcidump.records import Source
from qwfx.converters.fcidump.store import BLOCK_CORE, BLOCKS, INTERLEAVED, RESTRICTED, Places
from qwfx.errors import ConversionError
from qwfx.kernels.packing import positions

__all__ = ["Layout", "Survey", "choose_layout", "looks_interleaved", "survey"]


SOME_EXCHANGE = 1e-6
"""hartree; models with repulsion on the sites alone have no exchange integrals at all, and stay spin-restricted."""


@dataclass(frozen=True)
class Survey:
    """What a first look at all records shows."""

    n_records: int = 0
    largest_index: int = 0
    bracketed: bool = False
    """Whether values are written ``(re,im)``."""
    any_imaginary: bool = False
    zero_records: tuple[int, ...] = ()
    """Numbers of the records whose four indices are zero."""
    zero_values: tuple[float, ...] = ()
    """Their values."""


@dataclass(frozen=True)
class Layout:
    """How the file lays out spins."""

    places: Places
    last_is_core: bool = False
    """Blocks: no zero record closes the last block, the core energy does."""
    notes: tuple[str, ...] = ()


def survey(source: Source, bracketed: bool) -> Survey:
    """Look at all records; `bracketed`: the first value is written ``(re,im)``.

    Raises ConversionError with the line of the first that is none.
    """
    n = largest = 0
    any_imaginary = False
    zeros: list[int] = []
    values: list[float] = []
    for batch in source.records():
        n += len(batch.index)
        largest = max(largest, int(batch.index.max()))
        any_imaginary = any_imaginary or bool(batch.imaginary.any())
        rows = np.flatnonzero(batch.index[:, 0] == 0)
        rows = rows[~batch.index[rows].any(axis=1)][: 16 - len(zeros)]  # more than seven are refused anyhow
        zeros += (rows + batch.first).tolist()
        values += batch.real[rows].tolist()
    return Survey(n, largest, bracketed, any_imaginary, tuple(zeros), tuple(values))


def choose_layout(header: Header, seen: Survey, source: Source) -> Layout:
    """Tell the layouts apart. Raises ConversionError where the file fits none."""
    n, largest, zeros = header.n_orbitals, seen.largest_index, len(seen.zero_records)
    is_complex = seen.any_imaginary
    notes = []
    if seen.bracketed and not is_complex:
        notes.append("complex records whose imaginary parts are all zero: stored as real")
    if is_complex:
        notes.append(
            "complex orbitals: an integral that the file leaves out counts as zero unless (ij|kl) = (kl|ij) = (ji|lk)* "
            "gives it"
        )
    looks_blocked = zeros >= BLOCK_CORE and not any(seen.zero_values[: BLOCK_CORE - 1])
    # Two zero records of which the first has a value are the core energy given twice.
    if looks_blocked or (header.spin_resolved and zeros >= 2 and seen.zero_values[0] == 0.0):
        last_is_core = zeros == BLOCK_CORE and seen.zero_values[-1] != 0.0
        if zeros not in (BLOCK_CORE, BLOCK_CORE + 1):
            raise ConversionError(
                f"{zeros} records have only zero indices",
                where=source.end(),
                expected="6 for spin-resolved blocks: one behind each of five blocks, and the core energy",
                remedy="the file is cut off or a block is missing: write it again",
            )
        if 2 * largest <= n and n % 2 == 0:
            n //= 2
        said = "" if header.spin_resolved else " (told by the zero records; the namelist does not say so)"
        notes.insert(0, f"spin-resolved, in blocks{said}")
        return Layout(Places(n, BLOCKS, is_complex), last_is_core, tuple(notes))
    if header.spin_resolved:
        spin_orbitals = largest <= n
        if spin_orbitals and n % 2:
            raise ConversionError(
                f"NORB is {n}, and the largest index is {largest}",
                where=f"{source.name}:{header.line_of('NORB')}",
                expected="an even number of spin orbitals, or indices up to twice the number of spatial orbitals",
                remedy="mend NORB, or remove UHF from the namelist if the integrals are spin-restricted",
            )
        counted = "spin orbitals" if spin_orbitals else "spatial orbitals"
        notes.insert(0, f"spin-resolved, spin orbitals interleaved; NORB = {n} counts {counted}")
        return Layout(Places(n // 2 if spin_orbitals else n, INTERLEAVED, is_complex), False, tuple(notes))
    return Layout(Places(n, RESTRICTED, is_complex), False, tuple(notes))


def looks_interleaved(places: Places, at: Callable[[NDArray[np.int64]], NDArray[Any]]) -> bool:
    """Whether integrals that were read as spin-restricted could be over interleaved spin orbitals; `at` looks them up.

    The exchange integral (pq|qp) of two orbitals in space is the self-repulsion of a charge distribution: positive.
    Between spin orbitals of unlike spins there is none. So it may be spin orbitals if it is there within the odd ones
    or within the even ones, and nowhere between odd and even ones. Fragments far apart look alike.
    """
    n = places.n
    if places.kind != RESTRICTED or n % 2 or n < 4:
        return False
    p, q = np.tril_indices(n, -1)
    place = positions(places.packing("both")[0], n, np.stack([p, q, q, p], axis=1), True)
    exchange = np.abs(at(place + places.offsets[2]))
    unlike = (p - q) % 2 == 1
    return bool(exchange[~unlike].max() > SOME_EXCHANGE) and not exchange[unlike].any()
