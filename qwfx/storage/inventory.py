"""What is in an HDF5 file, found out without reading any data, and refused where it may hurt.

Every reader goes through `take_inventory` first. A file of the format is a plain tree: groups and datasets joined by
hard links, fixed-size integers, floats, ``{r, i}`` pairs and text, contiguous or chunked with shuffle and deflate.
Anything else can make a reader open other files, run foreign code, loop, or fill the memory, and is refused by name.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from h5py import h5a, h5d, h5g, h5l, h5o, h5s, h5t, h5z

from qwfx.errors import FileError, FormatError, QwfxError, UnsafeFileError

__all__ = ["Entry", "Inventory", "open_file", "take_inventory", "word_of"]

MAX_MEMBERS = 200_000
MAX_DEPTH = 32
MAX_NAME_BYTES = 1024
MAX_ATTRIBUTES = 256
MAX_ATTRIBUTE_BYTES = 65_536
MAX_TEXT_BYTES = 1 << 24
MAX_CHUNK_BYTES = 1 << 30
DEFLATE_RATIO = 1032
"""A byte of deflate yields at most 1032 bytes (zlib's technical notes: 258 bytes for two bits)."""
DAMAGE = (
    OSError, RuntimeError, ValueError, KeyError, TypeError, NotImplementedError, OverflowError, SystemError,
)  # fmt: skip
"""What h5py raises on damaged content, depending on where the damage lies."""
SIGNATURE = b"\x89HDF\r\n\x1a\n"
FILTERS = {h5z.FILTER_DEFLATE: "deflate", h5z.FILTER_SHUFFLE: "shuffle"}


@dataclass
class Entry:
    """One group or dataset."""

    kind: str
    attributes: dict[str, Any] = field(default_factory=dict)
    attribute_words: dict[str, dict[str, Any]] = field(default_factory=dict)
    shape: tuple[int, ...] = ()
    dtype: np.dtype[Any] | None = None
    """As stored, byte order included."""

    @property
    def size(self) -> int:
        """Bytes of the data in memory."""
        assert self.dtype is not None
        n = self.dtype.itemsize
        for extent in self.shape:
            n *= extent
        return n


Inventory = dict[str, Entry]
"""Absolute path -> entry, ``/`` included."""


def word_of(dtype: np.dtype[Any]) -> str:
    """The outline's word for a type: ``int32``, ``float64``, ``complex128``, ``string``."""
    return "string" if dtype.kind == "S" else np.dtype(dtype).newbyteorder("=").name


@contextmanager
def open_file(path: Path) -> Iterator[h5py.File]:
    """Open for reading; whatever HDF5 says is turned into an error of ours. Closes on leaving."""
    file = connect(path)
    try:
        with damage(path):
            yield file
    finally:
        file.close()


def connect(path: Path) -> h5py.File:
    """An open `h5py.File`. Raises FileError if there is none to be had."""
    try:
        with open(path, "rb") as stream:
            head = stream.read(8)
            n_bytes = stream.seek(0, 2)
    except OSError as error:
        raise FileError(
            f"cannot be opened ({error.strerror or error})",
            where=str(path),
            expected="a readable file",
            remedy="check the path and the permissions",
        ) from None
    if head != SIGNATURE:
        what = "is empty" if not n_bytes else "is not an HDF5 file"
        raise FileError(
            what, where=str(path), expected="a .qwfx file", remedy="convert it first: `qwfx convert SRC DST.qwfx`"
        )
    try:
        return h5py.File(path, "r", locking=False)
    except (OSError, RuntimeError, ValueError, KeyError) as error:
        raise FileError(
            f"is damaged: HDF5 cannot open it ({_first_line(error)})",
            where=str(path),
            expected=f"an intact file (it has {n_bytes} bytes)",
            remedy="copy it again from where it came from",
        ) from None


def _first_line(error: BaseException) -> str:
    return str(error).splitlines()[0][:200] if str(error) else type(error).__name__


@contextmanager
def damage(path: Path, member: str = "") -> Iterator[None]:
    """Turn what h5py raises on damaged content into a FileError."""
    try:
        yield
    except QwfxError:
        raise
    except DAMAGE as error:
        raise FileError(
            f"is damaged: HDF5 cannot read it ({_first_line(error)})",
            where=f"{path}{':' if member else ''}{member}",
            expected="intact data",
            remedy="copy the file again from where it came from",
        ) from error
    except MemoryError as error:
        raise FileError(
            "asks for more memory than there is",
            where=f"{path}{':' if member else ''}{member}",
            expected="data that fit",
            remedy="use a machine with more memory, or check that the file is intact",
        ) from error


class _Scan:
    def __init__(self, file: h5py.File, path: Path) -> None:
        self.file, self.path = file, path
        self.n_bytes = path.stat().st_size
        self.entries: Inventory = {}
        self.seen: dict[tuple[int, int], str] = {}
        self.stored = 0

    def refuse(self, member: str, found: str, expected: str) -> UnsafeFileError:
        return UnsafeFileError(
            found,
            where=f"{self.path}:{member}",
            expected=expected,
            remedy="do not use this file; write it again with qwfx",
        )

    def group(self, group: h5g.GroupID, name: str, depth: int) -> None:
        if depth > MAX_DEPTH:
            raise self.refuse(name, f"groups are nested more than {MAX_DEPTH} deep", "a shallow tree")
        entry = Entry("group")
        self.entries[name or "/"] = entry
        self.attributes(group, name or "/", entry)
        for raw in group:
            child = self.child_name(raw, name)
            if len(self.entries) >= MAX_MEMBERS:
                raise self.refuse(name or "/", f"there are more than {MAX_MEMBERS} members", "fewer members")
            kind = group.links.get_info(raw).type
            if kind != h5l.TYPE_HARD:
                word = {h5l.TYPE_SOFT: "a soft link", h5l.TYPE_EXTERNAL: "an external link to another file"}.get(
                    kind, "a link of an unknown kind"
                )
                raise self.refuse(child, f"is {word}", "a group or dataset in this file, by a hard link")
            self.once(group, raw, child)
            self.member(group, raw, child, depth)

    def child_name(self, raw: bytes, parent: str) -> str:
        try:
            text = raw.decode("utf-8")
        except UnicodeDecodeError:
            raise self.refuse(parent or "/", f"a name is not UTF-8: {raw[:40]!r}", "names in UTF-8") from None
        if len(raw) > MAX_NAME_BYTES or text in ("", ".") or any(ord(c) < 32 for c in text):
            raise self.refuse(parent or "/", f"the name {text[:40]!r} cannot be used", "a short, printable name")
        return f"{parent}/{text}"

    def once(self, group: h5g.GroupID, raw: bytes, child: str) -> None:
        info = h5o.get_info(group, raw)
        root = h5o.get_info(self.file.id)
        self.seen.setdefault((root.fileno, root.addr), "/")
        key = (info.fileno, info.addr)
        if key in self.seen:
            first = self.seen[key]
            what = "closes a cycle: it is" if child.startswith(first.rstrip("/") + "/") else "is the same object as"
            raise self.refuse(child, f"{what} {first} again", "each member linked once")
        self.seen[key] = child

    def member(self, group: h5g.GroupID, raw: bytes, child: str, depth: int) -> None:
        kind = h5o.get_info(group, raw).type
        if kind == h5o.TYPE_GROUP:
            self.group(h5g.open(group, raw), child, depth + 1)
        elif kind == h5o.TYPE_DATASET:
            self.dataset(h5d.open(group, raw), child)
        else:
            raise self.refuse(child, "is a named datatype", "a group or a dataset")

    def dtype(self, type_id: h5t.TypeID, member: str) -> np.dtype[Any]:
        """The NumPy type of a stored type that the format allows; others are refused."""
        allowed = "fixed-size integers, floats, {r, i} pairs of floats, or fixed-length text"
        kind = type_id.get_class()
        if kind == h5t.STRING:
            if type_id.is_variable_str():
                raise self.refuse(member, "holds variable-length text", allowed)
            if type_id.get_size() > MAX_TEXT_BYTES:
                raise self.refuse(member, f"holds texts of {type_id.get_size()} bytes", "texts below 16 MiB")
            return np.dtype(f"S{type_id.get_size()}")
        words = {
            h5t.REFERENCE: "object references", h5t.VLEN: "variable-length data", h5t.OPAQUE: "opaque data",
            h5t.ENUM: "an enumeration", h5t.ARRAY: "an array type", h5t.BITFIELD: "bit fields", h5t.TIME: "times",
        }  # fmt: skip
        if kind in words:
            raise self.refuse(member, f"holds {words[kind]}", allowed)
        if kind == h5t.COMPOUND and [type_id.get_member_name(i) for i in range(type_id.get_nmembers())] != [b"r", b"i"]:
            raise self.refuse(member, "holds a compound type", allowed)
        dtype: np.dtype[Any] = np.dtype(type_id.dtype)
        if dtype.kind not in "iufc" or dtype.itemsize > 16 or dtype.name in ("float128", "longdouble"):
            raise self.refuse(member, f"holds {dtype}", allowed)
        return np.dtype(dtype)

    def dataset(self, dataset: h5d.DatasetID, name: str) -> None:
        space = dataset.get_space()
        if space.get_simple_extent_type() == h5s.NULL:
            raise self.refuse(name, "has no data space", "an array or a scalar")
        entry = Entry("dataset", shape=tuple(dataset.shape), dtype=self.dtype(dataset.get_type(), name))
        self.entries[name] = entry
        self.attributes(dataset, name, entry)
        layout = dataset.get_create_plist()
        if layout.get_external_count():
            raise self.refuse(name, "keeps its data in another file", "data in this file")
        deflated = False
        for number in range(layout.get_nfilters()):
            code = layout.get_filter(number)[0]
            if code not in FILTERS:
                raise self.refuse(name, f"uses the filter number {code}", "no filter but shuffle and deflate")
            deflated = deflated or code == h5z.FILTER_DEFLATE
        kind = layout.get_layout()
        if kind not in (h5d.COMPACT, h5d.CONTIGUOUS, h5d.CHUNKED):
            raise self.refuse(name, "is put together from other datasets", "data of its own")
        if kind == h5d.CHUNKED and entry.size:
            chunk = int(np.prod([int(n) for n in layout.get_chunk()], dtype=object)) * entry.dtype.itemsize  # type: ignore[union-attr]
            if chunk > MAX_CHUNK_BYTES:
                raise self.refuse(name, f"has chunks of {chunk} bytes", "chunks below 1 GiB")
        self.sizes(dataset.get_storage_size(), entry, name, deflated)

    def sizes(self, stored: int, entry: Entry, name: str, deflated: bool) -> None:
        """Data that the file cannot contain would be made up by HDF5 from fill values, however many are declared."""
        possible = stored * (DEFLATE_RATIO if deflated else 1)
        if entry.size > possible:
            raise self.refuse(
                name,
                f"declares {entry.size} bytes, but the file stores {stored} for it",
                f"at most {possible} bytes of data from {stored} stored",
            )
        self.stored += stored
        if self.stored > self.n_bytes:
            raise self.refuse(
                name,
                f"the members claim more storage than the {self.n_bytes} bytes of the file",
                "storage of their own",
            )

    def attributes(self, owner: Any, name: str, entry: Entry) -> None:
        n = h5a.get_num_attrs(owner)
        if n > MAX_ATTRIBUTES:
            raise self.refuse(name, f"has {n} attributes", f"at most {MAX_ATTRIBUTES}")
        for number in range(n):
            attribute = h5a.open(owner, index=number)
            label = attribute.name.decode("utf-8", "replace")
            where = f"{name}@{label}"
            space = attribute.get_space()
            if space.get_simple_extent_type() == h5s.NULL:
                raise self.refuse(where, "has no value", "a number or a text")
            dtype = self.dtype(attribute.get_type(), where)
            n_bytes = dtype.itemsize * int(np.prod(attribute.shape, dtype=object))
            if n_bytes > MAX_ATTRIBUTE_BYTES:
                raise self.refuse(where, f"has {n_bytes} bytes", f"at most {MAX_ATTRIBUTE_BYTES}")
            value = np.empty(attribute.shape, dtype=dtype)
            attribute.read(value)
            entry.attributes[label] = plain(value, f"{self.path}:{where}")
            word: dict[str, Any] = {"dtype": word_of(dtype), "shape": list(attribute.shape)}
            if dtype.kind == "S":
                word["length"] = dtype.itemsize
            entry.attribute_words[label] = word


def plain(value: np.ndarray[Any, Any], where: str) -> Any:
    """An attribute's value as a Python number, text or list of them; complex numbers as ``[re, im]``."""
    if value.dtype.kind == "S":
        try:
            texts = [item.rstrip(b"\0").decode("utf-8") for item in value.reshape(-1).tolist()]
        except UnicodeDecodeError:
            raise FormatError(
                "is not UTF-8", where=where, expected="text in UTF-8", remedy="write the file again"
            ) from None
        return texts[0] if not value.shape else texts
    if value.dtype.kind == "c":
        value = np.stack([value.real, value.imag], axis=-1)
    return value.tolist()


def take_inventory(file: h5py.File, path: Path) -> Inventory:
    """Everything in an open file, by path. Raises UnsafeFileError for what must be refused, FileError for damage."""
    with damage(path):
        scan = _Scan(file, path)
        scan.group(h5g.open(file.id, b"/"), "", 0)
    return scan.entries


def outline_of(entries: Inventory) -> dict[str, Any]:
    """The inventory as nested plain JSON, see FORMAT.md, Outline."""
    nodes: dict[str, dict[str, Any]] = {}
    for name, entry in entries.items():
        attributes = {
            label: {**entry.attribute_words[label], "value": value} for label, value in entry.attributes.items()
        }
        node: dict[str, Any] = {"kind": entry.kind, "attributes": attributes}
        if entry.kind == "group":
            node["members"] = {}
        else:
            assert entry.dtype is not None
            node |= {"dtype": word_of(entry.dtype), "shape": list(entry.shape)}
            if entry.dtype.kind == "S":
                node["length"] = entry.dtype.itemsize
        nodes[name] = node
        if name != "/":
            parent, _, label = name.rpartition("/")
            nodes[parent or "/"]["members"][label] = node
    json.dumps(nodes["/"])  # it is promised to be plain JSON; fail here rather than at the reader
    return nodes["/"]
