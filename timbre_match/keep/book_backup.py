"""Back-ups of the bench book: whole, checked, and put back without losing what they replace."""

import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from timbre_match.errors import BookDamagedError, BookError
from timbre_match.keep import book_lock
from timbre_match.keep.book_audio import copy_recording
from timbre_match.keep.book_copy import (
    checked_counts,
    connected,
    copy_database,
    dated,
    open_read_only,
    row_counts,
)
from timbre_match.keep.book_errors import MISSING_DRIVE, plain_errors
from timbre_match.keep.book_place import SIDE_FILES, Place, size_of
from timbre_match.keep.book_schema import version_of
from timbre_match.keep.book_store import Store, locked
from timbre_match.keep.writing import check_file_place, sync_folder, temporary_beside

KEPT_BACKUPS = 3
_SMALL_BYTES = 32 << 20
_LARGE_EVERY_S = 86_400.0


def back_up(store: Store, file: Path) -> dict[str, int]:
    """Write the whole book, and the recordings that it keeps, to another place.

    The copy is a bench book itself: FILE, and beside it FILE's own folder with the recordings.

    Returns
    -------
    dict of str to int
        Rows of each table.

    Raises
    ------
    BookError
        If it cannot be written whole; then nothing is left of it. A file that is there is replaced only if it is a
        bench book.
    """
    check_file_place(file)
    target = Place(book=Path(os.path.realpath(file)))
    if target.book == store.place.book:
        raise BookError("this is the bench book itself", where=str(file), remedy="name another file")
    if size_of(target.book):
        checked_counts(target.book)
    if size_of(target.write_ahead):
        raise BookError("this book is open in another program", where=str(file), remedy="name another file")
    with _alone(store, "book backup") as lock, plain_errors(target):
        # The recordings first, so that where the book is, all that it keeps is.
        _copy_kept(store.connection, store.place, target, lock)
        return copy_database(store.connection, target.book, lock)


def back_up_of_itself(store: Store, lock: book_lock.Held) -> None:
    """Make the back-up that follows a session, and let go of the oldest ones.

    A small book is copied every time, a large one once a day. Only a copy that is whole takes the place of others.

    Raises
    ------
    BookError, OSError, sqlite3.Error
        If it cannot be made; the session is in the book all the same.
    """
    made = sorted(store.place.backups.glob("after_*.sqlite"), key=lambda path: path.stat().st_mtime_ns)
    if made and size_of(store.place.book) > _SMALL_BYTES:
        age_s = time.time() - made[-1].stat().st_mtime
        if 0.0 <= age_s < _LARGE_EVERY_S:
            return
    copy_database(store.connection, dated(store.place.backups / "after.sqlite"), lock)
    for old in made[: max(0, len(made) + 1 - KEPT_BACKUPS)]:
        old.unlink()


def restore(file: Path, place: Place) -> tuple[dict[str, int], Path | None]:
    """Put a back-up in the place of the book; what was there stays beside it under a dated name.

    Returns
    -------
    counts : dict of str to int
        Rows of each table.
    replaced : Path or None
        Where the book that was there lies now.

    Raises
    ------
    BookDamagedError, BookError, FileVersionError
        If the file is no whole bench book; then nothing is changed.
    """
    if not file.is_file():
        raise BookError("there is no such file", where=str(file), cause=MISSING_DRIVE, remedy="check the name")
    if place.book.exists() and file.samefile(place.book):
        raise BookError("this is the bench book itself", where=str(file), remedy="name a back-up of it")
    counts = checked_counts(file)
    with plain_errors(place):
        if place.own:
            place.book.parent.mkdir(parents=True, exist_ok=True)
        check_file_place(place.book)
        with locked(place, "book restore") as lock:
            source = open_read_only(file)
            try:
                _copy_kept(source, Place(book=file), place, lock)
                replaced = _put_back(source, place, lock)
            finally:
                source.close()
    return counts, replaced


def _put_back(source: sqlite3.Connection, place: Place, lock: book_lock.Held) -> Path | None:
    replaced = dated(place.book.with_name(f"{place.book.stem}_replaced.sqlite"))
    if not size_of(place.book):
        _move_side_files(place.book, replaced)
        copy_database(source, place.book, lock)
        return None
    present = _sound(place)
    if present is None:
        _set_aside(source, place, replaced, lock)
        return replaced
    try:
        copy_database(present, replaced, lock)
        # One transaction of the present book: whoever has it open sees the one or the other, as a whole.
        source.backup(present)
        if row_counts(present) != row_counts(source):
            raise BookDamagedError("the restored book does not hold the same rows", where=str(place.book))
    finally:
        present.close()
    return replaced


def _sound(place: Place) -> sqlite3.Connection | None:
    """Open the present book for being replaced; None if it is not whole enough to be copied, or empty."""
    try:
        connection = open_read_only(place.book)
        try:
            empty = version_of(connection) is None
        finally:
            connection.close()
        if empty:
            return None
        checked_counts(place.book)
        connection = connected(place.book, "mode=rw")
        try:
            connection.execute("PRAGMA journal_mode = WAL")
        except BaseException:
            connection.close()
            raise
    except BookDamagedError:
        return None
    except sqlite3.DatabaseError as error:
        if error.sqlite_errorcode & 0xFF in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB):
            return None
        raise
    return connection


def _set_aside(source: sqlite3.Connection, place: Place, replaced: Path, lock: book_lock.Held) -> None:
    """Move a damaged book and what SQLite left beside it to another name, and put a whole one in its place."""
    whole = temporary_beside(place.book)
    lock.note_unfinished(whole)
    try:
        copy_database(source, whole, lock)
        _move_side_files(place.book, replaced)
        try:
            # A second name for the damaged one, so that at no moment there is no book in the place.
            replaced.hardlink_to(place.book)
        except OSError:
            place.book.replace(replaced)
        whole.replace(place.book)
        sync_folder(place.book.parent)
    finally:
        whole.unlink(missing_ok=True)


def _move_side_files(book: Path, to: Path) -> None:
    """Move what SQLite left beside a book, which it would otherwise play into the one that comes in its place."""
    for ending in SIDE_FILES:
        beside = book.with_name(book.name + ending)
        if beside.exists():
            beside.replace(to.with_name(to.name + ending))


def _copy_kept(source: sqlite3.Connection, from_place: Place, to_place: Place, lock: book_lock.Held) -> None:
    """Copy the recordings that one book keeps into the folder of another, as far as they are there."""
    kept = source.execute(
        "SELECT DISTINCT place, sha256 FROM recording_places JOIN recordings ON recordings.id = recording_id "
        "WHERE kind = 'kept'"
    ).fetchall()
    for name, sha256 in kept:
        original, copy = from_place.recordings / name, to_place.recordings / name
        if original.is_file() and not copy.exists():
            copy_recording(original, copy, sha256, lock)


@contextmanager
def _alone(store: Store, doing: str) -> Iterator[book_lock.Held]:
    """Keep writers out of a book while it is copied; one that can only be read has none."""
    if store.read_only:
        yield book_lock.Held(handle=None, doing=doing)
    else:
        with store.alone(doing) as lock:
            yield lock
