"""Writing a file whole or not at all."""

from __future__ import annotations

import os
import stat
from pathlib import Path

import pytest

from qwfx.atomic import replacing
from qwfx.errors import FileError


def write(target: Path, text: str, **options: bool) -> None:
    with replacing(target, **options) as part:  # type: ignore[arg-type]
        part.write_text(text)


def names(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def test_new_and_replaced(tmp_path: Path) -> None:
    target = tmp_path / "x"
    write(target, "one")
    umask = os.umask(0)
    os.umask(umask)
    assert stat.S_IMODE(target.stat().st_mode) == 0o666 & ~umask
    target.chmod(0o640)
    write(target, "two")
    assert target.read_text() == "two"
    assert stat.S_IMODE(target.stat().st_mode) == 0o640
    assert names(tmp_path) == ["x"]


def test_a_failure_leaves_the_old_file(tmp_path: Path) -> None:
    target = tmp_path / "x"
    write(target, "one")

    def half() -> None:
        with replacing(target) as part:
            part.write_text("half")
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        half()
    assert target.read_text() == "one"
    assert names(tmp_path) == ["x"]


def test_what_a_link_points_to_is_replaced(tmp_path: Path) -> None:
    (tmp_path / "store").mkdir()
    real, link = tmp_path / "store" / "real", tmp_path / "link"
    write(real, "one")
    link.symlink_to(real)
    write(link, "two")
    assert link.is_symlink()
    assert real.read_text() == "two"


def test_no_overwriting(tmp_path: Path) -> None:
    target = tmp_path / "x"
    write(target, "one", overwrite=False)
    with pytest.raises(FileError, match="already exists"):
        write(target, "two", overwrite=False)
    other = tmp_path / "y"

    def too_late() -> None:
        with replacing(other, overwrite=False) as part:
            part.write_text("mine")
            other.write_text("made by someone else at the last moment")

    with pytest.raises(FileError, match="already exists"):
        too_late()
    assert other.read_text().startswith("made by")
    assert target.read_text() == "one"
    assert names(tmp_path) == ["x", "y"]


def test_what_is_no_file_is_not_replaced(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    (tmp_path / "folder").mkdir()
    for name, words in [("pipe", "no ordinary file"), ("folder", "is a folder")]:
        with pytest.raises(FileError, match=words):
            write(tmp_path / name, "x")
    with pytest.raises(FileError, match="no ordinary file"):
        write(Path("/dev/null"), "x")
    assert names(tmp_path) == ["folder", "pipe"]


def test_names_as_long_as_may_be(tmp_path: Path) -> None:
    target = tmp_path / ("é" * 127)  # 254 bytes; a longer temporary name would not do
    write(target, "x")
    assert names(tmp_path) == [target.name]


def test_where_nothing_can_be_written(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="cannot be written"):
        write(tmp_path / "absent" / "x", "x")
