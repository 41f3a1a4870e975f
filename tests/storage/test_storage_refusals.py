"""Files that may hurt are refused by name, and damaged ones give an error of ours, whatever the damage."""

from __future__ import annotations

import random
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import h5py
import numpy as np
import pytest
from h5py import h5d, h5p, h5s, h5t
from storage_cases import valid

from qwfx.errors import FileError, FormatError, QwfxError, UnsafeFileError
from qwfx.storage import check_digests, load, open_raw, outline, save


def external_link(file: h5py.File) -> None:
    file["basis/elsewhere"] = h5py.ExternalLink("/etc/passwd", "/")


def soft_link(file: h5py.File) -> None:
    file["basis/other"] = h5py.SoftLink("/system")


def soft_cycle(file: h5py.File) -> None:
    file["basis/self"] = h5py.SoftLink("/basis")


def hard_cycle(file: h5py.File) -> None:
    file["basis/up"] = file["/basis"]


def root_cycle(file: h5py.File) -> None:
    file["basis/root"] = file["/"]


def twice(file: h5py.File) -> None:
    file["basis/again"] = file["system/positions"]


def external_storage(file: h5py.File) -> None:
    file.create_dataset("basis/raw", shape=(4,), dtype="f8", external=[("/etc/passwd", 0, 32)])


def virtual(file: h5py.File) -> None:
    layout = h5py.VirtualLayout(shape=(4,), dtype="f8")
    layout[:] = h5py.VirtualSource("/etc/passwd", "x", shape=(4,))
    file.create_virtual_dataset("basis/virtual", layout)


def foreign_filter(file: h5py.File) -> None:
    file.create_dataset("basis/lzf", data=np.zeros(100), compression="lzf", chunks=(10,))


def checksum_filter(file: h5py.File) -> None:
    file.create_dataset("basis/sum", data=np.zeros(100), fletcher32=True, chunks=(10,))


def references(file: h5py.File) -> None:
    file.create_dataset("basis/ref", data=np.array([file.ref], dtype=h5py.ref_dtype), dtype=h5py.ref_dtype)


def region_references(file: h5py.File) -> None:
    file.create_dataset("basis/region", shape=(1,), dtype=h5py.regionref_dtype)


def long_text(file: h5py.File) -> None:
    file.create_dataset("basis/text", data="variable length")


def long_text_attribute(file: h5py.File) -> None:
    file["basis"].attrs["note"] = "variable length"


def variable_length(file: h5py.File) -> None:
    file.create_dataset("basis/vlen", shape=(2,), dtype=h5py.vlen_dtype(np.float64))


def compound(file: h5py.File) -> None:
    file.create_dataset("basis/pair", data=np.zeros(2, dtype=[("a", "f8"), ("b", "f8")]))


def enumeration(file: h5py.File) -> None:
    file.create_dataset("basis/enum", data=np.array([True, False]))


def opaque(file: h5py.File) -> None:
    file.create_dataset("basis/opaque", data=np.zeros(2, dtype="V5").astype(h5py.opaque_dtype(np.dtype("V5"))))


def named_type(file: h5py.File) -> None:
    file["basis/type"] = np.dtype("f8")


def null_space(file: h5py.File) -> None:
    file.create_dataset("basis/null", data=h5py.Empty("f8"))


def promised_contiguous(file: h5py.File) -> None:
    space = h5s.create_simple((10**12,))
    h5d.create(file["basis"].id, b"promise", h5t.IEEE_F64LE, space)  # no storage is allocated before writing


def promised_chunks(file: h5py.File) -> None:
    plist = h5p.create(h5p.DATASET_CREATE)
    plist.set_chunk((1000,))
    plist.set_deflate(1)
    h5d.create(file["basis"].id, b"promise", h5t.IEEE_F64LE, h5s.create_simple((10**13,)), plist)


def deep(file: h5py.File) -> None:
    group = file["basis"]
    for _ in range(60):
        group = group.create_group("g")


def many(file: h5py.File) -> None:
    for k in range(300):
        file["basis"].attrs.create(f"a{k}", np.int64(k))


def bad_name(file: h5py.File) -> None:
    h5d.create(file["basis"].id, b"\xff\xfe", h5t.IEEE_F64LE, h5s.create_simple((0,)))


def missing_chunk(file: h5py.File) -> None:
    dataset = file.create_dataset("basis/holes", shape=(5000,), dtype="f8", chunks=(10,), compression=1)
    dataset[:4990] = np.random.default_rng(1).normal(size=4990)  # the last chunk would be made up


def half_precision(file: h5py.File) -> None:
    file["basis/half"] = np.zeros(3, "f2")


def filter_twice(file: h5py.File) -> None:
    plist = h5p.create(h5p.DATASET_CREATE)
    plist.set_chunk((10,))
    plist.set_deflate(1)
    plist.set_deflate(1)
    h5d.create(file["basis"].id, b"twice", h5t.IEEE_F64LE, h5s.create_simple((10,)), plist)


def huge_attribute(file: h5py.File) -> None:
    file["basis"].attrs.create("wide", np.zeros((0, 2**40), "i1"))


def array_type(file: h5py.File) -> None:
    file.create_dataset("basis/array", shape=(2,), dtype=np.dtype(("f8", (3,))))


