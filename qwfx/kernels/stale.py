"""Compiled code of kernels that have changed since, which Numba would still use.

Numba keeps the machine code of a function with a mark of that function's own source file. What it calls from other
files is compiled into it, and may have changed: an upgraded kernel would go on computing what the old one did.
"""

from __future__ import annotations

import hashlib
from contextlib import suppress
from pathlib import Path
from typing import Any

__all__ = ["forget_stale"]

MARK = "qwfx-kernels.sha256"


def forget_stale(dispatcher: Any, *folders: Path) -> bool:
    """Remove what Numba has kept for the modules of a folder if they or what they call has changed; whether it did.

    `dispatcher` is one of their compiled functions: it knows where Numba keeps them. `folders` are theirs and those of
    the modules that they call, their own first. To be called before any is used.
    """
    try:
        cache = Path(dispatcher._cache._cache_path)
    except AttributeError:  # another version of Numba: it says nothing, and a mark could not be put anywhere
        return False
    modules = sorted(module for folder in folders for module in folder.glob("*.py"))
    digest = hashlib.sha256(b"".join(module.name.encode() + module.read_bytes() for module in modules)).hexdigest()
    mark = cache / MARK
    try:
        if mark.read_text("ascii") == digest:
            return False
    except (OSError, UnicodeDecodeError):
        pass
    stems = {module.stem for module in folders[0].glob("*.py")}
    removed = False
    for kept in (*cache.glob("*.nbi"), *cache.glob("*.nbc")):
        if kept.name.partition(".")[0] in stems:
            with suppress(OSError):
                kept.unlink()
                removed = True
    with suppress(OSError):  # a folder that cannot be written to keeps nothing new either
        cache.mkdir(parents=True, exist_ok=True)
        mark.write_text(digest, "ascii")
    return removed
