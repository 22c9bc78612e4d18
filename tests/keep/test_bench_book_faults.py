"""What can go wrong with a book: it is said plainly, with what to do, and nothing is lost."""

import errno
import os
import random
import shutil
import sqlite3
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from datetime import datetime, tzinfo
from pathlib import Path

import pytest

import timbre_match as tm
from tests.keep.books import assert_whole, log_without_measuring, write_down
from tests.keep.killing import log_side_by_side, prepare
from timbre_match.errors import (
    BookDamagedError,
    BookError,
    BookInUseError,
    FileVersionError,
    TimbreMatchError,
    UnknownNameError,
)
from timbre_match.keep import book_backup, book_lock, book_writing
from timbre_match.keep.book_place import place_of
from timbre_match.keep.book_store import Store


@pytest.fixture
def book(tmp_path: Path) -> Path:
    """A book with two sessions."""
    path = tmp_path / "place" / "book.sqlite"
    path.parent.mkdir()
    with tm.BenchBook.open(path) as opened:
        opened.add("Heron 7", family="violin")
    for number in range(2):
        log(path, number)
    return path


def log(book: Path, number: int, *, keep_audio: bool = False) -> str:
    file = book.parent / f"take_{number}.wav"
    file.write_bytes(random.Random(number).randbytes(2000))
    return log_without_measuring(book, "Heron 7", "in the white", [file], keep_audio=keep_audio)


def session_count(book: Path) -> int:
    with tm.BenchBook.open(book, create=False) as opened:
        return opened.list(all_of_them=True)[0].session_count


def restore_offered(error: TimbreMatchError, book: Path) -> None:
    """Do what the message says."""
    command = error.remedy.partition("`")[2].partition("`")[0]
    assert command.startswith("timbre-match book restore ")
    assert command.endswith(f'--book "{book}"')
    tm.BenchBook.restore(command.split('"')[1], book)


@pytest.mark.parametrize("seed", range(4))
def test_a_damaged_book_is_set_aside_and_a_back_up_offered(seed: int, book: Path) -> None:
    whole = book.read_bytes()
    noise = random.Random(seed)
    # From the second page on; the head is another test's.
    at = 4096 * noise.randrange(1, 30)
    spoiled = whole[:at] + noise.randbytes(4096) + whole[at + 4096 :]
    book.write_bytes(spoiled)
    with pytest.raises(BookDamagedError, match="damaged") as error:
        tm.BenchBook.open(book)
    assert book.read_bytes() == spoiled
    restore_offered(error.value, book)
    assert_whole(book)
    assert session_count(book) == 2
    (aside,) = book.parent.glob("book_replaced_*.sqlite")
    assert aside.read_bytes() == spoiled


@pytest.mark.parametrize("share", [0.0, 0.001, 0.03, 0.5, 0.9, 0.999])
def test_a_book_that_is_cut_off(share: float, book: Path) -> None:
    whole = book.read_bytes()
    book.write_bytes(whole[: int(share * len(whole))])
    with pytest.raises(BookDamagedError) as error:
        tm.BenchBook.open(book)
    restore_offered(error.value, book)
    assert session_count(book) == 2


def test_a_measurement_that_is_not_what_was_written(book: Path) -> None:
    with sqlite3.connect(book) as connection:
        data = connection.execute("SELECT text_zlib FROM profiles ORDER BY measurement_id DESC").fetchone()[0]
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    connection.close()
    whole = book.read_bytes()
    at = whole.index(data[:64])
    book.write_bytes(whole[: at + 20] + bytes([whole[at + 20] ^ 1]) + whole[at + 21 :])
    with tm.BenchBook.open(book) as opened:
        with pytest.raises(BookDamagedError, match="not what was written"):
            opened.profile("Heron 7", session=2)
        assert len(opened.profile("Heron 7", session=1).takes) == 1
        assert [fault.split(" is ")[0] for fault in opened.check().damage] == ["row 2 of profiles"]


