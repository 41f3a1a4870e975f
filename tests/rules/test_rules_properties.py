"""Streaming checks against the obvious ones, on random data."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qwfx.reference.packing import packed_length, split_triangle
from qwfx.rules import consistency_expansion as expansion
from qwfx.rules.algebra_hamiltonian import _pairs, coulomb_bounds
from qwfx.rules.inspection import Inspection
from qwfx.rules.registry import Problem

WORDS = st.integers(0, 2**64 - 1)


class Arrays:
    """Raw arrays by path, and attributes of groups."""

    path = Path("memory.qwfx")
    outline: Any = None

    def __init__(self, arrays: dict[str, np.ndarray], attributes: dict[str, Any] | None = None) -> None:
        self.arrays, self._attributes = arrays, attributes or {}

    def has(self, member: str) -> bool:
        return any(path == member or path.startswith(member + "/") for path in self.arrays)

    def members(self, group: str) -> list[str]:
        start = group.rstrip("/") + "/"
        return sorted({p[len(start) :].split("/")[0] for p in self.arrays if p.startswith(start)})

    def attributes(self, group: str) -> dict[str, Any]:
        return self._attributes

    def shape(self, member: str) -> tuple[int, ...]:
        return self.arrays[member].shape

    def read(self, member: str, start: int | None = None, stop: int | None = None, axis: int = 0) -> np.ndarray:
        return self.arrays[member][(slice(None),) * axis + (slice(start, stop),)]


def problems(check: Any, raw: Arrays) -> list[Problem]:
    return [remark for remark in check(Inspection(raw)) if isinstance(remark, Problem)]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(WORDS, WORDS), min_size=2, max_size=12), st.booleans())
def test_string_order_is_that_of_integers(rows: list[tuple[int, int]], ascending: bool) -> None:
    numbers = [low + (high << 64) for low, high in rows]
    if ascending:
        numbers = sorted(set(numbers))
    strings = np.array([(n & (2**64 - 1), n >> 64) for n in numbers], dtype=np.uint64)
    raw = Arrays({"/expansion/up_strings": strings, "/expansion/down_strings": strings[:1]})
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("qwfx.rules.inspection.BLOCK_BYTES", 96)
        found = problems(expansion.string_order, raw)
    wrong = [k for k in range(1, len(numbers)) if numbers[k] <= numbers[k - 1]]
    assert [(p.where, p.count) for p in found] == (
        [(f"/expansion/up_strings[{wrong[0]}]", len(wrong))] if wrong else []
    )


@settings(max_examples=80, deadline=None)
@given(st.lists(st.lists(st.integers(-1, 6), max_size=7), min_size=1, max_size=9), st.integers(1, 5))
def test_column_order_and_unused_strings_against_loops(rows: list[list[int]], at_a_time: int) -> None:
    start = np.cumsum([0, *map(len, rows)])
    raw = Arrays(
        {
            "/expansion/row_start": start,
            "/expansion/columns": np.array([c for row in rows for c in row], dtype=np.int64),
            "/expansion/up_strings": np.zeros((len(rows), 1), dtype=np.uint64),
            "/expansion/down_strings": np.zeros((6, 1), dtype=np.uint64),
        }
    )
    outside = [e for e, c in enumerate(raw.arrays["/expansion/columns"]) if not 0 <= c < 6]
    falls = [int(start[r]) + k for r, row in enumerate(rows) for k in range(1, len(row)) if row[k] <= row[k - 1]]
    expected = [(f"/expansion/columns[{bad[0]}]", len(bad)) for bad in (outside, falls) if bad]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(expansion, "ROWS_AT_A_TIME", at_a_time)
        assert [(p.where, p.count) for p in problems(expansion.column_order, raw)] == expected
        if not outside:
            idle_up = [r for r, row in enumerate(rows) if not row]
            idle_down = sorted(set(range(6)) - {c for row in rows for c in row})
            expected = [
                (f"/expansion/{spin}_strings[{idle[0]}]", len(idle))
                for spin, idle in (("up", idle_up), ("down", idle_down))
                if idle
            ]
            assert [(p.where, p.count) for p in problems(expansion.unused_strings, raw)] == expected


@settings(max_examples=200, deadline=None)
@given(st.integers(0, 2**31), st.integers(-2, 2))
def test_row_of_a_packed_triangle_is_exact_beyond_the_digits_of_a_square_root(row: int, off: int) -> None:
    position = max(row * (row + 1) // 2 + off, 0)
    k = int(split_triangle(np.array([position], dtype=np.int64))[0][0])
    assert k * (k + 1) // 2 <= position < (k + 1) * (k + 2) // 2


@pytest.mark.parametrize("n", [1, 2, 3, 5])
def test_positions_and_pairs_are_inverse(n: int) -> None:
    for like_packing, packing in (("eightfold", "fourfold"), ("pairs", "pairs")):
        n_pairs = n * n if packing == "pairs" else n * (n + 1) // 2
        like = [(a, b) for a in range(n_pairs) for b in range(a + 1)]
        bra, ket = _pairs(np.arange(packed_length(like_packing, n)), n_pairs, True)
        assert list(zip(bra.tolist(), ket.tolist(), strict=True)) == like
        unlike = [(a, b) for a in range(n_pairs) for b in range(n_pairs)]
        bra, ket = _pairs(np.arange(packed_length(packing, n, False)), n_pairs, False)
        assert list(zip(bra.tolist(), ket.tolist(), strict=True)) == unlike


def _real_integrals(rng: np.random.Generator, n: int) -> np.ndarray:
    """(pq|rs) of a positive kernel: a sum of squares of pair densities."""
    densities = rng.normal(size=(7, n, n))
    densities = densities + densities.transpose(0, 2, 1)
    return np.einsum("kpq,krs->pqrs", densities, densities)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 4), st.floats(0.0, 2.0))
def test_any_positive_kernel_keeps_the_bounds_and_physicists_order_does_not(seed: int, n: int, cut: float) -> None:
    rng = np.random.default_rng(seed)
    eri = _real_integrals(rng, n)
    pairs = [(p, q) for p in range(n) for q in range(p + 1)]
    packed = np.array([eri[a + b] for k, a in enumerate(pairs) for b in pairs[: k + 1]])
    attributes = {"n_orbitals": n, "packing": "real"}
    base = "/hamiltonian/two_body/both"
    assert problems(coulomb_bounds, Arrays({f"{base}/values": packed}, attributes)) == []
    # A list that is cut at a threshold is still one of a positive kernel.
    kept = np.flatnonzero(np.abs(packed) > cut)
    if len(kept):
        arrays = {f"{base}/values": packed[kept], f"{base}/index": kept.astype(np.uint64)}
        assert problems(coulomb_bounds, Arrays(arrays, attributes)) == []
    if n > 1:
        wrong = eri.transpose(0, 2, 1, 3)
        mixed = np.array([wrong[a + b] for k, a in enumerate(pairs) for b in pairs[: k + 1]])
        bound = np.sqrt(np.abs(np.array([wrong[a + a] for a in pairs])))
        excess = max(
            abs(wrong[a + b]) - bound[i] * bound[j] for i, a in enumerate(pairs) for j, b in enumerate(pairs[: i + 1])
        )
        if excess > 1e-3 or min(wrong[a + a] for a in pairs) < -1e-3:
            assert problems(coulomb_bounds, Arrays({f"{base}/values": mixed}, attributes))


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 3))
def test_complex_orbitals_keep_the_bounds_too(seed: int, n: int) -> None:
    rng = np.random.default_rng(seed)
    eri = _real_integrals(rng, n)
    U = np.linalg.qr(rng.normal(size=(n, n)) + 1j * rng.normal(size=(n, n)))[0]
    eri = np.einsum("ip,jq,ijkl,kr,ls->pqrs", U.conj(), U, eri, U.conj(), U, optimize=True)
    pairs = [(p, q) for p in range(n) for q in range(n)]
    packed = np.array([eri[a + b] for k, a in enumerate(pairs) for b in pairs[: k + 1]])
    raw = Arrays({"/hamiltonian/two_body/both/values": packed}, {"n_orbitals": n, "packing": "complex"})
    assert problems(coulomb_bounds, raw) == []
