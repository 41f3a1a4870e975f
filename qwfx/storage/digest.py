"""SHA-256 of every dataset in blocks, of the attributes of every group, and of the content as a whole (FORMAT.md)."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterable, Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import FormatError
from qwfx.storage.members import DIGESTED
from qwfx.storage.raw import RawFile, open_raw

__all__ = [
    "BLOCK_BYTES", "Digest", "DigestCheck", "DigestMismatch", "Digester", "attributes_digest", "check_digests",
    "combine", "parts_in_order",
]  # fmt: skip

BLOCK_BYTES = 1 << 20
MIN_BLOCK, MAX_BLOCK = 1 << 12, 1 << 26
"""Blocks outside of this would make a table longer than the data, or fill the memory."""
READ_BYTES = 1 << 24
"""Data are read in pieces of about this size, so that a file of any size is digested in bounded memory."""
THREADS = 4

Progress = Callable[[str, float], None]


@dataclass(frozen=True)
class Digest:
    """The digest of one item."""

    path: str
    digest: bytes
    blocks: tuple[bytes, ...]


def parts_in_order(shape: tuple[int, ...], itemsize: int) -> Iterator[tuple[slice, ...]]:
    """Parts of about `READ_BYTES` that make up an array of this shape in C order, one after another."""
    if not shape:
        yield ()
        return
    if 0 in shape:
        return  # the other extents may be astronomical
    row = itemsize * int(np.prod(shape[1:], dtype=np.int64))
    if row > READ_BYTES and len(shape) > 1:
        for k in range(shape[0]):
            for part in parts_in_order(shape[1:], itemsize):
                yield (slice(k, k + 1), *part)
        return
    step = max(READ_BYTES // max(row, 1), 1)
    for start in range(0, shape[0], step):
        yield (slice(start, min(start + step, shape[0])), *(slice(0, n) for n in shape[1:]))


def canonical(array: NDArray[Any], width: int | None = None) -> NDArray[Any]:
    """Little-endian, C order; text padded with NUL to `width` bytes."""
    if array.dtype.kind == "S":
        return np.ascontiguousarray(array, dtype=f"S{width or max(array.dtype.itemsize, 1)}")
    return np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<"))


def spelling(dtype: np.dtype[Any], width: int | None = None) -> str:
    """NumPy's spelling of the canonical type: ``<f8``, ``|i1``, ``|S4``."""
    return f"|S{width}" if dtype.kind == "S" else dtype.newbyteorder("<").str


class Digester:
    """Digest of one item from its bytes in order; blocks are hashed in threads."""

    def __init__(self, path: str, dtype: str, shape: tuple[int, ...], pool: ThreadPoolExecutor, block: int) -> None:
        self._path = path
        self._header = f"{path}\n{dtype}\n{','.join(map(str, shape))}\n".encode()
        self._pool, self._block = pool, block
        self._rest = b""
        self._pending: list[Future[bytes] | bytes] = []

    def feed(self, piece: NDArray[Any]) -> None:
        """Take the next piece, already canonical."""
        data = memoryview(piece.data).cast("B") if piece.size else memoryview(b"")
        if self._rest:
            need = self._block - len(self._rest)
            self._rest += bytes(data[:need])
            data = data[need:]
            if len(self._rest) < self._block:
                return
            self._submit(self._rest)
            self._rest = b""
        for start in range(0, len(data) - self._block + 1, self._block):
            self._submit(data[start : start + self._block])
        self._rest = bytes(data[len(data) - len(data) % self._block :])
        for number, job in enumerate(self._pending):  # done jobs let go of their piece of memory
            if isinstance(job, Future):
                self._pending[number] = job.result()

    def _submit(self, block: bytes | memoryview) -> None:
        self._pending.append(self._pool.submit(lambda: hashlib.sha256(block).digest()))

    def finish(self) -> Digest:
        """The digest, once all bytes were fed."""
        blocks = [job.result() if isinstance(job, Future) else job for job in self._pending]
        if self._rest or not blocks:
            blocks.append(hashlib.sha256(self._rest).digest())
        whole = hashlib.sha256(self._header)
        for block in blocks:
            whole.update(block)
        return Digest(self._path, whole.digest(), tuple(blocks))


def attributes_digest(group: str, attributes: Mapping[str, Any], block: int = BLOCK_BYTES) -> Digest:
    """The digest of the attributes of a group: of their canonical JSON."""
    text = json.dumps(dict(attributes), sort_keys=True, separators=(",", ":"), ensure_ascii=False).encode()
    blocks = tuple(
        hashlib.sha256(text[start : start + block]).digest() for start in range(0, max(len(text), 1), block)
    )
    header = f"{group}@\njson\n\n".encode()
    return Digest(f"{group}@", hashlib.sha256(header + b"".join(blocks)).digest(), blocks)


def combine(items: Iterable[Digest]) -> str:
    """The content digest: SHA-256 over ``path digest`` lines of the groups that are the wave function, sorted."""
    whole = hashlib.sha256()
    for item in sorted(items, key=lambda d: d.path):
        if item.path.lstrip("/").rstrip("@").split("/")[0] in DIGESTED:
            whole.update(f"{item.path} {item.digest.hex()}\n".encode())
    return whole.hexdigest()


@dataclass(frozen=True)
class DigestMismatch:
    """One item that is not what it was when its digest was written."""

    path: str
    block: int
    """First block that differs, from 0; -1 where no single block is to blame."""
    offset: int
    """Byte of the item at which that block begins."""
    reason: str
    blocks: int = 1
    """How many blocks differ."""