REFUSALS: list[tuple[Callable[[h5py.File], None], str]] = [
    (external_link, "external link"), (soft_link, "soft link"), (soft_cycle, "soft link"), (hard_cycle, "cycle"),
    (root_cycle, "cycle"), (twice, "same object"), (external_storage, "another file"), (virtual, "other datasets"),
    (foreign_filter, "filter"), (checksum_filter, "filter"), (references, "references"),
    (region_references, "references"), (long_text, "variable-length"), (long_text_attribute, "variable-length"),
    (variable_length, "variable-length"), (compound, "compound"), (enumeration, "enumeration"), (opaque, "opaque"),
    (named_type, "named datatype"), (null_space, "no data space"), (promised_contiguous, "declares"),
    (promised_chunks, "declares"), (deep, "deep"), (many, "attributes"), (bad_name, "UTF-8"),
    (missing_chunk, "499 of its 500 chunks"), (half_precision, "float16"), (filter_twice, "repeatedly"),
    (huge_attribute, "bytes"), (array_type, "array type"),
]  # fmt: skip


@pytest.mark.parametrize(("harm", "words"), REFUSALS, ids=[harm.__name__ for harm, _ in REFUSALS])
def test_what_may_hurt_is_refused(harm: Callable[[h5py.File], None], words: str, tmp_path: Path) -> None:
    path = tmp_path / "x.qwfx"
    save(valid(), path)
    with h5py.File(path, "r+") as file:
        harm(file)
    for reader in (load, outline, open_raw, check_digests):
        with pytest.raises(UnsafeFileError, match=words) as caught:
            reader(path)
        assert caught.value.where.startswith(f"{path}:")
        assert caught.value.expected
        assert caught.value.remedy


def test_a_deflate_bomb_within_the_ratio_is_bounded_by_the_file(tmp_path: Path) -> None:
    path = tmp_path / "x.qwfx"
    save(valid(), path)
    with h5py.File(path, "r+") as file:
        file.create_dataset("extensions/x/zeros", shape=(10**8,), dtype="i1", chunks=(10**6,), compression=9)
        file["extensions/x/zeros"][:] = 0
    size = path.stat().st_size
    with open_raw(path) as raw:
        assert np.prod(raw.shape("/extensions/x/zeros")) <= 1032 * size


@pytest.mark.parametrize(
    ("content", "words"),
    [(b"", "empty"), (b"hello world", "not an HDF5"), (b"\x89HDF\r\n\x1a\n" + b"\0" * 50, "damaged")],
)
def test_files_that_are_none(content: bytes, words: str, tmp_path: Path) -> None:
    path = tmp_path / "x.qwfx"
    path.write_bytes(content)
    with pytest.raises(FileError, match=words):
        load(path)
    with pytest.raises(FileError, match="cannot be opened"):
        load(tmp_path / "absent")
    with pytest.raises(FileError, match="cannot be opened"):
        load(tmp_path)


def test_other_hdf5_files(tmp_path: Path) -> None:
    path = tmp_path / "other.h5"
    with h5py.File(path, "w") as file:
        file["x"] = np.zeros(3)
    with pytest.raises(FormatError, match="does not say"):
        load(path)


@pytest.mark.parametrize(
    ("member", "value", "words"),
    [
        ("system/positions", np.zeros(3), "axes"),
        ("system/positions", np.zeros((1, 3), "i4"), "float64"),
        ("system/atomic_numbers", np.array([2.0]), "int32"),
        ("system/labels", np.array([b"\xff\xff"]), "UTF-8"),
        ("system/atomic_numbers", np.array([2**40]), "fit int32"),
        ("basis/coefficients", np.array([1j]), "float64"),
    ],
)
def test_members_of_another_kind(member: str, value: np.ndarray, words: str, tmp_path: Path) -> None:
    path = tmp_path / "x.qwfx"
    save(valid(), path)
    with h5py.File(path, "r+") as file:
        del file[member]
        file[member] = value
    with pytest.raises(FormatError, match=words) as caught:
        load(path)
    assert member in caught.value.where


@pytest.mark.parametrize("member", ["system", "system/positions", "basis/exponents", "orbitals/spatial/coefficients"])
def test_members_that_are_missing(member: str, tmp_path: Path) -> None:
    path = tmp_path / "x.qwfx"
    save(valid(), path)
    with h5py.File(path, "r+") as file:
        del file[member]
    with pytest.raises(FormatError, match="missing"):
        load(path)


def read_all(path: Path) -> None:
    """Everything that reads a file, to the last byte."""
    outline(path)
    check_digests(path)
    wavefunction = load(path, lazy_above=64)
    for orbitals in wavefunction.orbitals.values():
        np.asarray(orbitals.coefficients)


@pytest.mark.parametrize("seed", range(4))
def test_damage_anywhere_gives_an_error_of_ours(seed: int, tmp_path: Path) -> None:
    source, path = tmp_path / "x.qwfx", tmp_path / "damaged.qwfx"
    save(valid(), source)
    whole = source.read_bytes()
    rng = random.Random(seed)
    errors = 0
    tracemalloc.start()
    for _ in range(100):
        data = bytearray(whole)
        if rng.random() < 0.2:
            data = data[: rng.randrange(len(data))]
        for _ in range(rng.choice([1, 1, 3, 20])):
            if data:
                data[rng.randrange(len(data))] = rng.randrange(256)
        path.write_bytes(data)
        try:
            read_all(path)
        except QwfxError as error:
            errors += str(path) in error.where
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert errors > 20
    assert peak < 1 << 28
