"""qwfx: a portable, self-proving file for trial wave functions, and the tools that make it trustworthy.

The heavy parts are imported on first use, so that ``import qwfx`` and ``qwfx --help`` stay instant.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from qwfx._version import __version__

if TYPE_CHECKING:
    from qwfx.model import Wavefunction
    from qwfx.storage import load, save

__all__ = ["Wavefunction", "__version__", "load", "save"]

_HOMES = {"load": "qwfx.storage", "save": "qwfx.storage", "Wavefunction": "qwfx.model"}


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        import importlib

        return getattr(importlib.import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'qwfx' has no attribute {name!r}")
