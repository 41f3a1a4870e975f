"""The little language of the examples on the rules' pages: a valid file and what is changed in it.

The first line names a file of `corpus.valid`; each further line is one change::

    /basis/exponents[1] = -0.62          set an element
    /energies/state = [0, 1]             replace a data set (its kind stays)
    /orbitals/main/roles : string = [..] write a data set of another kind, or a new one
    /system@n_up = 2                     set an attribute
    delete /expansion                    remove a group, data set or attribute
    move /orbitals/main /orbitals/a      rename
    store /basis/exponents as >f8        the same numbers in another type of storage
    keep digests                         leave the stored digests as they were before the changes

Values are JSON; a complex number is written [real, imaginary]; `#` begins a comment.
"""

from __future__ import annotations

import json
import re
import tempfile
from functools import cache
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from corpus.seal import seal
from corpus.valid import VALID

from qwfx.storage import save


def blocks_of(page: str) -> dict[str, str]:
    """The examples of a page: heading (``Fails``, ``Passes``) -> text of the block below it."""
    found = re.findall(r"^## (Fails|Passes)\n.*?^```text\n(.*?)^```", page, re.MULTILINE | re.DOTALL)
    return dict(found)


@cache
def _saved(base: str) -> bytes:
    """The bytes of a valid file, written once."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "base.qwfx"
        save(VALID[base](), path)
        return path.read_bytes()


def build(text: str, path: Path) -> Path:
    """Write the file that an example describes to `path`."""
    lines = [line.split("  #")[0].split("# ")[0].strip() for line in text.splitlines()]
    base, *changes = [line for line in lines if line]
    path.write_bytes(_saved(base))
    with h5py.File(path, "r+") as file:
        for change in changes:
            _apply(file, change)
        if changes and "keep digests" not in changes:
            seal(file)
    return path


def _apply(file: h5py.File, change: str) -> None:
    if change == "keep digests":
        return
    word, _, rest = change.partition(" ")
    if word == "delete":
        group, at, attribute = rest.partition("@")
        if at:
            del file[group].attrs[attribute]
        else:
            del file[group]
    elif word == "move":
        file.move(*rest.split())
    elif word == "store":
        member, _, dtype = rest.partition(" as ")
        _replace(file, member, file[member][()].astype(dtype), maxshape=True)
    else:
        target, _, value = change.partition(" = ")
        _assign(file, target.strip(), json.loads(value))


def _assign(file: h5py.File, target: str, value: Any) -> None:
    target, _, kind = (part.strip() for part in target.partition(" : "))
    if "@" in target:
        group, _, name = target.partition("@")
        node = file.require_group(group)
        old = node.attrs.get(name)
        if isinstance(value, str):
            node.attrs.create(name, np.array(value.encode(), dtype=f"S{max(1, len(value.encode()))}"))
        else:
            node.attrs.create(
                name, np.asarray(value, dtype=kind or (np.asarray(old).dtype if old is not None else None))
            )
        return
    member, _, index = target.rstrip("]").partition("[")
    if index:
        array = file[member][()]
        where = tuple(int(i) for i in index.split(","))
        if array.dtype.kind == "S":
            array = array.astype(f"S{max(array.dtype.itemsize, len(value))}")
            value = value.encode()
        elif array.dtype.kind == "c" and isinstance(value, list):
            value = complex(*value)
        array[where] = value
        _replace(file, member, array)
    elif kind == "string" or (member in file and file[member].dtype.kind == "S"):
        text = [x.encode() for x in np.asarray(value).ravel().tolist()]
        _replace(file, member, np.array(text, dtype=f"S{max([1, *map(len, text)])}").reshape(np.shape(value)))
    else:
        dtype = np.dtype(kind) if kind else file[member].dtype
        array = np.asarray(value, dtype=np.float64 if dtype.kind in "cf" else None)
        if (
            dtype.kind == "c"
            and array.ndim
            and array.shape[-1] == 2
            and _depth(value) > (file[member].ndim if member in file else 0)
        ):
            array = array[..., 0] + 1j * array[..., 1]
        _replace(file, member, array.astype(dtype))


def _depth(value: Any) -> int:
    return 1 + _depth(value[0]) if isinstance(value, list) and value else 0


def _replace(file: h5py.File, member: str, array: np.ndarray, maxshape: bool = False) -> None:
    if member in file:
        del file[member]
    if maxshape and array.ndim:
        file.create_dataset(member, data=array, chunks=True, compression="gzip", shuffle=True)
    else:
        file.create_dataset(member, data=array)