def test_a_damaged_back_up_is_not_offered_nor_restored(book: Path) -> None:
    backups = sorted(place_of(book).backups.iterdir(), key=lambda path: path.stat().st_mtime_ns)
    assert len(backups) == 2
    backups[1].write_bytes(backups[1].read_bytes()[:-5000])
    before = book.read_bytes()
    with pytest.raises(BookDamagedError, match="no whole bench book"):
        tm.BenchBook.restore(backups[1], book)
    assert book.read_bytes() == before
    book.write_bytes(b"")
    with pytest.raises(BookDamagedError) as error:
        tm.BenchBook.open(book)
    assert str(backups[0]) in error.value.remedy


def test_a_later_version_is_left_alone(book: Path) -> None:
    connection = sqlite3.connect(book)
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    before = book.read_bytes()
    with pytest.raises(FileVersionError, match="version 99") as error:
        tm.BenchBook.open(book)
    assert "update this program" in error.value.remedy
    with pytest.raises(FileVersionError):
        tm.BenchBook.restore(book, book.with_name("other.sqlite"))
    assert book.read_bytes() == before


def test_what_is_no_book_is_left_alone(book: Path, tmp_path: Path) -> None:
    letter = tmp_path / "letter.txt"
    letter.write_text("Dear Sir, this is no bench book.\n" * 100)
    stranger = tmp_path / "stranger.sqlite"
    connection = sqlite3.connect(stranger)
    connection.execute("CREATE TABLE songs (name TEXT)")
    connection.close()
    before = letter.read_bytes(), stranger.read_bytes()
    for path in (letter, stranger):
        with pytest.raises(BookError):
            tm.BenchBook.open(path)
        with pytest.raises(BookError):
            tm.BenchBook.restore(path, book)
        with tm.BenchBook.open(book) as opened, pytest.raises(TimbreMatchError):
            opened.backup(path)
    assert (letter.read_bytes(), stranger.read_bytes()) == before
    assert_whole(book)


def test_a_drive_that_is_not_there(tmp_path: Path) -> None:
    gone = tmp_path / "drive" / "book.sqlite"
    for create in (True, False):
        with pytest.raises(BookError, match="folder of this bench book does not exist") as error:
            tm.BenchBook.open(gone, create=create)
        assert "not plugged in" in error.value.cause
    assert list(tmp_path.iterdir()) == []


def test_no_empty_book_takes_the_place_of_one_that_is_gone(book: Path) -> None:
    book.rename(book.with_name("elsewhere"))
    with pytest.raises(BookError, match="no new book was begun") as error:
        tm.BenchBook.open(book)
    assert not book.exists()
    restore_offered(error.value, book)
    assert session_count(book) == 2


def test_a_reader_begins_no_book(tmp_path: Path) -> None:
    with pytest.raises(BookError, match="no bench book here yet"):
        tm.BenchBook.open(tmp_path / "book.sqlite", create=False)
    assert list(tmp_path.iterdir()) == []


@pytest.fixture
def protected(book: Path) -> Iterator[Path]:
    """A book in a folder that may be read and not written to, by a user to whom that means something."""
    folder = Path(tempfile.mkdtemp())
    shutil.copy(book, folder / "book.sqlite")
    folder.chmod(0o555)
    (folder / "book.sqlite").chmod(0o444)
    superuser = os.name != "nt" and os.geteuid() == 0
    if superuser:
        os.setresuid(65534, 65534, 0)
    try:
        yield folder / "book.sqlite"
    finally:
        if superuser:
            os.setresuid(0, 0, 0)
        folder.chmod(0o755)
        shutil.rmtree(folder)


@pytest.mark.skipif(os.name == "nt", reason="permissions work otherwise there")
def test_a_book_that_may_only_be_read(protected: Path) -> None:
    with tm.BenchBook.open(protected) as opened:
        assert opened.read_only
        assert opened.list()[0].session_count == 2
        assert opened.show("Heron 7").stages
        for write in (
            lambda: opened.add("Wren", family="violin"),
            lambda: opened.rename("Heron 7", "Wren"),
            lambda: opened.log("Heron 7", ["nowhere.wav"], stage="varnished"),
        ):
            with pytest.raises(BookError, match="can be read, but not written to") as error:
                write()
            assert error.value.remedy
    assert [path.name for path in protected.parent.iterdir()] == [protected.name]


