"""What is in an HDF5 file, found out without reading any data, and refused where it may hurt.

Every reader goes through `take_inventory` first. A file of the format is a plain tree: groups and datasets joined by
hard links, fixed-size integers, floats, ``{r, i}`` pairs and text, contiguous or chunked with shuffle and deflate.
Anything else can make a reader open other files, run foreign code, loop, or fill the memory, and is refused by name.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from h5py import h5a, h5d, h5g, h5l, h5o, h5s, h5t, h5z

from qwfx.errors import FormatError, UnsafeFileError
from qwfx.storage.convert import cut_texts
from qwfx.storage.opening import damage

__all__ = ["MAX_ATTRIBUTES", "MAX_ATTRIBUTE_BYTES", "MAX_NAME_BYTES", "MAX_TEXT_BYTES", "Entry", "Inventory",
           "outline_of", "root_attributes", "take_inventory", "word_of"]  # fmt: skip

MAX_MEMBERS = 200_000
MAX_DEPTH = 32
MAX_NAME_BYTES = 1024
MAX_ATTRIBUTES = 256
MAX_ATTRIBUTE_BYTES = 65_536
MAX_TEXT_BYTES = 1 << 24
MAX_CHUNK_BYTES = 1 << 30
DEFLATE_RATIO = 1032
"""A byte of deflate yields at most 1032 bytes (zlib's technical notes: 258 bytes for two bits)."""
ALLOWED = "fixed-size integers, floats, {r, i} pairs of floats, or fixed-length text"
NUMBERS = {*((kind, n) for kind in "iu" for n in (1, 2, 4, 8)), ("f", 4), ("f", 8), ("c", 16)}
"""Kinds and bytes of the numbers that the format has."""
REFUSED_CLASSES = {
    h5t.REFERENCE: "object references", h5t.VLEN: "variable-length data", h5t.OPAQUE: "opaque data",
    h5t.ENUM: "an enumeration", h5t.ARRAY: "an array type", h5t.BITFIELD: "bit fields", h5t.TIME: "times",
}  # fmt: skip
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
    members: list[str] = field(default_factory=list)
    """Names of the members of a group."""

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


class _Scan:
    def __init__(self, file: h5py.File, path: Path) -> None:
        self.file, self.path = file, path
        self.n_bytes = path.stat().st_size
        self.entries: Inventory = {}
        root = h5o.get_info(file.id)
        self.seen: dict[tuple[int, int], str] = {(root.fileno, root.addr): "/"}
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
            text = self.name(raw, name or "/")
            child = f"{name}/{text}"
            if len(self.entries) >= MAX_MEMBERS:
                raise self.refuse(name or "/", f"there are more than {MAX_MEMBERS} members", "fewer members")
            kind = group.links.get_info(raw).type
            if kind != h5l.TYPE_HARD:
                word = {h5l.TYPE_SOFT: "a soft link", h5l.TYPE_EXTERNAL: "an external link to another file"}.get(
                    kind, "a link of an unknown kind"
                )
                raise self.refuse(child, f"is {word}", "a group or dataset in this file, by a hard link")
            self.member(group, raw, child, depth)
            entry.members.append(text)

    def name(self, raw: bytes, owner: str) -> str:
        """A name of a member or attribute as text."""
        try:
            text = raw.decode("utf-8")
        except UnicodeDecodeError:
            raise self.refuse(owner, f"a name is not UTF-8: {raw[:40]!r}", "names in UTF-8") from None
        if len(raw) > MAX_NAME_BYTES or text in ("", ".") or any(c == "/" or ord(c) < 32 for c in text):
            raise self.refuse(owner, f"the name {text[:40]!r} cannot be used", "a short, printable name")
        return text

    def member(self, group: h5g.GroupID, raw: bytes, child: str, depth: int) -> None:
        info = h5o.get_info(group, raw)
        key = (info.fileno, info.addr)
        if key in self.seen:
            first = self.seen[key]
            what = "closes a cycle: it is" if child.startswith(first.rstrip("/") + "/") else "is the same object as"
            raise self.refuse(child, f"{what} {first} again", "each member linked once")
        self.seen[key] = child
        if info.type == h5o.TYPE_GROUP:
            self.group(h5g.open(group, raw), child, depth + 1)
        elif info.type == h5o.TYPE_DATASET:
            self.dataset(h5d.open(group, raw), child)
        else:
            raise self.refuse(child, "is a named datatype", "a group or a dataset")

    def dtype(self, type_id: h5t.TypeID, member: str) -> np.dtype[Any]:
        """The NumPy type of a stored type that the format allows; others are refused."""
        kind = type_id.get_class()
        if type_id.committed():
            raise self.refuse(member, "is of a named datatype", ALLOWED)
        if kind == h5t.STRING:
            if type_id.is_variable_str():
                raise self.refuse(member, "holds variable-length text", ALLOWED)
            if type_id.get_size() > MAX_TEXT_BYTES:
                raise self.refuse(member, f"holds texts of {type_id.get_size()} bytes", "texts below 16 MiB")
            return np.dtype(f"S{type_id.get_size()}")
        if kind not in (h5t.INTEGER, h5t.FLOAT, h5t.COMPOUND):
            raise self.refuse(member, f"holds {REFUSED_CLASSES.get(kind, 'a type of a foreign kind')}", ALLOWED)
        if kind == h5t.COMPOUND and [type_id.get_member_name(i) for i in range(type_id.get_nmembers())] != [b"r", b"i"]:
            raise self.refuse(member, "holds a compound type", ALLOWED)
        try:
            dtype: np.dtype[Any] = np.dtype(type_id.dtype)
        except (TypeError, ValueError) as error:
            raise self.refuse(member, f"holds numbers of a foreign format ({error})", ALLOWED) from None
        if (dtype.kind, dtype.itemsize) not in NUMBERS:
            raise self.refuse(member, f"holds {dtype}", ALLOWED)
        return dtype

    def dataset(self, dataset: h5d.DatasetID, name: str) -> None:
        layout = dataset.get_create_plist()  # first of all: asking a virtual dataset for its shape opens other files
        if layout.get_external_count():
            raise self.refuse(name, "keeps its data in another file", "data in this file")
        filters = [layout.get_filter(number)[0] for number in range(layout.get_nfilters())]
        for code in filters:
            if code not in FILTERS:
                raise self.refuse(name, f"uses the filter number {code}", "no filter but shuffle and deflate")
            if filters.count(code) > 1:
                raise self.refuse(name, f"uses the filter {FILTERS[code]} repeatedly", "each filter once")
        kind = layout.get_layout()
        if kind not in (h5d.COMPACT, h5d.CONTIGUOUS, h5d.CHUNKED):
            raise self.refuse(name, "is put together from other datasets", "data of its own")
        if dataset.get_space().get_simple_extent_type() == h5s.NULL:
            raise self.refuse(name, "has no data space", "an array or a scalar")
        entry = Entry("dataset", shape=tuple(dataset.shape), dtype=self.dtype(dataset.get_type(), name))
        self.entries[name] = entry
        self.attributes(dataset, name, entry)
        deflated = h5z.FILTER_DEFLATE in filters
        self.sizes(dataset.get_storage_size(), entry, name, deflated)
        if kind == h5d.CHUNKED and entry.size:
            self.chunks(dataset, [int(n) for n in layout.get_chunk()], entry, name, deflated)

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

    def chunks(self, dataset: h5d.DatasetID, extents: list[int], entry: Entry, name: str, deflated: bool) -> None:
        """Every chunk must be there, of a size that can be unpacked, and be no longer than deflate can make it."""
        assert entry.dtype is not None
        size = math.prod(extents) * entry.dtype.itemsize
        if size > MAX_CHUNK_BYTES:
            raise self.refuse(name, f"has chunks of {size} bytes", "chunks of at most 1 GiB")
        needed = math.prod(-(-extent // chunk) for extent, chunk in zip(entry.shape, extents, strict=True))
        written = dataset.get_num_chunks()
        if written < needed:
            raise self.refuse(name, f"has {written} of its {needed} chunks", "every chunk written")
        most = needed * (size + size // 1000 + 1024)  # deflate adds 5 bytes to 16 KiB that do not shrink
        if deflated and dataset.get_storage_size() > most:
            found = f"stores {dataset.get_storage_size()} bytes for {needed} chunks of {size}"
            raise self.refuse(name, found, f"at most {most} bytes")

    def attributes(self, owner: Any, name: str, entry: Entry) -> None:
        n = h5a.get_num_attrs(owner)
        if n > MAX_ATTRIBUTES:
            raise self.refuse(name, f"has {n} attributes", f"at most {MAX_ATTRIBUTES}")
        for number in range(n):
            attribute = h5a.open(owner, index=number)
            label = self.name(attribute.name, f"{name}@")
            where = f"{name}@{label}"
            if attribute.get_space().get_simple_extent_type() == h5s.NULL:
                raise self.refuse(where, "has no value", "a number or a text")
            type_id = attribute.get_type()
            dtype = self.dtype(type_id, where)
            # An extent of zero makes an array empty, and still long to walk through along the others.
            n_bytes = dtype.itemsize * math.prod(max(int(extent), 1) for extent in attribute.shape)
            if n_bytes > MAX_ATTRIBUTE_BYTES:
                raise self.refuse(where, f"has {n_bytes} bytes", f"at most {MAX_ATTRIBUTE_BYTES}")
            value = np.empty(attribute.shape, dtype=dtype)
            attribute.read(value, mtype=_in_memory(type_id) if dtype.kind == "S" else None)
            entry.attributes[label] = plain(value, f"{self.path}:{where}")
            word: dict[str, Any] = {"dtype": word_of(dtype), "shape": list(attribute.shape)}
            if dtype.kind == "S":
                word["length"] = dtype.itemsize
            entry.attribute_words[label] = word


def _in_memory(type_id: h5t.TypeID) -> h5t.TypeID:
    """The same text, padded with NUL: HDF5 takes off the spaces of a space-padded text, and leaves its letters."""
    text = type_id.copy()
    text.set_strpad(h5t.STR_NULLPAD)
    return text


def plain(value: np.ndarray[Any, Any], where: str) -> Any:
    """An attribute's value as a Python number, text or list of them; complex numbers as ``[re, im]``."""
    if value.dtype.kind == "S":
        try:
            texts = [item.decode("utf-8") for item in cut_texts(value).reshape(-1).tolist()]
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


def root_attributes(file: h5py.File, path: Path) -> dict[str, Any]:
    """The attributes of the root group alone, which tell the version that the rest is to be judged by."""
    entry = Entry("group")
    with damage(path):
        _Scan(file, path).attributes(h5g.open(file.id, b"/"), "/", entry)
    return entry.attributes


def outline_of(entries: Inventory) -> dict[str, Any]:
    """The inventory as nested plain JSON, see FORMAT.md, Outline."""
    nodes: dict[str, dict[str, Any]] = {}
    for name, entry in entries.items():
        attributes = {
            label: {**entry.attribute_words[label], "value": _json(value)} for label, value in entry.attributes.items()
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
    return nodes["/"]


def _json(value: Any) -> Any:
    """A value that JSON has: NaN and infinities, which it has not, as their names."""
    if isinstance(value, list):
        return [_json(item) for item in value]
    return str(value) if isinstance(value, float) and not math.isfinite(value) else value