@dataclass(frozen=True)
class DigestCheck:
    """What checking the digests of a file found."""

    mismatches: tuple[DigestMismatch, ...]
    checked: int
    """Items whose digest was computed again."""
    bytes: int
    content_digest_stored: str
    content_digest_computed: str
    missing: tuple[str, ...] = field(default=())
    """Items that have a digest and are no longer there."""
    extra: tuple[str, ...] = field(default=())
    """Items that are there and have no digest."""

    @property
    def sound(self) -> bool:
        """Whether every item is as it was written."""
        return not (self.mismatches or self.missing or self.extra) and (
            self.content_digest_stored == self.content_digest_computed
        )


def digests_of(
    file: RawFile, block: int = BLOCK_BYTES, progress: Progress | None = None
) -> Iterator[tuple[Digest, int]]:
    """The digest of every item of a file and its size in bytes, in the order of the paths."""
    groups = [g for g in file.groups() if g != "/" and not _left_out(g) and file.attributes(g)]
    for group in groups:
        yield attributes_digest(group, file.attributes(group), block), 0
    names = [name for name in file.datasets() if not _left_out(name)]
    with ThreadPoolExecutor(THREADS) as pool:
        for number, name in enumerate(names):
            if progress:
                progress("digests", number / len(names))
            yield _dataset_digest(file, name, block, pool)
    if progress:
        progress("digests", 1.0)


def _left_out(path: str) -> bool:
    return path == "/digests" or path.startswith("/digests/")


def _dataset_digest(file: RawFile, name: str, block: int, pool: ThreadPoolExecutor) -> tuple[Digest, int]:
    shape = file.shape(name)
    parts = list(parts_in_order(shape, file.itemsize(name)))
    width = None
    if file.is_text(name):
        longest = (int(np.char.str_len(file.read_stored(name, part)).max(initial=0)) for part in parts)
        width = max(max(longest, default=0), 1)
    digester = Digester(name, spelling(file.dtype(name), width), shape, pool, block)
    size = 0
    for part in parts:
        data = canonical(file.read_stored(name, part), width)
        size += data.nbytes
        digester.feed(data)
    return digester.finish(), size


def check_digests(path: str | Path, progress: Progress | None = None) -> DigestCheck:
    """Compute every digest of a file again and compare. Reads the whole file once, in bounded memory.

    A file without ``/digests``, or with one whose tables do not agree with each other, gives only `extra` items.

    Raises FileError, UnsafeFileError, or FormatError if the blocks are of a size that cannot be worked with.
    """
    with open_raw(path) as file:
        stored = _stored(file)
        block = file.attributes("/digests").get("block_bytes", BLOCK_BYTES)
        if not isinstance(block, int) or not MIN_BLOCK <= block <= MAX_BLOCK:
            raise FormatError(
                f"is {block!r}",
                where=f"{path}:/digests@block_bytes",
                expected=f"{BLOCK_BYTES}",
                remedy="save the file anew",
            )
        computed: dict[str, Digest] = {}
        mismatches = []
        total = 0
        for item, size in digests_of(file, block, progress):
            computed[item.path] = item
            total += size
            told = stored.get(item.path)
            if told is not None and told != item:
                mismatches.append(_mismatch(told, item, block))
        content = str(file.attributes("/").get("content_digest", ""))
    return DigestCheck(
        tuple(mismatches),
        len(computed),
        total,
        content,
        combine(computed.values()),
        tuple(sorted(stored.keys() - computed.keys())),
        tuple(sorted(computed.keys() - stored.keys())),
    )


def _stored(file: RawFile) -> dict[str, Digest]:
    """What ``/digests`` says; tables that do not agree with each other say nothing."""
    kinds = {"path": "S", "digest": "u", "block_start": "iu", "block_digest": "u"}
    members = {f"/digests/{name}": kind for name, kind in kinds.items()}
    if not all(m in file.datasets() and file.dtype(m).kind in kind for m, kind in members.items()):
        return {}
    paths, digest, start, blocks = (file.read(member) for member in members)
    n = paths.size
    if paths.shape != (n,) or digest.shape != (n, 32) or start.shape != (n + 1,) or blocks.shape[1:] != (32,):
        return {}
    start = start.astype(object)  # exact for any width, signed or not
    if start[0] != 0 or start[-1] != len(blocks) or (start[1:] < start[:-1]).any():
        return {}
    return {
        str(p): Digest(str(p), digest[k].tobytes(), tuple(b.tobytes() for b in blocks[start[k] : start[k + 1]]))
        for k, p in enumerate(paths)
    }


def _mismatch(told: Digest, found: Digest, block: int) -> DigestMismatch:
    if len(told.blocks) != len(found.blocks):
        reason = f"{len(told.blocks)} blocks were written, {len(found.blocks)} are there"
        return DigestMismatch(found.path, -1, 0, reason, abs(len(told.blocks) - len(found.blocks)))
    different = [k for k, (a, b) in enumerate(zip(told.blocks, found.blocks, strict=True)) if a != b]
    if not different:
        return DigestMismatch(found.path, -1, 0, "the type or shape changed, or the digest itself is damaged")
    if told.digest == found.digest:
        return DigestMismatch(found.path, -1, 0, f"{len(different)} damaged block digests, intact data")
    reason = f"{len(different)} of {len(found.blocks)} blocks differ"
    return DigestMismatch(found.path, different[0], different[0] * block, reason, len(different))
