"""HDF5 <-> model: the only room that imports h5py."""

from __future__ import annotations

from qwfx.storage.digest import DigestCheck, DigestMismatch, check_digests
from qwfx.storage.lazy import StoredArray
from qwfx.storage.raw import RawFile, open_raw, outline
from qwfx.storage.read import is_qwfx, load
from qwfx.storage.write import content_digest, save

__all__ = [
    "DigestCheck", "DigestMismatch", "RawFile", "StoredArray", "check_digests", "content_digest", "is_qwfx", "load",
    "open_raw", "outline", "save",
]  # fmt: skip
