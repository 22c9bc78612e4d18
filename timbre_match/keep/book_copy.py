"""Databases opened, checked and copied whole."""

import os
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from datetime import UTC, datetime
from pathlib import Path

from timbre_match.errors import BookDamagedError, TimbreMatchError
from timbre_match.keep import book_lock
from timbre_match.keep.book_place import SIDE_FILES, Place, size_of
from timbre_match.keep.book_schema import refuse_version, table_names, version_of
from timbre_match.keep.writing import sync_folder, temporary_beside

_PAGE_SIZE = 4096


def connected(path: Path, options: str) -> sqlite3.Connection:
    """Connect to a database that is there, and read from it once, so that a fault shows here."""
    connection = sqlite3.connect(
        f"{path.absolute().as_uri()}?{options}", uri=True, timeout=book_lock.WAIT_S, isolation_level=None
    )
    try:
        connection.execute(f"PRAGMA page_size = {_PAGE_SIZE}")
        connection.execute("PRAGMA foreign_keys = ON")
        # A command that has returned has its rows on the disk, even if the power fails the moment after.
        connection.execute("PRAGMA synchronous = FULL")
        connection.execute("SELECT COUNT(*) FROM sqlite_master").fetchone()
    except BaseException:
        connection.close()
        raise
    return connection


def open_read_only(path: Path) -> sqlite3.Connection:
    """Open any database for reading alone, and leave nothing beside it."""
    beside = path.with_name(f"{path.name}-wal")
    return connected(path, "mode=ro" if size_of(beside) else "mode=ro&immutable=1")


def copy_database(source: sqlite3.Connection, target: Path, lock: book_lock.Held) -> dict[str, int]:
    """Copy a whole database to a file, which is there complete and checked, or not at all.

    Returns
    -------
    dict of str to int
        Rows of each table.

    Raises
    ------
    BookDamagedError
        If the copy is not whole, which it cannot be where the source is damaged; then nothing is left of it.
    OSError, sqlite3.Error
        If it cannot be written.
    """
    with temporary_database(target, lock) as temporary:
        copy = sqlite3.connect(temporary, isolation_level=None)
        try:
            # The copy is nobody's until it is whole, so it needs no journal.
            copy.execute("PRAGMA journal_mode = OFF")
            copy.execute("PRAGMA synchronous = OFF")
            source.backup(copy)
        finally:
            copy.close()
        try:
            counts = checked_counts(temporary)
        except BookDamagedError as error:
            raise _not_whole(target, error.what) from error
        if counts != row_counts(source):
            raise _not_whole(target, "it does not hold the same rows")
        with temporary.open("r+b") as file:
            os.fsync(file.fileno())
        temporary.replace(target)
        sync_folder(target.parent)
    return counts


def _not_whole(target: Path, fault: str) -> BookDamagedError:
    return BookDamagedError(
        f"the copy of the book is not whole, and was not kept: {fault}",
        where=str(target),
        cause="the book itself is damaged, or one of the drives is failing",
        remedy="run `timbre-match book check`; if the book is sound, choose another place for the copy",
    )


@contextmanager
def temporary_database(target: Path, lock: book_lock.Held) -> Iterator[Path]:
    """Give a temporary name beside `target`, written down in the lock; what is there at the end is removed."""
    target.parent.mkdir(exist_ok=True)
    temporary = temporary_beside(target)
    lock.note_unfinished(temporary)
    try:
        yield temporary
    finally:
        remove_with_side_files(temporary)
    lock.note_finished(temporary)


def remove_with_side_files(path: Path) -> None:
    """Remove a database and what SQLite may have left beside it, as far as it is there."""
    for ending in ("", *SIDE_FILES):
        with suppress(OSError):
            path.with_name(path.name + ending).unlink()


def checked_counts(path: Path) -> dict[str, int]:
    """Check a file that is to be a whole bench book, and count its rows.

    Raises
    ------
    BookDamagedError
        If it is damaged, or no database.
    BookError, FileVersionError
        If it is another program's, or a later version's.
    """
    try:
        connection = open_read_only(path)
        try:
            version = version_of(connection)
            refuse_version(-1 if version is None else version, path)
            faults = damage_in(connection)
            counts = row_counts(connection)
        finally:
            connection.close()
    except sqlite3.DatabaseError as error:
        faults, counts = [str(error)], {}
    if faults:
        raise BookDamagedError(
            f"this is no whole bench book ({faults[0]})",
            where=str(path),
            cause="another kind of file, or one that was cut off or changed",
            remedy="choose another back-up",
        )
    return counts


def damage_in(connection: sqlite3.Connection) -> list[str]:
    """All that is wrong with a database: its pages, its indices, and rows that point to rows that are not there."""
    faults = []
    try:
        answers = [str(row[0]) for row in connection.execute("PRAGMA integrity_check(20)")]
        faults += [] if answers == ["ok"] else answers
        faults += [
            f"a row of {row[0]} points to one that is not there"
            for row in connection.execute("PRAGMA foreign_key_check")
        ]
    except sqlite3.DatabaseError as error:
        # So damaged that the check itself breaks off.
        faults.append(str(error))
    return faults


def row_counts(connection: sqlite3.Connection) -> dict[str, int]:
    """Rows of each table."""
    return {
        table: int(connection.execute(f"SELECT COUNT(*) FROM {table}").fetchone()[0])
        for table in table_names(connection)
    }


def dated(path: Path) -> Path:
    """A name with the time in it (UTC), free to use."""
    now = datetime.now(UTC).strftime("%Y-%m-%d_%H%M%S")
    stem, number = f"{path.stem}_{now}", 1
    while (
        found := path.with_name(f"{stem}{path.suffix}" if number == 1 else f"{stem}_{number}{path.suffix}")
    ).exists():
        number += 1
    return found


def last_good(place: Place) -> Path | None:
    """The latest of the book's own back-ups that is whole; None if there is none."""
    for backup in sorted(place.backups.glob("*.sqlite"), key=lambda path: path.stat().st_mtime_ns, reverse=True):
        with suppress(TimbreMatchError, OSError):
            checked_counts(backup)
            return backup
    return None
