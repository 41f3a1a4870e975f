"""From a model to a file, atomically: the old file or the new one, never something in between."""

from __future__ import annotations

import json
import zlib
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from qwfx import model
from qwfx.atomic import replacing
from qwfx.errors import FileError, FormatError
from qwfx.storage.convert import target_dtype
from qwfx.storage.digest import (
    BLOCK_BYTES,
    THREADS,
    Digest,
    Digester,
    attributes_digest,
    canonical,
    combine,
    parts_in_order,
    spelling,
)
from qwfx.storage.members import GROUPS, Kind

__all__ = ["PART_SUFFIX", "content_digest", "save"]

PART_SUFFIX = ".qwfx-part"
"""Ending of the temporary files; one that a killed process left behind may be deleted."""
COMPRESS_ABOVE = 1 << 16
CHUNK_BYTES = 1 << 20
WORTH_WHILE = 0.85
"""A member is deflated only if a sample of it shrinks to less than this: random mantissas do not."""

Progress = Callable[[str, float], None]


class _Sink:
    """Where members go: into an HDF5 file and into their digests, or into the digests only."""

    def __init__(self, file: h5py.File | None, where: str, progress: Progress | None = None) -> None:
        self.file, self.where, self.progress = file, where, progress
        self.digests: list[Digest] = []
        self.pool = ThreadPoolExecutor(THREADS)

    def bad(self, member: str, found: str, expected: str) -> FormatError:
        return FormatError(
            found, where=f"{self.where}:{member}", expected=expected, remedy="correct the wave function and save again"
        )

    def group(self, path: str, attributes: Mapping[str, Any] | None = None) -> None:
        """Make a group with attributes."""
        plain = {name: self.attribute(f"{path}@{name}", value) for name, value in sorted((attributes or {}).items())}
        if plain:
            self.digests.append(attributes_digest(path, plain))
        if self.file is None:
            return
        group = self.file.require_group(path)
        for name, value in plain.items():
            put_attribute(group, name, value)

    def attribute(self, where: str, value: Any) -> Any:
        """An attribute as a plain Python value."""
        if isinstance(value, np.ndarray | np.generic):
            value = value.tolist()
        if isinstance(value, bool):
            return int(value)
        if isinstance(value, tuple | list) and all(isinstance(v, int | float | str) for v in value):
            if any(isinstance(v, str) for v in value):
                return [str(v) for v in value]
            return [float(v) for v in value] if any(isinstance(v, float) for v in value) else [int(v) for v in value]
        if not isinstance(value, int | float | str):
            raise self.bad(where, f"is {type(value).__name__}", "a number, a text or a list of them")
        return value

    def text(self, path: str, value: Any) -> None:
        """Text or an array of texts, fixed length, UTF-8."""
        array = np.asarray(value)
        encoded = [str(item).encode() for item in array.reshape(-1).tolist()]
        if any(b"\0" in item for item in encoded):
            raise self.bad(path, "a text contains a NUL character", "text without it")
        width = max((len(item) for item in encoded), default=0) or 1
        self.array(path, np.array(encoded, dtype=f"S{width}").reshape(array.shape))

    def numbers(self, path: str, value: Any, kind: Kind) -> None:
        """Numbers of one of the format's kinds."""
        stored = getattr(value, "dtype", None)
        array = value if stored is not None else np.asarray(value)
        if array.dtype.kind in "iu" and kind in ("float64", "number"):
            array = np.asarray(array, dtype=np.float64)
        if array.dtype.kind in "b" and kind in ("int8", "int32", "int64"):
            array = np.asarray(array, dtype=np.int8)
        dtype = target_dtype(array.dtype, kind, f"{self.where}:{path}")
        self.array(path, array, dtype)

    def array(self, path: str, array: Any, dtype: np.dtype[Any] | None = None) -> None:
        """One dataset, in pieces of rows, each digested and written."""
        dtype = np.dtype(dtype if dtype is not None else array.dtype).newbyteorder("=")
        if dtype.kind not in "iufcS" or dtype.itemsize == 0:
            raise self.bad(path, f"holds {dtype}", "numbers or text")
        shape = tuple(int(n) for n in array.shape)
        width = dtype.itemsize if dtype.kind == "S" else None
        digester = Digester(path, spelling(dtype, width), shape, self.pool, BLOCK_BYTES)
        target = None
        total, done = max(int(np.prod(shape, dtype=np.int64)), 1), 0
        for part in parts_in_order(shape, dtype.itemsize):
            cast = self.cast(np.asarray(array[part] if shape else array), dtype, path)
            if self.file is not None:
                if target is None:
                    target = create(self.file, path, shape, dtype, cast)
                target[part] = cast
            digester.feed(canonical(cast, width))
            done += cast.size
            if self.progress:
                self.progress(f"writing {path}", done / total)
        if target is None and self.file is not None:
            create(self.file, path, shape, dtype, np.empty(shape, dtype))
        self.digests.append(digester.finish())

    def cast(self, piece: NDArray[Any], dtype: np.dtype[Any], path: str) -> NDArray[Any]:
        """A piece in its stored type; integers that do not fit are refused."""
        if piece.dtype.kind in "iu" and dtype.kind in "iu" and piece.size:
            limits = np.iinfo(dtype)
            worst = [v for v in (int(piece.min()), int(piece.max())) if not limits.min <= v <= limits.max]
            if worst:
                raise self.bad(path, f"holds {worst[0]}", f"numbers that fit {dtype.name}")
        return np.ascontiguousarray(piece, dtype=dtype).reshape(piece.shape)


