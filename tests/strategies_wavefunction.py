"""Hypothesis strategies for whole wave functions of random content: every member, every kind, any shapes that agree."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import strategies as st

from qwfx import model

__all__ = ["assert_same", "wavefunctions"]

NAMES = st.text("abcXYZ019_.+-", min_size=1, max_size=12).filter(lambda s: s not in (".", "..") and s[0].isalnum())
TEXTS = st.text(st.characters(blacklist_categories=("Cs", "Cc")), max_size=8)


def _numbers(rng: np.random.Generator, shape: tuple[int, ...], complex_values: bool = False) -> np.ndarray[Any, Any]:
    real = rng.normal(size=shape) * 10.0 ** rng.integers(-300, 300, size=shape)
    return real + 1j * rng.normal(size=shape) if complex_values else real


@st.composite
def wavefunctions(draw: st.DrawFn) -> model.Wavefunction:
    """A wave function that the format can hold; not one that makes sense."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    a, s, m = draw(st.integers(0, 4)), draw(st.integers(0, 4)), draw(st.integers(0, 5))
    yes = st.booleans()
    is_complex = draw(yes)

    def ints(n: int, kind: str = "i4") -> np.ndarray[Any, Any]:
        return rng.integers(0, 100, n).astype(kind)

    cell = model.Cell(rng.normal(size=(3, 3)), rng.normal(size=(2, 3))) if draw(yes) else None
    labels = tuple(draw(st.lists(TEXTS, min_size=a, max_size=a)))
    system = model.System(3, 2, labels, ints(a), rng.normal(size=a), rng.normal(size=(a, 3)), cell)
    lengths = rng.integers(1, 4, s)
    p = int(lengths.sum())
    basis = model.Basis(
        draw(st.sampled_from(["gaussian", "slater"])), ints(s), ints(s), ints(s, "i1"),
        np.concatenate([[0], np.cumsum(lengths)]).astype("i8"), rng.normal(size=p), rng.normal(size=p),
        ints(p) if draw(yes) else None,
    )  # fmt: skip
    orbitals = {
        name: model.OrbitalSet(
            draw(st.sampled_from(["both", "up", "down"])),
            _numbers(rng, (m, 7), is_complex),
            rng.normal(size=m) if draw(yes) else None,
            rng.normal(size=m) if draw(yes) else None,
            tuple(draw(st.lists(TEXTS, min_size=m, max_size=m))) if draw(yes) else None,
            ("a1",) * m if draw(yes) else None,
            ints(m) if draw(yes) else None,
        )
        for name in draw(st.sets(NAMES, max_size=2))
    }
    strings = rng.integers(0, 2**63, (3, 2)).astype("u8") | np.uint64(1 << 63)
    expansion = model.Expansion(
        "x", "y", strings, strings[:2], np.array([0, 1, 2, 3]), np.array([0, 1, 0]), _numbers(rng, (2, 3), is_complex),
        rng.random(2) if draw(yes) else None,
    )  # fmt: skip
    jastrow = {
        name: model.JastrowTerm("pade", {"body": "electron-electron", "n": 3}, {"a": rng.normal(size=2), "c": ints(3)})
        for name in draw(st.sets(NAMES, max_size=2))
    }
    n = 3
    keys = ("both",) if draw(yes) else ("up", "down")
    hamiltonian = model.Hamiltonian(
        n,
        -1.25,
        {key: _numbers(rng, (n, n), is_complex) for key in keys},
        {"both" if len(keys) == 1 else "up_down": model.TwoBody(_numbers(rng, (5,)), np.arange(5, dtype="u8") * 7)},
        is_complex,
        orbital_energies={key: rng.normal(size=n) for key in keys} if draw(yes) else {},
        orbital_symmetry=ints(n) if draw(yes) else None,
        state_symmetry=2 if draw(yes) else None,
    )
    witness = model.Witness(
        "pyscf", "2", draw(yes), rng.normal(size=(4, 3)),
        {name: model.WitnessOrbitals(rng.normal(size=(4, m)), rng.normal(size=(4, m, 3)), rng.normal(size=(4, m)))
         for name in orbitals},
        model.WitnessConfigurations(
            rng.normal(size=(2, 5, 3)), rng.normal(size=(2, 2)), rng.normal(size=(2, 2)),
            rng.normal(size=(2, 2, 5, 3)), rng.normal(size=(2, 2)),
        ) if draw(yes) else None,
    )  # fmt: skip
    node = model.Node(
        {"word": draw(TEXTS), "number": 3, "list": [1, 2]},
        {"x": rng.normal(size=(2, 2)), "text": np.array(["a", "bc"]), "deep": model.Node({}, {"y": ints(2)})},
    )
    table = model.Energies(ints(2), ("RHF", "é"), rng.normal(size=2), rng.random(2), ("total", "total"))
    densities = model.Densities({"both": rng.normal(size=(1, 2, 2))}, {"up_down": rng.normal(size=(1, 2, 2, 2, 2))})
    steps = ({"activity": "test", "agent": "ü", "notes": ["n"]},)
    return model.Wavefunction(
        system,
        model.Potentials(ints(3), ints(3), ints(3), rng.normal(size=3), rng.normal(size=3)) if draw(yes) else None,
        basis if draw(yes) else None,
        orbitals,
        expansion if draw(yes) else None,
        jastrow,
        hamiltonian if draw(yes) else None,
        densities if draw(yes) else None,
        table if draw(yes) else None,
        witness if draw(yes) else None,
        model.Provenance(steps) if draw(yes) else model.Provenance(),
        {"someone": node} if draw(yes) else {},
    )


def assert_same(one: Any, two: Any, where: str = "") -> None:
    """Every field of two models is the same to the bit."""
    if isinstance(one, np.ndarray) or hasattr(one, "__array__"):
        a, b = np.asarray(one), np.asarray(two)
        assert a.shape == b.shape, where
        assert a.dtype.kind == b.dtype.kind, where
        assert a.tobytes() == b.astype(a.dtype).tobytes(), where
    elif hasattr(one, "__dataclass_fields__"):
        assert type(one) is type(two), where
        for name in one.__dataclass_fields__:
            assert_same(getattr(one, name), getattr(two, name), f"{where}.{name}")
    elif hasattr(one, "items"):
        assert dict(one).keys() == dict(two).keys(), where
        for key in one:
            assert_same(one[key], two[key], f"{where}[{key}]")
    else:
        assert one == two, where
