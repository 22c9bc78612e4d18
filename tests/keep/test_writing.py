"""Whole or not at all, whatever goes wrong on the way."""

import errno
import os
import stat
from collections.abc import Callable
from pathlib import Path

import pytest

from timbre_match.errors import OutputError
from timbre_match.keep.writing import check_file_place, check_folder_place, make_folder, write_folder_whole, write_whole


def names(folder: Path) -> list[str]:
    return sorted(entry.name for entry in folder.iterdir())


def test_writes_and_replaces(tmp_path: Path) -> None:
    path = tmp_path / "profile.json"
    write_whole(path, b"first")
    write_whole(path, b"second")
    assert path.read_bytes() == b"second"
    assert names(tmp_path) == ["profile.json"]


@pytest.mark.skipif(os.name == "nt", reason="permissions work otherwise there")
def test_permissions_are_those_of_any_new_file_or_of_the_replaced_one(tmp_path: Path) -> None:
    (tmp_path / "plain").write_bytes(b"")
    write_whole(tmp_path / "new", b"data")
    assert (tmp_path / "new").stat().st_mode == (tmp_path / "plain").stat().st_mode
    (tmp_path / "new").chmod(0o640)
    write_whole(tmp_path / "new", b"more")
    assert stat.S_IMODE((tmp_path / "new").stat().st_mode) == 0o640


@pytest.mark.skipif(os.name == "nt", reason="symbolic links need special rights there")
def test_link_is_followed_and_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "there").mkdir()
    link = tmp_path / "link.json"
    link.symlink_to(tmp_path / "there" / "file.json")
    write_whole(link, b"data")
    assert link.is_symlink()
    assert (tmp_path / "there" / "file.json").read_bytes() == b"data"


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("missing/profile.json", "the folder does not exist"),
        ("file/profile.json", "is a file, not a folder"),
        ("", "this is a folder"),
        ("n" * 300, "the name is too long"),
        ("nul\0.json", "cannot be written here"),
    ],
)
def test_impossible_place_is_refused_in_plain_words(tmp_path: Path, name: str, message: str) -> None:
    (tmp_path / "file").write_bytes(b"kept")
    with pytest.raises(OutputError, match=message) as caught:
        write_whole(tmp_path / name, b"data")
    assert caught.value.where == str(tmp_path / name)
    with pytest.raises(OutputError, match=message) as early:
        check_file_place(tmp_path / name)
    assert str(early.value) == str(caught.value)
    assert caught.value.remedy
    assert names(tmp_path) == ["file"]


@pytest.mark.skipif(not Path("/dev/null").exists(), reason="this system has no such device")
def test_device_is_not_replaced_by_a_file() -> None:
    with pytest.raises(OutputError, match="a device or a pipe"):
        write_whole("/dev/null", b"data")
    assert stat.S_ISCHR(Path("/dev/null").stat().st_mode)


@pytest.mark.parametrize(
    ("number", "message"),
    [
        (errno.ENOSPC, "the disk is full; nothing was written"),
        (errno.EACCES, "you may not write here; nothing was written"),
        (errno.EROFS, "can be read, but not written to"),
        (errno.EIO, os.strerror(errno.EIO)),
    ],
)
def test_failure_leaves_the_old_file_and_nothing_else(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, number: int, message: str
) -> None:
    path = tmp_path / "profile.json"
    write_whole(path, b"old")

    def fail(_: int) -> None:
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(os, "fsync", fail)
    with pytest.raises(OutputError, match=message):
        write_whole(path, b"new")
    with pytest.raises(OutputError, match=message):
        write_folder_whole(tmp_path / "cycles", {"A4.wav": b"data"})
    assert path.read_bytes() == b"old"
    assert names(tmp_path) == ["profile.json"]


def test_interrupt_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(_: int) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    with pytest.raises(KeyboardInterrupt):
        write_whole(tmp_path / "profile.json", b"new")
    with pytest.raises(KeyboardInterrupt):
        write_folder_whole(tmp_path / "cycles", {"A4.wav": b"data"})
    assert names(tmp_path) == []


@pytest.mark.parametrize("exists", [False, True])
def test_folder_is_written(tmp_path: Path, exists: bool) -> None:
    folder = tmp_path / "cycles"
    if exists:
        folder.mkdir()
    write_folder_whole(folder, {"A4.wav": b"a", "B4.wav": b"b"})
    assert names(folder) == ["A4.wav", "B4.wav"]
    assert names(tmp_path) == ["cycles"]


def test_folder_with_files_is_left_alone(tmp_path: Path) -> None:
    (tmp_path / "diary.txt").write_bytes(b"mine")
    with pytest.raises(OutputError, match="already holds files"):
        write_folder_whole(tmp_path, {"A4.wav": b"a"})
    with pytest.raises(OutputError, match="this is a file"):
        write_folder_whole(tmp_path / "diary.txt", {"A4.wav": b"a"})
    assert names(tmp_path) == ["diary.txt"]


def test_a_place_that_can_be_written_is_left_as_it_is(tmp_path: Path) -> None:
    check_file_place(tmp_path / "new.json")
    check_folder_place(tmp_path / "new" / "newer")
    assert names(tmp_path) == []


@pytest.mark.parametrize("make", [check_folder_place, make_folder])
def test_a_file_in_the_place_of_a_folder_is_named(tmp_path: Path, make: Callable[[Path], None]) -> None:
    (tmp_path / "file").write_bytes(b"kept")
    with pytest.raises(OutputError, match="no folder can be made here") as caught:
        make(tmp_path / "file")
    assert caught.value.remedy
    assert (tmp_path / "file").read_bytes() == b"kept"
