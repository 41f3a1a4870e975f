"""From a model to an FCIDUMP file."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import IO, Any

import numpy as np
from numpy.typing import NDArray

from qwfx.atomic import replacing
from qwfx.converters.fcidump.lines import format_records
from qwfx.converters.plugin import Progress, Writing
from qwfx.errors import ConversionError, UnsupportedError
from qwfx.kernels.packing import indices
from qwfx.model import Hamiltonian, TwoBody, Wavefunction

__all__ = ["write"]

BATCH = 1 << 16
DEFAULT_THRESHOLD = 1e-15
"""hartree; below this an integral is rounding noise (common practice)."""


def _threshold(options: Mapping[str, str]) -> float:
    text = options.get("threshold", repr(DEFAULT_THRESHOLD))
    try:
        value = float(text)
        if not value >= 0 or value == float("inf"):
            raise ValueError
    except ValueError:
        raise ConversionError(
            f"the threshold is {text!r}",
            where="--set threshold",
            expected="a number from 0, in hartree",
            remedy="give such a number",
        ) from None
    return value


class _Writer:
    def __init__(self, stream: IO[bytes], hamiltonian: Hamiltonian, threshold: float) -> None:
        self.stream, self.h, self.threshold = stream, hamiltonian, threshold
        self.dtype = np.complex128 if hamiltonian.complex_orbitals else np.float64
        self.n_dropped, self.largest_dropped = 0, 0.0

    def lines(self, index: NDArray[np.int64], value: NDArray[Any], always: NDArray[np.bool_] | None = None) -> None:
        """Records of one batch; `index` from 1. Those marked by `always` are written whatever their value."""
        size = np.abs(value)
        if not np.isfinite(size).all():
            bad = int(np.argmax(~np.isfinite(size)))
            raise ConversionError(
                f"the integral {' '.join(map(str, index[bad]))} is {value[bad]}",
                where="Hamiltonian",
                expected="finite numbers",
                remedy="mend the source of the integrals; nothing was written",
            )
        keep = size > self.threshold
        if always is not None:
            keep |= always
        if not keep.all():
            dropped = size[~keep]
            dropped = dropped[dropped > 0]
            self.n_dropped += len(dropped)
            self.largest_dropped = max(self.largest_dropped, float(dropped.max(initial=0.0)))
            index, value = index[keep], value[keep]
        if not len(value):
            return
        if index.shape[1] < 4:
            index = np.pad(index, ((0, 0), (0, 4 - index.shape[1])))
        self.stream.write(format_records(index, value.astype(self.dtype, copy=False)))

    def record(self, value: float, index: int = 0) -> None:
        """An energy: of an orbital, of the core, or the zero that closes a block."""
        if not np.isfinite(value):
            raise ConversionError(
                f"an energy is {value}", where="Hamiltonian", expected="finite numbers", remedy="mend the source"
            )
        self.stream.write(format_records(np.array([[index, 0, 0, 0]]), np.array([value], dtype=self.dtype)))

    def two_body(self, key: str, table: TwoBody, relabel: Callable[[NDArray[np.int64]], NDArray[np.int64]]) -> None:
        """All integrals of one pair of spins, in the order of the packed vector."""
        like = key != "up_down"
        packing = "pairs" if self.h.complex_orbitals else "eightfold" if like else "fourfold"
        total = int(table.values.shape[0])
        for start in range(0, total, BATCH):
            stop = min(start + BATCH, total)
            value = np.asarray(table.values[start:stop])
            place = np.arange(start, stop) if table.index is None else np.asarray(table.index[start:stop])
            index = indices(packing, self.h.n_orbitals, place, like)
            if packing == "pairs":  # (qp|sr) is the conjugate of (pq|rs): one of the two is enough
                p, q, r, s = index.T
                first, second = p * self.h.n_orbitals + q, r * self.h.n_orbitals + s
                other, another = q * self.h.n_orbitals + p, s * self.h.n_orbitals + r
                if like:
                    other, another = np.maximum(other, another), np.minimum(other, another)
                one = (first > other) | ((first == other) & (second >= another))
                index, value = index[one], value[one]
            self.lines(relabel(index), value)

    def one_body(self, matrix: Any, relabel: Callable[[NDArray[np.int64]], NDArray[np.int64]]) -> None:
        p, q = np.tril_indices(self.h.n_orbitals)
        index = np.stack([p, q], axis=1)
        # The diagonal tells a reader how many orbitals there are, and that the file is whole.
        self.lines(relabel(index), np.asarray(matrix)[p, q], always=p == q)

    def energies(self, energies: Any, relabel: Callable[[NDArray[np.int64]], NDArray[np.int64]]) -> None:
        index = relabel(np.arange(self.h.n_orbitals)[:, None])[:, 0]
        for i, e in zip(index.tolist(), np.asarray(energies).tolist(), strict=True):
            self.record(e, i)


def _header(wavefunction: Wavefunction, interleaved: bool) -> Iterator[str]:
    h = wavefunction.hamiltonian
    assert h is not None
    times = 2 if interleaved else 1
    n_up, n_down = wavefunction.system.n_up, wavefunction.system.n_down
    yield f" &FCI NORB={h.n_orbitals * times},NELEC={n_up + n_down},MS2={n_up - n_down},\n"
    symmetry = np.zeros(h.n_orbitals, dtype=int) if h.orbital_symmetry is None else np.asarray(h.orbital_symmetry)
    numbers = [str(int(s) + 1) for s in np.repeat(symmetry, times)]
    for start in range(0, len(numbers), 30):
        yield ("  ORBSYM=" if start == 0 else "    ") + ",".join(numbers[start : start + 30]) + ",\n"
    yield f"  ISYM={(h.state_symmetry or 0) + 1},\n"
    if h.spin_resolved:
        yield "  UHF=.TRUE.,\n"
    yield " &END\n"


def _spatial(index: NDArray[np.int64]) -> NDArray[np.int64]:
    return index + 1


def _spin(spins: tuple[int, ...]) -> Callable[[NDArray[np.int64]], NDArray[np.int64]]:
    """Interleaved numbers from 1 of orbitals whose columns have these spins (0 up, 1 down)."""
    return lambda index: 2 * index + 1 + np.array(spins[: index.shape[1]])


def _records(writer: _Writer, h: Hamiltonian, layout: str) -> None:
    if not h.spin_resolved:
        writer.two_body("both", h.two_body["both"], _spatial)
        writer.one_body(h.one_body["both"], _spatial)
        if "both" in h.orbital_energies:
            writer.energies(h.orbital_energies["both"], _spatial)
        writer.record(h.core_energy)
        return
    pairs = {"up_up": (0, 0, 0, 0), "down_down": (1, 1, 1, 1), "up_down": (0, 0, 1, 1)}
    spins = {"up": (0,) * 4, "down": (1,) * 4}
    blocks = layout == "blocks"
    for pair, columns in pairs.items():
        writer.two_body(pair, h.two_body[pair], _spatial if blocks else _spin(columns))
        if blocks:
            writer.record(0.0)
    for spin, columns in spins.items():
        writer.one_body(h.one_body[spin], _spatial if blocks else _spin(columns))
        if blocks:
            if spin in h.orbital_energies:
                writer.energies(h.orbital_energies[spin], _spatial)
            writer.record(0.0)
    if not blocks:
        for spin, columns in spins.items():
            if spin in h.orbital_energies:
                writer.energies(h.orbital_energies[spin], _spin(columns))
    writer.record(h.core_energy)


def write(
    wavefunction: Wavefunction, path: Path, options: Mapping[str, str], progress: Progress | None = None
) -> Writing:
    """Write the Hamiltonian to `path`, whole or not at all. Raises UnsupportedError if there is none."""
    h = wavefunction.hamiltonian
    if h is None:
        raise UnsupportedError(
            "the wave function has no Hamiltonian",
            where=str(path),
            expected="second-quantised integrals",
            remedy="add them when converting from PySCF: --set hamiltonian=yes",
        )
    layout = options.get("spin-layout", "interleaved")
    threshold = _threshold(options)
    with replacing(path) as part, open(part, "wb") as stream:
        if progress:
            progress("writing integrals", 0.0)
        stream.write("".join(_header(wavefunction, h.spin_resolved and layout == "interleaved")).encode())
        writer = _Writer(stream, h, threshold)
        _records(writer, h, layout)
    notes = []
    if h.orbital_symmetry is None:
        notes.append("no irreps are known: ORBSYM and ISYM are written as 1, which is no symmetry")
    elif h.state_symmetry is None:
        notes.append("the irrep of the state is not known: ISYM is written as 1, the totally symmetric one")
    if writer.n_dropped:
        notes.append(
            f"{writer.n_dropped} integrals of at most {writer.largest_dropped:.1e} hartree left out "
            f"(threshold {threshold:g}; --set threshold=0 writes them)"
        )
    parts = {
        "orbitals and basis": wavefunction.orbitals, "expansion": wavefunction.expansion,
        "Jastrow factor": wavefunction.jastrow, "energies": wavefunction.energies,
        "nuclei": wavefunction.system.n_atoms, "witness": wavefunction.witness,
    }  # fmt: skip
    left_out = [word for word, there in parts.items() if there]
    if left_out:
        notes.append("not carried by FCIDUMP: " + ", ".join(left_out))
    return Writing(tuple(notes))