def put_attribute(group: Any, name: str, value: Any) -> None:
    """An attribute in the format's types: fixed-length text, int64, float64."""
    if isinstance(value, str):
        data = value.encode()
        group.attrs.create(name, np.array(data, dtype=f"S{max(len(data), 1)}"))
    elif isinstance(value, list) and any(isinstance(v, str) for v in value):
        items = [str(v).encode() for v in value]
        group.attrs.create(name, np.array(items, dtype=f"S{max(map(len, items)) or 1}"))
    else:
        array = np.asarray(value)
        group.attrs.create(name, array.astype(np.int64 if array.dtype.kind in "iu" else np.float64))


def create(file: h5py.File, path: str, shape: tuple[int, ...], dtype: np.dtype[Any], sample: NDArray[Any]) -> Any:
    """A new dataset: contiguous, or chunked and deflated where the data are big and a sample of them shrinks."""
    stored = dtype.newbyteorder("<")
    size = dtype.itemsize * int(np.prod(shape, dtype=np.int64))
    if size <= COMPRESS_ABOVE or not shrinks(sample):
        return file.create_dataset(path, shape=shape, dtype=stored)
    chunk: list[int] = []
    room = CHUNK_BYTES // dtype.itemsize
    for extent in reversed(shape):  # the last axes whole, the first as far as there is room
        chunk.insert(0, min(extent, max(room, 1)))
        room //= chunk[0]
    return file.create_dataset(path, shape=shape, dtype=stored, chunks=tuple(chunk), shuffle=True, compression=1)


