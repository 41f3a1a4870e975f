"""What the strings and the sparse matrix of an expansion must be, and the words for what is not so.

`qwfx validate`, which reads a file piece by piece, and `qwfx.trial.Trial`, which has the model in memory, say the same.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import FormatError
from qwfx.model import Expansion
from qwfx.reference.faults import Fault

__all__ = ["allowed_bits", "beyond_orbitals", "check_expansion", "popcount", "precedes", "wrong_column",
           "wrong_count", "wrong_order"]  # fmt: skip

WORD = 64
_BITS = np.array([bin(byte).count("1") for byte in range(256)], dtype=np.uint8)


def wrong_count(spin: str, index: int, electrons: int, bits: int) -> Fault:
    """A string that occupies another number of orbitals than there are electrons."""
    return Fault(
        f"/expansion/{spin}_strings[{index}]",
        f"{electrons} occupied orbitals: n_{spin} = {electrons}",
        str(bits),
        "write all occupied orbitals, frozen ones too, or correct the number of electrons",
    )


def wrong_order(spin: str, index: int, same: bool) -> Fault:
    """A string that is not above the one before it."""
    return Fault(
        f"/expansion/{spin}_strings[{index}]",
        "a string above the one before it",
        "the same string again" if same else "a lower one",
        "sort the strings as integers, most significant word last, and add up entries of like strings",
    )


def beyond_orbitals(spin: str, index: int, n_orbitals: int, name: str) -> Fault:
    """A string that occupies an orbital which the set does not have."""
    return Fault(
        f"/expansion/{spin}_strings[{index}]",
        f"bits 0 to {n_orbitals - 1}: set {name!r} has {n_orbitals} orbitals",
        "a bit beyond them",
        "number orbitals as the rows of the set",
    )


def wrong_column(index: int, n_down: int, column: int, before: int | None) -> Fault:
    """A column that does not exist, or (with the column `before` it in the row) one out of order."""
    if before is None:
        return Fault(
            f"/expansion/columns[{index}]",
            f"0 to {n_down - 1}: there are {n_down} down strings",
            str(column),
            "count down strings from 0",
        )
    return Fault(
        f"/expansion/columns[{index}]",
        f"more than {before}, the column before it in the row",
        str(column),
        "sort the entries of each row by column, and add up entries of like columns",
    )


def popcount(strings: NDArray[np.uint64]) -> NDArray[np.int64]:
    """Number of set bits of each row of (k, W) uint64. (NumPy has a ufunc for this from version 2 only.)"""
    octets = np.ascontiguousarray(strings).view(np.uint8).reshape(len(strings), -1)
    return np.asarray(_BITS[octets].sum(axis=1, dtype=np.int64))


def allowed_bits(n_orbitals: int, n_words: int) -> NDArray[np.uint64]:
    """(W) words with the bits of the orbitals that exist."""
    return np.array([(1 << min(max(n_orbitals - WORD * w, 0), WORD)) - 1 for w in range(n_words)], dtype=np.uint64)


def precedes(a: NDArray[np.uint64], b: NDArray[np.uint64]) -> NDArray[np.bool_]:
    """Row by row a < b as integers whose most significant word comes last."""
    result = np.zeros(len(a), dtype=bool)
    undecided = np.ones(len(a), dtype=bool)
    for word in range(a.shape[1] - 1, -1, -1):
        result |= undecided & (a[:, word] < b[:, word])
        undecided &= a[:, word] == b[:, word]
    return result


def check_expansion(expansion: Expansion, n_electrons: tuple[int, int], n_orbitals: tuple[int, int]) -> None:
    """Raise FormatError for the first fault of the strings or the sparse matrix."""
    sides = (("up", expansion.up_strings, expansion.up_set), ("down", expansion.down_strings, expansion.down_set))
    for (spin, member, name), electrons, available in zip(sides, n_electrons, n_orbitals, strict=True):
        strings = np.ascontiguousarray(member, dtype=np.uint64)
        if strings.ndim != 2 or not len(strings):
            raise FormatError(
                f"an array of shape {strings.shape}",
                where=f"/expansion/{spin}_strings",
                expected="(strings, words of 64 bits), with one string at least",
                remedy="write the strings of all entries",
            )
        counts = popcount(strings)
        if (counts != electrons).any():
            k = int(np.argmax(counts != electrons))
            raise wrong_count(spin, k, electrons, int(counts[k])).error()
        beyond = (strings & ~allowed_bits(available, strings.shape[1])).any(axis=1)
        if beyond.any():
            raise beyond_orbitals(spin, int(np.argmax(beyond)), available, name).error()
        disorder = ~precedes(strings[:-1], strings[1:])
        if disorder.any():
            k = int(np.argmax(disorder))
            raise wrong_order(spin, k + 1, bool(np.array_equal(strings[k], strings[k + 1]))).error()
    _check_matrix(expansion)


def _check_matrix(expansion: Expansion) -> None:
    offsets, columns = np.asarray(expansion.row_start, dtype=np.int64), np.asarray(expansion.columns)
    n_up, n_down = len(expansion.up_strings), len(expansion.down_strings)
    if len(offsets) != n_up + 1 or offsets[0] != 0 or offsets[-1] != len(columns) or (np.diff(offsets) < 0).any():
        raise FormatError(
            f"{len(offsets)} offsets from {offsets[0] if len(offsets) else 'nothing'} to "
            f"{offsets[-1] if len(offsets) else 'nothing'}",
            where="/expansion/row_start",
            expected=f"{n_up + 1} offsets that do not fall, from 0 to {len(columns)}, the number of entries",
            remedy="row I owns the entries row_start[I] up to, not including, row_start[I+1]",
        )
    shape = np.shape(expansion.coefficients)
    if len(shape) != 2 or shape[1] != len(columns) or not shape[0]:
        raise FormatError(
            f"coefficients of shape {shape}",
            where="/expansion/coefficients",
            expected=f"(states, {len(columns)}), one for each entry",
            remedy="write a row for each state",
        )
    outside = (columns < 0) | (columns >= n_down)
    if outside.any():
        k = int(np.argmax(outside))
        raise wrong_column(k, n_down, int(columns[k]), None).error()
    begins = np.zeros(len(columns) + 1, dtype=bool)
    begins[offsets] = True
    disorder = (columns[1:] <= columns[:-1]) & ~begins[1:-1]
    if disorder.any():
        k = int(np.argmax(disorder))
        raise wrong_column(k + 1, n_down, int(columns[k + 1]), int(columns[k])).error()
