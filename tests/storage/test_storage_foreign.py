"""Files as other programs may write them: padded texts, a block in front, attributes of newer versions."""

from __future__ import annotations

import dataclasses
import os
from pathlib import Path

import h5py
import numpy as np
import pytest
from h5py import h5s, h5t
from storage_cases import valid

from qwfx import model
from qwfx.errors import FileError, FormatError
from qwfx.storage import check_digests, is_qwfx, load, open_raw, outline, save
from qwfx.storage.digest import spelling


@pytest.fixture
def path(tmp_path: Path) -> Path:
    save(valid(), tmp_path / "x.qwfx")
    return tmp_path / "x.qwfx"


def put_text(file: h5py.File, group: str, name: str, text: bytes, length: int, padding: int) -> None:
    kind = h5t.C_S1.copy()
    kind.set_size(length)
    kind.set_strpad(padding)
    if name in file[group].attrs:
        del file[group].attrs[name]
    attribute = h5py.h5a.create(file[group].id, name.encode(), kind, h5s.create(h5s.SCALAR))
    attribute.write(np.array(text, dtype=f"S{length}"), mtype=kind)


@pytest.mark.parametrize(
    ("padding", "text"),
    [(h5t.STR_SPACEPAD, b"gaussian      "), (h5t.STR_NULLTERM, b"gaussian\0junk"), (h5t.STR_NULLPAD, b"gaussian")],
)
def test_padded_texts(path: Path, padding: int, text: bytes) -> None:
    with h5py.File(path, "r+") as file:
        put_text(file, "basis", "radial", text, 14, padding)
    wavefunction = load(path)
    assert wavefunction.basis is not None
    assert wavefunction.basis.radial == "gaussian"
    with open_raw(path) as raw:
        assert raw.attributes("/basis")["radial"] == "gaussian"
    assert outline(path)["members"]["basis"]["attributes"]["radial"]["value"] == "gaussian"
    assert check_digests(path).sound  # the value is the same, however it is padded


def test_a_block_of_the_user_in_front(path: Path) -> None:
    moved = path.with_name("moved.qwfx")
    with h5py.File(moved, "w", userblock_size=1024) as new, h5py.File(path) as old:
        for name, value in old.attrs.items():
            new.attrs.create(name, value, dtype=old.attrs.get_id(name).dtype)
        for name in old:
            old.copy(name, new)
    assert is_qwfx(moved)
    assert load(moved).system.labels == ("He",)


def test_attributes_of_a_newer_version_are_not_lost_in_silence(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file["basis"].attrs.create("novelty", np.int64(3))
    wavefunction = load(path)
    assert wavefunction.unread == ("/basis@novelty",)
    with pytest.raises(FormatError, match="basis@novelty"):
        save(wavefunction, path)


def test_damaged_digests_of_blocks_are_told_from_damaged_data(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file["digests/block_digest"][2, 5] ^= 1
    (mismatch,) = check_digests(path).mismatches
    assert "intact data" in mismatch.reason


@pytest.mark.parametrize("value", [0, -1, 2**40])
def test_blocks_of_no_workable_size(path: Path, value: int) -> None:
    with h5py.File(path, "r+") as file:
        file["digests"].attrs.modify("block_bytes", np.int64(value))
    with pytest.raises(FormatError, match=str(value)):
        check_digests(path)


@pytest.mark.parametrize("name", ["digest", "block_start", "block_digest"])
def test_tables_of_digests_of_another_shape_say_nothing(path: Path, name: str) -> None:
    with h5py.File(path, "r+") as file:
        table = file["digests"][name][()]
        del file["digests"][name]
        file["digests"][name] = table[:-1] if table.ndim == 1 else table[:, :-1]
    assert "/system/positions" in check_digests(path).extra


def test_the_spelling_of_types_that_digests_begin_with() -> None:
    """FORMAT.md, Digests: written out, so that others can compute them."""
    assert spelling(np.dtype("S4"), 7) == "|S7"
    assert [spelling(np.dtype(t)) for t in (">f8", "i1", ">u8", "c16")] == ["<f8", "|i1", "<u8", "<c16"]


def test_empty_texts_have_a_length(tmp_path: Path) -> None:
    """HDF5 has no text of length 0."""
    wavefunction = dataclasses.replace(
        valid(), extensions={"mine": model.Node({"none": "", "few": ["", ""], "some": ["ab", "c"]})}
    )
    save(wavefunction, tmp_path / "y.qwfx")
    back = load(tmp_path / "y.qwfx").extensions["mine"].attributes
    assert dict(back) == {"none": "", "few": ["", ""], "some": ["ab", "c"]}


def test_tables_of_digests_that_do_not_agree_say_nothing(path: Path) -> None:
    with h5py.File(path, "r+") as file:
        file["digests/block_start"][-1] = 10**6
    check = check_digests(path)
    assert not check.sound
    assert set(check.extra) >= {"/system/positions", "/basis@"}


def test_pipes_and_devices_are_not_read(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    for name in (tmp_path / "pipe", Path("/dev/zero")):
        assert not is_qwfx(name)
        with pytest.raises(FileError, match="is not an HDF5"):
            load(name)