def small_disk(folder: Path) -> bool:
    """Try to put a disk of 2 MB in the place of a folder."""
    command = ["mount", "-t", "tmpfs", "-o", "size=2m", "tmpfs", str(folder)]
    try:
        return subprocess.run(command, capture_output=True, check=False).returncode == 0
    except OSError:
        return False


def fill(ballast: Path, *, leave_bytes: int) -> None:
    """Write to a file until the disk is full, then make a little room."""
    handle = os.open(ballast, os.O_WRONLY | os.O_CREAT)
    length = 0
    try:
        while True:
            length += os.write(handle, bytes(4096))
    except OSError:
        os.ftruncate(handle, max(0, length - leave_bytes))
    finally:
        os.close(handle)


@pytest.mark.parametrize("keep_audio", [False, True])
def test_a_full_disk(keep_audio: bool, tmp_path: Path) -> None:
    disk = tmp_path / "disk"
    disk.mkdir()
    if not small_disk(disk):
        pytest.skip("only the superuser can make a small disk, and not everywhere")
    try:
        book = disk / "book.sqlite"
        with tm.BenchBook.open(book) as opened:
            opened.add("Heron 7", family="violin")
        logged = [log(book, 0)]
        ballast = disk / "ballast"
        fill(ballast, leave_bytes=16384)
        said = []
        for number in range(1, 40):
            take = tmp_path / f"take_{number}.wav"
            take.write_bytes(random.Random(number).randbytes(3000))
            try:
                logged.append(write_down(book, "Heron 7", "varnished", [take], keep_audio=keep_audio)[0])
            except BookError as error:
                said.append(error)
                break
        assert said
        assert "disk is full" in str(said[0])
        assert "nothing was written" in str(said[0])
        # It can still be read.
        assert session_count(book) == len(logged)
        ballast.unlink()
        logged.append(log(book, 99))
        assert_whole(book, logged)
    finally:
        subprocess.run(["umount", str(disk)], check=True)


def test_a_database_that_cannot_grow(book: Path) -> None:
    store = Store(place_of(book), create=False)
    pages = store.connection.execute("PRAGMA page_count").fetchone()[0]
    store.connection.execute(f"PRAGMA max_page_count = {pages}")
    opened = tm.BenchBook(store)
    with pytest.raises(BookError, match="the disk is full; nothing was written"):
        opened.add("x" * 100_000, family="violin")
    opened.close()
    assert_whole(book)


