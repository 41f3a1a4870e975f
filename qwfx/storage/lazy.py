"""Big members that stay in the file until they are sliced."""

from __future__ import annotations

import weakref
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from qwfx.storage.convert import as_kind, target_dtype
from qwfx.storage.members import Kind
from qwfx.storage.opening import damage

__all__ = ["OpenFile", "StoredArray"]


class OpenFile:
    """A file that is closed once no array refers to this object any more."""

    def __init__(self, file: h5py.File) -> None:
        self.file = file
        weakref.finalize(self, file.close)


class StoredArray:
    """A dataset seen as a `qwfx.model.LazyArray`.

    It keeps the file open, so that a file which is replaced under its name by a newer one is still read as it was.
    """

    def __init__(self, opened: OpenFile, member: str, kind: Kind, path: Path) -> None:
        self._opened = opened
        self._dataset = dataset = opened.file[member]
        self._kind: Kind = kind
        self._path = path
        self._dtype = target_dtype(dataset.dtype, kind, f"{path}:{dataset.name}")

    @property
    def shape(self) -> tuple[int, ...]:
        """Extent along each axis."""
        return tuple(self._dataset.shape)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Type of an element in memory."""
        return self._dtype

    @property
    def ndim(self) -> int:
        """Number of axes."""
        return len(self.shape)

    @property
    def size(self) -> int:
        """Number of elements."""
        return int(np.prod(self.shape, dtype=np.int64))

    def __len__(self) -> int:
        return self.shape[0]

    def __getitem__(self, key: Any) -> Any:
        try:
            part = np.asarray(self._dataset[key])
        except (TypeError, ValueError, NotImplementedError):
            # NumPy selects more than HDF5 does: backwards, by several lists, with new axes.
            with damage(self._path, str(self._dataset.name)):
                whole = np.asarray(self._dataset[()])
            part = np.asarray(whole[key])
        except (OSError, RuntimeError, KeyError, SystemError, MemoryError):
            with damage(self._path, str(self._dataset.name)):
                raise
        part = as_kind(part, self._kind, f"{self._path}:{self._dataset.name}")
        return part if part.ndim else part[()]

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> NDArray[Any]:
        if copy is False:
            raise ValueError("a member that is in a file cannot be seen as an array without reading a copy")
        whole = np.asarray(self[()])
        return whole if dtype is None else whole.astype(dtype)

    def __repr__(self) -> str:
        return f"<StoredArray {self._dataset.name} {self.dtype} {self.shape} in {self._path}>"
