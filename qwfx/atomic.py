"""Writing a file whole or not at all: to a temporary file in the same folder, then a rename."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from qwfx.errors import FileError

__all__ = ["replacing"]


@contextmanager
def replacing(
    target: Path, suffix: str = ".part", failures: tuple[type[Exception], ...] = (OSError,)
) -> Iterator[Path]:
    """Yields the path of an empty temporary file to fill; leaving without an error brings it under the name `target`.

    A process that is killed meanwhile leaves `target` as it was, and a temporary file with the given ending that may be
    deleted. A target that is there keeps its permissions.

    Raises FileError for any of `failures`; `target` is then as it was and the temporary file is gone.
    """
    try:
        handle, name = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.", suffix=suffix)
    except OSError as error:
        raise _cannot_write(target, error) from None
    os.close(handle)
    part = Path(name)
    try:
        yield part
        _settle(part, target)
    except failures as error:
        raise _cannot_write(target, error) from error
    finally:
        part.unlink(missing_ok=True)


def _settle(part: Path, target: Path) -> None:
    """Bring the finished file under its name, on the disk too."""
    os.chmod(part, target.stat().st_mode & 0o7777 if target.exists() else 0o666 & ~_umask())
    with open(part, "rb+") as stream:
        os.fsync(stream.fileno())
    os.replace(part, target)
    with suppress(OSError):  # some systems do not open or sync folders; the rename itself is done
        folder = os.open(target.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _cannot_write(target: Path, error: Exception) -> FileError:
    reason = getattr(error, "strerror", None) or (str(error).splitlines() or [type(error).__name__])[0]
    return FileError(
        f"cannot be written ({reason})",
        where=str(target),
        expected="a folder that exists, may be written to and has room",
        remedy="check the folder, its permissions and the space on the disk; nothing was changed",
    )
