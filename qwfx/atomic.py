"""Writing a file whole or not at all: to a temporary file in the same folder, then a rename."""

from __future__ import annotations

import os
import stat
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from qwfx.errors import FileError

__all__ = ["replacing"]


@contextmanager
def replacing(
    target: Path, suffix: str = ".part", failures: tuple[type[Exception], ...] = (OSError,), *, overwrite: bool = True
) -> Iterator[Path]:
    """Yields the path of an empty temporary file to fill; leaving without an error brings it under the name `target`.

    A process that is killed meanwhile leaves `target` as it was, and a temporary file with the given ending that may be
    deleted. A target that is there keeps its permissions; if it is a link, what it points to is replaced. With
    `overwrite` False a target that is there stays, even one that another process makes at the last moment.

    Raises FileError for any of `failures`; `target` is then as it was and the temporary file is gone.
    """
    part = None
    try:
        mode = _mode(target, overwrite)
        real = Path(os.path.realpath(target))
        part = _new_part(real, suffix, mode)
        yield part
        _settle(part, real, mode, overwrite)
    except FileExistsError:
        raise FileError(
            "already exists", where=str(target), expected="a free name", remedy="choose another name, or overwrite it"
        ) from None
    except failures as error:
        raise _cannot_write(target, error) from error
    except OSError as error:
        raise _cannot_write(target, error) from None
    finally:
        if part is not None:
            part.unlink(missing_ok=True)


def _mode(target: Path, overwrite: bool) -> int | None:
    """Permissions of the file that is there, None if there is none. Refuses what is no file of its own."""
    try:
        told = target.stat().st_mode
    except FileNotFoundError:
        return None
    if not stat.S_ISREG(told):  # a rename would put a file in the place of a device or a pipe
        what = "is a folder" if stat.S_ISDIR(told) else "is no ordinary file"
        raise FileError(what, where=str(target), expected="a file name", remedy="choose another name")
    if not overwrite:
        raise FileExistsError
    return stat.S_IMODE(told)


def _new_part(target: Path, suffix: str, mode: int | None) -> Path:
    """A new file next to the target; where there is one already, open to its owner only until it gets the same mode."""
    stem = target.name.encode()[:100].decode(errors="ignore")  # a name may be as long as file systems take, not longer
    part = target.parent / f".{stem}.{os.urandom(6).hex()}{suffix}"
    os.close(os.open(part, os.O_CREAT | os.O_EXCL | os.O_RDWR, 0o666 if mode is None else 0o600))
    return part


def _settle(part: Path, target: Path, mode: int | None, overwrite: bool) -> None:
    """Bring the finished file under its name, on the disk too."""
    if mode is not None:
        os.chmod(part, mode)
    handle = os.open(part, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
    if overwrite:
        os.replace(part, target)
    else:
        _rename_to_free_name(part, target)
    with suppress(OSError):  # some systems do not open or sync folders; the rename itself is done
        folder = os.open(target.parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)


def _rename_to_free_name(part: Path, target: Path) -> None:
    """Raises FileExistsError if there is a file of this name by now."""
    try:
        os.link(part, target)
    except FileExistsError:
        raise
    except OSError as error:  # this file system has no hard links
        if target.exists():
            raise FileExistsError from error
        os.replace(part, target)


def _cannot_write(target: Path, error: Exception) -> FileError:
    reason = getattr(error, "strerror", None) or (str(error).splitlines() or [type(error).__name__])[0]
    return FileError(
        f"cannot be written ({reason})",
        where=str(target),
        expected="a folder that exists, may be written to and has room",
        remedy="check the folder, its permissions and the space on the disk; nothing was changed",
    )
