"""Stored arrays as NumPy arrays of native byte order, exact or refused."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.errors import FormatError
from qwfx.storage.members import Kind

__all__ = ["as_kind", "cut_texts", "native", "target_dtype", "texts"]

_DTYPES = {"int8": np.int8, "int32": np.int32, "int64": np.int64, "uint64": np.uint64, "float64": np.float64}


def native(array: NDArray[Any]) -> NDArray[Any]:
    """The same numbers in native byte order; text stays bytes."""
    return array if array.dtype.isnative else array.astype(array.dtype.newbyteorder("="))


def cut_texts(array: NDArray[Any]) -> NDArray[Any]:
    """Fixed-length bytes without what follows the first NUL of each, where a text ends.

    Padding with spaces (``H5T_STR_SPACEPAD``, as Fortran programs may write it) was taken off by HDF5 before: it is
    padding by the type. Spaces at the end of other texts belong to them.
    """
    width = array.dtype.itemsize
    array = np.ascontiguousarray(array, dtype=f"S{width}").reshape(array.shape)
    letters = array.reshape(-1).view(np.uint8).reshape(-1, width)
    ended = np.logical_or.accumulate(letters == 0, axis=1)
    if not (letters * ended).any():
        return array
    return np.where(ended, np.uint8(0), letters).reshape(-1).view(f"S{width}").reshape(array.shape)


def texts(array: NDArray[Any], where: str) -> NDArray[np.str_]:
    """Fixed-length bytes as text, see `cut_texts`. Raises FormatError for what is not UTF-8."""
    array = cut_texts(array)
    try:
        return np.asarray(np.char.decode(array, "utf-8")) if array.size else np.zeros(array.shape, "U1")
    except UnicodeDecodeError as error:
        raise FormatError(
            f"is not UTF-8 ({error.reason})", where=where, expected="text in UTF-8", remedy="write the file again"
        ) from None


def target_dtype(stored: np.dtype[Any], kind: Kind, where: str) -> np.dtype[Any]:
    """The type that a member of `kind` has in memory. Raises FormatError where `stored` cannot hold such data.

    Wider and narrower integers and floats are taken where that is exact; integers are not taken for floats, because
    no writer of this format stores them so.
    """
    if kind == "number":
        if stored.kind == "c" and stored.itemsize <= 16:
            return np.dtype(np.complex128)
        if stored.kind == "f" and stored.itemsize <= 8:
            return np.dtype(np.float64)
    elif kind == "float64":
        if stored.kind == "f" and stored.itemsize <= 8:
            return np.dtype(np.float64)
    elif kind == "text":
        if stored.kind == "S":
            return stored
    elif stored.kind in "iu":
        return np.dtype(_DTYPES[kind])
    raise FormatError(
        f"holds {stored.newbyteorder('=')}",
        where=where,
        expected={"number": "float64 or complex128", "text": "fixed-length text"}.get(kind, kind),
        remedy="see the layout in FORMAT.md, and write the file again",
    )


def as_kind(array: NDArray[Any], kind: Kind, where: str) -> NDArray[Any]:
    """`array` in the type that the model has for a member of `kind`. Raises FormatError if that is not exact."""
    dtype = target_dtype(array.dtype, kind, where)
    if kind == "text":
        return texts(array, where)
    if dtype.kind in "iu" and array.size:
        low, high, limits = int(array.min()), int(array.max()), np.iinfo(dtype)
        if low < limits.min or high > limits.max:
            raise FormatError(
                f"holds {low if low < limits.min else high}",
                where=where,
                expected=f"numbers that fit {dtype.name}",
                remedy="write the file again",
            )
    return np.ascontiguousarray(array, dtype=dtype).reshape(array.shape)
