"""Books of every older layout are brought up to date, whole or not at all, and a copy of the old one is kept."""

import sqlite3
from pathlib import Path

import pytest

import timbre_match as tm
from tests.keep.books import STEP_2, assert_whole, log_without_measuring
from timbre_match.errors import BookError
from timbre_match.keep import book_schema
from timbre_match.keep.book_copy import checked_counts
from timbre_match.keep.book_place import place_of

LAYOUTS = Path(__file__).parent / "book_layouts"


@pytest.fixture
def book(tmp_path: Path) -> Path:
    path = tmp_path / "book.sqlite"
    with tm.BenchBook.open(path) as opened:
        opened.add("Heron 7", family="violin")
    (tmp_path / "take.wav").write_bytes(b"sound")
    log_without_measuring(path, "Heron 7", "in the white", [tmp_path / "take.wav"])
    return path


@pytest.fixture
def later(book: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A program that is one version further than the one that wrote the book."""
    monkeypatch.setattr(book_schema, "UPGRADES", (*book_schema.UPGRADES, STEP_2))


def version_of(path: Path) -> int:
    connection = sqlite3.connect(path)
    version: int = connection.execute("PRAGMA user_version").fetchone()[0]
    connection.close()
    return version


@pytest.mark.parametrize("version", range(1, len(book_schema.UPGRADES) + 1))
def test_what_has_been_released_stays_readable(version: int, tmp_path: Path) -> None:
    # Written once, when that version was current, and never again.
    path = tmp_path / "book.sqlite"
    connection = sqlite3.connect(path)
    connection.executescript((LAYOUTS / f"version_{version}.sql").read_text(encoding="utf-8"))
    connection.close()
    assert version_of(path) == version
    with tm.BenchBook.open(path) as opened:
        assert [(line.name, line.family, line.session_count) for line in opened.list()] == [("Heron 7", "violin", 1)]
        assert opened.profile("Heron 7").stage == "in the white"
        opened.add("Wren", family="violin")
    assert_whole(path)
    assert version_of(path) == book_schema.current_version()


@pytest.mark.usefixtures("later")
def test_an_older_book_is_brought_up_to_date(book: Path) -> None:
    before = checked_counts(book)
    assert_whole(book)
    assert version_of(book) == 2
    counts = checked_counts(book)
    assert counts.pop("varnishes") == 1
    assert counts == before
    (kept,) = place_of(book).backups.glob("before_version_2_*.sqlite")
    assert version_of(kept) == 1
    assert checked_counts(kept) == before
    # New tables are as safe as the old ones.
    connection = sqlite3.connect(book)
    for table in ("varnishes", "sessions"):
        with pytest.raises(sqlite3.IntegrityError, match="never changed"):
            connection.execute(f"DELETE FROM {table}")
    connection.close()


def test_an_upgrade_that_fails_changes_nothing(book: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(book_schema, "UPGRADES", (*book_schema.UPGRADES, STEP_2 + "INSERT INTO nowhere VALUES (1);\n"))
    with pytest.raises(BookError):
        tm.BenchBook.open(book)
    assert version_of(book) == 1
    monkeypatch.undo()
    assert_whole(book)


@pytest.mark.usefixtures("later")
def test_an_older_back_up_is_restored_and_brought_up_to_date(book: Path, tmp_path: Path) -> None:
    (old,) = place_of(book).backups.iterdir()
    tm.BenchBook.restore(old, tmp_path / "new.sqlite")
    assert version_of(tmp_path / "new.sqlite") == 2
    assert version_of(old) == 1