def shrinks(sample: NDArray[Any]) -> bool:
    """Whether shuffle and deflate make a sample smaller enough to be worth their time."""
    flat = np.ascontiguousarray(sample).reshape(-1)[: (1 << 18) // sample.dtype.itemsize or 1]
    shuffled = np.ascontiguousarray(flat.view(np.uint8).reshape(len(flat), -1).T)
    return len(zlib.compress(shuffled.tobytes(), 1)) < WORTH_WHILE * shuffled.nbytes


def _name(sink: _Sink, group: str, name: Any) -> str:
    if not isinstance(name, str) or not name or "/" in name or name == "." or any(ord(c) < 32 for c in name):
        raise sink.bad(group, f"the name {name!r} cannot be used", "a printable name without '/'")
    return f"{group}/{name}"


def _put(sink: _Sink, group: str, value: Any, pattern: str | None = None) -> None:
    """A dataclass that the table of members describes."""
    if value is None:
        return
    spec = GROUPS[pattern or group.lstrip("/")]
    attributes = {a.name: getattr(value, a.name) for a in spec.attributes}
    sink.group(group, {name: v for name, v in attributes.items() if v is not None})
    for member in spec.members:
        data = getattr(value, member.name)
        path = f"{group}/{member.name}"
        if data is None:
            if not member.optional:
                raise sink.bad(path, "is None", "an array")
        elif member.kind == "text":
            sink.text(path, data)
        else:
            sink.numbers(path, data, member.kind)


def _put_all(sink: _Sink, wavefunction: model.Wavefunction) -> None:
    w = wavefunction
    _put(sink, "/system", w.system)
    _put(sink, "/system/cell", w.system.cell)
    _put(sink, "/potentials", w.potentials)
    _put(sink, "/basis", w.basis)
    for name, orbitals in sorted(w.orbitals.items()):
        _put(sink, _name(sink, "/orbitals", name), orbitals, "orbitals/*")
    _put(sink, "/expansion", w.expansion)
    for name, term in sorted(w.jastrow.items()):
        path = _name(sink, "/jastrow", name)
        sink.group(path, {"form": term.form, **term.attributes})
        _put_free(sink, path, term.members)
    _put_hamiltonian(sink, w.hamiltonian)
    if w.densities is not None:
        sink.group("/densities")
        for kind in ("one_body", "two_body"):
            _put_keyed(sink, f"/densities/{kind}", getattr(w.densities, kind), "number")
    _put(sink, "/energies", w.energies)
    _put(sink, "/witness", w.witness)
    if w.witness is not None:
        for name, told in sorted(w.witness.orbitals.items()):
            _put(sink, _name(sink, "/witness/orbitals", name), told, "witness/orbitals/*")
        _put(sink, "/witness/configurations", w.witness.configurations)
    if w.provenance.steps:
        sink.group("/provenance")
        steps = json.dumps([dict(step) for step in w.provenance.steps], ensure_ascii=False, allow_nan=False)
        sink.text("/provenance/steps", steps)
    for owner, node in sorted(w.extensions.items()):
        _put_node(sink, _name(sink, "/extensions", owner), node)


def _put_keyed(sink: _Sink, group: str, arrays: Mapping[str, Any], kind: Kind) -> None:
    for key, array in sorted(arrays.items()):
        sink.numbers(_name(sink, group, key), array, kind)


def _put_hamiltonian(sink: _Sink, h: model.Hamiltonian | None) -> None:
    if h is None:
        return
    attributes = {
        "n_orbitals": h.n_orbitals, "packing": "complex" if h.complex_orbitals else "real", "up_set": h.up_set,
        "down_set": h.down_set, "state_symmetry": h.state_symmetry,
    }  # fmt: skip
    sink.group("/hamiltonian", {name: value for name, value in attributes.items() if value is not None})
    sink.numbers("/hamiltonian/core_energy", np.float64(h.core_energy), "float64")
    _put_keyed(sink, "/hamiltonian/one_body", h.one_body, "number")
    for pair, integrals in sorted(h.two_body.items()):
        _put(sink, _name(sink, "/hamiltonian/two_body", pair), integrals, "hamiltonian/two_body/*")
    _put_keyed(sink, "/hamiltonian/orbital_energies", h.orbital_energies, "float64")
    if h.orbital_symmetry is not None:
        sink.numbers("/hamiltonian/orbital_symmetry", h.orbital_symmetry, "int32")


def _put_free(sink: _Sink, group: str, members: Mapping[str, Any]) -> None:
    for name, value in sorted(members.items()):
        path = _name(sink, group, name)
        if isinstance(value, model.Node):
            _put_node(sink, path, value)
            continue
        array = np.asarray(value)
        if array.dtype.kind in "UO":
            sink.text(path, array)
        else:
            sink.array(path, array.astype(np.int8) if array.dtype.kind == "b" else array)


def _put_node(sink: _Sink, group: str, node: model.Node) -> None:
    sink.group(group, node.attributes)
    _put_free(sink, group, node.members)


def content_digest(wavefunction: model.Wavefunction) -> str:
    """The content digest that `save` would write: equal for equal wave functions, however they are stored."""
    sink = _Sink(None, "wave function")
    with sink.pool:
        _put_all(sink, wavefunction)
    return combine(sink.digests)


def _put_digests(file: h5py.File, items: Iterable[Digest]) -> None:
    rows = sorted(items, key=lambda d: d.path)
    group = file.create_group("digests")
    put_attribute(group, "block_bytes", BLOCK_BYTES)
    paths = [row.path.encode() for row in rows]
    group.create_dataset("path", data=np.array(paths, dtype=f"S{max(map(len, paths), default=1)}"))
    counts = np.cumsum([0] + [len(row.blocks) for row in rows], dtype="<i8")
    group.create_dataset("block_start", data=counts)
    for name, digests in (("digest", [r.digest for r in rows]), ("block_digest", [b for r in rows for b in r.blocks])):
        group.create_dataset(name, data=np.frombuffer(b"".join(digests), dtype=np.uint8).reshape(-1, 32))


def save(
    wavefunction: model.Wavefunction,
    path: str | Path,
    *,
    overwrite: bool = True,
    allow_loss: bool = False,
    progress: Progress | None = None,
) -> None:
    """Write a .qwfx file. Killed at any moment, it leaves the old file or the new one.

    Parameters
    ----------
    overwrite : False refuses to replace a file that exists.
    allow_loss : True drops members of a newer minor version that `load` did not understand (``unread``).

    Raises
    ------
    FileError : it cannot be written there.
    FormatError : the model holds what the format cannot, or something would be lost.
    """
    target = Path(path)
    if wavefunction.unread and not allow_loss:
        raise FormatError(
            f"saving would drop members that were not understood: {', '.join(wavefunction.unread)}",
            where=str(target),
            expected="a file of a version that this qwfx knows",
            remedy="use a newer qwfx, or drop them with allow_loss=True",
        )
    if target.exists() and not overwrite:
        raise FileError(
            "already exists", where=str(target), expected="a free name", remedy="choose another name, or overwrite it"
        )
    if target.is_dir():
        raise FileError("is a folder", where=str(target), expected="a file name", remedy="choose another name")
    with replacing(
        target, PART_SUFFIX, (OSError, RuntimeError), overwrite=overwrite  # h5py raises either on a full disk
    ) as part:
        _write_whole(wavefunction, part, str(target), progress)


def _write_whole(wavefunction: model.Wavefunction, part: Path, where: str, progress: Progress | None) -> None:
    # The oldest layout that has all we use, so that any HDF5 library since 1.8 can read the file.
    with h5py.File(part, "w", libver=("earliest", "v108"), locking=False) as file:
        sink = _Sink(file, where, progress)
        with sink.pool:
            _put_all(sink, wavefunction)
        put_attribute(file, "format", model.FORMAT_NAME)
        put_attribute(file, "version", model.FORMAT_VERSION)
        put_attribute(file, "content_digest", combine(sink.digests))
        _put_digests(file, sink.digests)
