"""A file as it is: its outline and raw arrays, for checks that must not depend on the file being right."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import FormatError
from qwfx.storage.convert import cut_texts, native, texts
from qwfx.storage.inventory import Entry, outline_of, take_inventory
from qwfx.storage.opening import connect, damage, refuse_more_than_memory

__all__ = ["RawFile", "open_raw", "outline"]


class RawFile:
    """An open file whose tree was found harmless. Use as a context manager."""

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path)
        self._file = connect(self.path)
        try:
            self._entries = take_inventory(self._file, self.path)
            self.outline: dict[str, Any] = outline_of(self._entries)
        except BaseException:
            self._file.close()
            raise

    def __enter__(self) -> RawFile:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the file; reading is then over."""
        self._file.close()

    @staticmethod
    def _absolute(member: str) -> str:
        return "/" + member.strip("/")

    def has(self, member: str) -> bool:
        """Whether there is a group or dataset at this path."""
        return self._absolute(member) in self._entries

    def members(self, group: str) -> tuple[str, ...]:
        """Names of the members of a group, sorted; empty if there is no such group."""
        entry = self._entries.get(self._absolute(group))
        return tuple(sorted(entry.members)) if entry else ()

    def attributes(self, member: str) -> dict[str, Any]:
        """The attributes of a group or dataset; empty if there is none."""
        entry = self._entries.get(self._absolute(member))
        return dict(entry.attributes) if entry else {}

    def shape(self, member: str) -> tuple[int, ...]:
        """Shape of a dataset. Raises FormatError if there is none."""
        return self._dataset_entry(member).shape

    def dtype(self, member: str) -> np.dtype[Any]:
        """Type of a dataset, in native byte order. Raises FormatError if there is none."""
        return self._stored_dtype(member).newbyteorder("=")

    def itemsize(self, member: str) -> int:
        """Bytes of an element of a dataset."""
        return int(self._stored_dtype(member).itemsize)

    def is_text(self, member: str) -> bool:
        """Whether a dataset holds text."""
        return bool(self._stored_dtype(member).kind == "S")

    def _stored_dtype(self, member: str) -> np.dtype[Any]:
        dtype = self._dataset_entry(member).dtype
        assert dtype is not None  # datasets have one
        return dtype

    def _dataset_entry(self, member: str) -> Entry:
        entry = self._entries.get(self._absolute(member))
        if entry is None or entry.kind != "dataset":
            raise FormatError(
                "there is no such dataset",
                where=f"{self.path}:{self._absolute(member)}",
                expected="a dataset",
                remedy="see the layout in FORMAT.md",
            )
        return entry

    def read(
        self, member: str, start: int | None = None, stop: int | None = None, axis: int = 0
    ) -> NDArray[Any]:
        """A dataset, or the part `start` to `stop` of it along `axis`, in native byte order; text as ``numpy.str_``.

        Raises FormatError if it is absent or is not UTF-8, FileError if it is damaged.
        """
        entry = self._dataset_entry(member)
        name = self._absolute(member)
        sliced = entry.shape and (start is not None or stop is not None)
        if not sliced:
            refuse_more_than_memory(entry.size, self.path, name)
        with damage(self.path, name):
            array = np.asarray(self._file[name][(slice(None),) * axis + (slice(start, stop),) if sliced else ()])
        return texts(array, f"{self.path}:{name}") if array.dtype.kind == "S" else native(array)

    def read_stored(self, member: str, part: tuple[slice, ...]) -> NDArray[Any]:
        """A part of a dataset, text as bytes up to its end."""
        self._dataset_entry(member)
        name = self._absolute(member)
        with damage(self.path, name):
            array = np.asarray(self._file[name][part])
        return cut_texts(array) if array.dtype.kind == "S" else native(array)

    def datasets(self) -> tuple[str, ...]:
        """Paths of all datasets, sorted."""
        return tuple(sorted(path for path, entry in self._entries.items() if entry.kind == "dataset"))

    def groups(self) -> tuple[str, ...]:
        """Paths of all groups, sorted, ``/`` included."""
        return tuple(sorted(path for path, entry in self._entries.items() if entry.kind == "group"))


def open_raw(path: str | Path) -> RawFile:
    """Open a file for looking at it as it is. Raises FileError or UnsafeFileError."""
    return RawFile(path)


def outline(path: str | Path) -> dict[str, Any]:
    """The tree of a file as plain JSON: kind, type, shape and attributes of every member, no data."""
    with open_raw(path) as file:
        return file.outline
