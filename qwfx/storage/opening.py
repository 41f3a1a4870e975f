"""Opening a file, and what HDF5 says of damaged ones turned into errors of ours."""

from __future__ import annotations

import errno
import os
import stat
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import h5py

from qwfx.errors import FileError, QwfxError

__all__ = ["DAMAGE", "connect", "damage", "has_signature", "refuse_more_than_memory"]

DAMAGE = (
    OSError, RuntimeError, ValueError, KeyError, TypeError, NotImplementedError, OverflowError, SystemError,
)  # fmt: skip
"""What h5py raises on damaged content, depending on where the damage lies."""
SIGNATURE = b"\x89HDF\r\n\x1a\n"
FIRST_OFFSET = 512
"""HDF5 looks for its signature at byte 0, 512, 1024, 2048, ...: what stands before is a block of the user's."""


def has_signature(path: str | Path) -> bool:
    """Whether a regular file has the signature of HDF5 where HDF5 looks for it. Raises OSError if it is unreadable."""
    if not stat.S_ISREG(os.stat(path).st_mode):
        return False  # a pipe would be waited for, a device read for ever
    with open(path, "rb") as stream:
        n_bytes = stream.seek(0, 2)
        offset = 0
        while offset < n_bytes:
            stream.seek(offset)
            if stream.read(len(SIGNATURE)) == SIGNATURE:
                return True
            offset = 2 * offset or FIRST_OFFSET
    return False


def connect(path: Path) -> h5py.File:
    """An open `h5py.File`. Raises FileError if there is none to be had."""
    try:
        if path.is_dir():
            raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
        signed, n_bytes = has_signature(path), os.stat(path).st_size
    except (OSError, ValueError) as error:
        raise FileError(
            f"cannot be opened ({getattr(error, 'strerror', None) or error})",
            where=str(path),
            expected="a readable file",
            remedy="check the path and the permissions",
        ) from None
    if not signed:
        what = "is empty" if path.is_file() and not n_bytes else "is not an HDF5 file"
        raise FileError(
            what, where=str(path), expected="a .qwfx file", remedy="convert it first: `qwfx convert SRC DST.qwfx`"
        )
    try:
        return h5py.File(path, "r", locking=False)
    except DAMAGE as error:
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
    where = f"{path}:{member}" if member else str(path)
    try:
        yield
    except QwfxError:
        raise
    except DAMAGE as error:
        raise FileError(
            f"is damaged: HDF5 cannot read it ({_first_line(error)})",
            where=where,
            expected="intact data",
            remedy="copy the file again from where it came from",
        ) from error
    except MemoryError as error:
        raise _too_much(where, "more memory than there is") from error


def _too_much(where: str, what: str) -> FileError:
    return FileError(
        f"asks for {what}",
        where=where,
        expected="data that fit into the memory",
        remedy="use a machine with more memory, or check that the file is intact",
    )


def refuse_more_than_memory(n_bytes: int, path: Path, member: str) -> None:
    """Raise FileError before more is allocated than the machine has: deflated data may be a thousand times a file."""
    try:
        memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    except (AttributeError, ValueError, OSError):
        return  # this system does not tell
    if n_bytes > memory > 0:
        raise _too_much(f"{path}:{member}", f"{n_bytes} bytes of memory, of which there are {memory}")