def test_a_back_up_that_fails_leaves_the_session(book: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*_: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(book_backup, "copy_database", full)
    take = tmp_path / "take.wav"
    take.write_bytes(b"sound")
    (trouble,) = write_down(book, "Heron 7", "varnished", [take])[1]
    assert "is in the book" in trouble
    assert os.strerror(errno.ENOSPC) in trouble
    assert session_count(book) == 3


def test_a_damaged_book_is_not_backed_up_over_a_good_one(book: Path, tmp_path: Path) -> None:
    connection = sqlite3.connect(book)
    connection.execute("DROP TRIGGER profiles_no_delete")
    connection.execute("DELETE FROM profiles WHERE measurement_id = 1")
    root = connection.execute("SELECT rootpage FROM sqlite_master WHERE name = 'profiles'").fetchone()[0]
    connection.commit()
    connection.close()
    whole = book.read_bytes()
    book.write_bytes(whole[: 4096 * (root - 1)] + bytes(4096) + whole[4096 * root :])
    good = {path: path.read_bytes() for path in place_of(book).backups.iterdir()}
    with tm.BenchBook.open(book) as opened:
        checked = opened.check()
        assert not checked.sound
        assert checked.last_good in good
        with pytest.raises(BookDamagedError, match="not whole, and was not kept"):
            opened.backup(tmp_path / "copy.sqlite")
    assert not (tmp_path / "copy.sqlite").exists()
    assert {path: path.read_bytes() for path in place_of(book).backups.iterdir()} == good


@pytest.mark.parametrize("seconds_back", [10, 86_400])
def test_a_clock_that_was_put_back(seconds_back: int, book: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    class Earlier(datetime):
        @classmethod
        def now(cls, tz: tzinfo | None = None) -> "Earlier":
            return cls.fromtimestamp(time.time() - seconds_back, tz)

    monkeypatch.setattr(book_writing, "datetime", Earlier)
    with tm.BenchBook.open(book) as opened:
        for name in ("Wren", "Lark"):
            opened.rename(opened.list()[0].name, name)
        assert opened.show("Lark").earlier_names == ("Heron 7", "Wren")
        opened.set_aside("Lark", session=1)
        opened.set_aside("Lark", session=1, aside=False)
        assert opened.list()[0].session_count == 2


def test_back_ups_are_the_last_three(book: Path) -> None:
    for number in range(2, 7):
        log(book, number)
    backups = sorted(place_of(book).backups.iterdir(), key=lambda path: path.stat().st_mtime_ns)
    assert len(backups) == 3
    counts = []
    for backup in backups:
        connection = sqlite3.connect(backup)
        counts.append(connection.execute("SELECT COUNT(*) FROM sessions").fetchone()[0])
        connection.close()
    assert counts == [5, 6, 7]


HOLDING = """
import sys, time
from pathlib import Path
from timbre_match.keep.book_lock import held
with held(Path(sys.argv[1]), "book log"):
    print("held", flush=True)
    time.sleep(float(sys.argv[2]))
"""


def hold(book: Path, seconds: float) -> "subprocess.Popen[str]":
    """Let another process hold the book."""
    other = subprocess.Popen(
        [sys.executable, "-c", HOLDING, str(place_of(book).lock), str(seconds)], stdout=subprocess.PIPE, text=True
    )
    assert other.stdout is not None
    assert other.stdout.readline() == "held\n"
    return other


def test_a_book_that_is_written_to_is_waited_for(book: Path) -> None:
    with hold(book, 0.5) as other:
        log(book, 2)
        assert other.wait(10) == 0
    assert session_count(book) == 3


def test_who_holds_the_book_is_said(book: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(book_lock, "WAIT_S", 0.3)
    with hold(book, 60.0) as other:
        begun = time.monotonic()
        with pytest.raises(BookInUseError, match=f'process {other.pid} on this machine.* at "book log"'):
            log(book, 2)
        assert time.monotonic() - begun >= 0.3
        # Reading does not wait.
        assert session_count(book) == 2
        other.kill()
    log(book, 3)
    assert session_count(book) == 3


def test_another_program_that_holds_the_database(book: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(book_lock, "WAIT_S", 0.2)
    other = sqlite3.connect(book, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(BookInUseError, match="another program"):
        log(book, 2)
    other.execute("ROLLBACK")
    other.close()
    log(book, 2)


def test_a_recording_that_changes_while_it_is_copied(book: Path) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(shutil, "copyfileobj", lambda source, copy, length: copy.write(b"other bytes"))
        with pytest.raises(BookError, match="not what was measured"):
            log(book, 7, keep_audio=True)
    assert session_count(book) == 2
    assert_whole(book)


def test_several_processes_log_at_once(tmp_path: Path) -> None:
    prepare("logging", tmp_path)
    said = log_side_by_side(tmp_path, 2, 8)
    assert len(set(said)) == 16
    assert_whole(tmp_path / "book.sqlite", said)


def test_an_unknown_instrument_is_known_before_the_measuring(book: Path) -> None:
    # Had a recording been read first, the message would be about that.
    with tm.BenchBook.open(book) as opened, pytest.raises(UnknownNameError, match="Wren"):
        opened.log("Wren", ["nowhere.wav"], stage="varnished")
