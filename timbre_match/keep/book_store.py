"""The bench book's file: how it is opened, and the one way to write to it."""

import contextlib
import os
import sqlite3
import struct
import time
from collections.abc import Iterator
from pathlib import Path

from timbre_match.errors import BookError, BookInUseError
from timbre_match.keep import book_lock
from timbre_match.keep.book_copy import connected, copy_database, dated, last_good, remove_with_side_files
from timbre_match.keep.book_errors import MISSING_DRIVE, damaged, no_book, plain_errors, restore_command
from timbre_match.keep.book_place import Place, size_of
from timbre_match.keep.book_schema import bring_up_to_date, current_version, refuse_version, small_tables, version_of
from timbre_match.keep.writing import plain_write_errors


class Store:
    """The open database of a book, and the one way to write to it."""

    def __init__(self, place: Place, *, create: bool) -> None:
        """Open the book; with `create`, begin a new one where there is none."""
        self.place = place
        self.read_only = False
        self._no_room = False
        with plain_errors(place):
            if not place.book.exists():
                _begin(place, create=create)
        with contextlib.ExitStack() as undo:
            with plain_errors(place):
                missing = _missing_bytes(place)
                if missing:
                    raise damaged(place, f"it is cut off: {missing:,} bytes are missing at its end")
                self.connection = self._connect()
                undo.callback(self.connection.close)
                self._file = _identity(place.book)
                self._take_over(create=create)
            undo.pop_all()

    def close(self) -> None:
        """Close the database; SQLite then clears away the files beside it."""
        self.connection.close()

    @contextlib.contextmanager
    def alone(self, doing: str) -> Iterator[book_lock.Held]:
        """Keep other writers out while the block runs.

        Raises
        ------
        BookError
            If the book can only be read, was exchanged for another meanwhile, or is being written to by another
            process for longer than :data:`~timbre_match.keep.book_lock.WAIT_S`.
        """
        if self._no_room:
            raise BookError(
                "the disk is full, so the bench book can be read, but not written to; nothing was written",
                where=str(self.place.book),
                remedy="make room, then run the command again",
            )
        if self.read_only:
            raise BookError(
                "this bench book can be read, but not written to; nothing was written",
                where=str(self.place.book),
                cause="a drive or folder that is write-protected, or belongs to someone else",
                remedy="copy the book to a folder of your own, and name it with --book",
            )
        with plain_errors(self.place), locked(self.place, doing) as lock:
            if _identity(self.place.book) != self._file:
                raise BookError(
                    "another book has been put in the place of this one meanwhile; nothing was written",
                    where=str(self.place.book),
                    remedy="run the command again",
                )
            _clear(lock.left_behind, self.place, self.connection)
            yield lock

    @contextlib.contextmanager
    def transaction(self) -> Iterator[sqlite3.Connection]:
        """Write rows, all of which are in the book when the block ends, or none; for use while :meth:`alone`."""
        self.connection.execute("BEGIN IMMEDIATE")
        try:
            yield self.connection
            self.connection.execute("COMMIT")
        except BaseException:
            if self.connection.in_transaction:
                self.connection.execute("ROLLBACK")
            raise

    @contextlib.contextmanager
    def writing(self, doing: str) -> Iterator[sqlite3.Connection]:
        """Write rows alone and in one transaction.

        Raises
        ------
        BookError
            As :meth:`alone`, and if the disk is full or did not take what was written.
        """
        with self.alone(doing), self.transaction() as connection:
            yield connection

    def _connect(self) -> sqlite3.Connection:
        book, write_ahead = self.place.book, self.place.write_ahead
        if os.access(book, os.W_OK) and os.access(book.parent, os.W_OK):
            try:
                return connected(book, "mode=rw")
            except sqlite3.OperationalError as error:
                # On a full disk SQLite has no room for its own files beside the book, which reading can do without.
                if not _lacks_room(error) or size_of(write_ahead):
                    raise
                self._no_room = True
        self.read_only = True
        return connected(book, "mode=ro" if size_of(write_ahead) else "mode=ro&immutable=1")

    def _take_over(self, *, create: bool) -> None:
        """Check whose and how old the database is, bring it up to date, and clear away what a killed process left."""
        version = _checked_version(self.connection, self.place)
        if version is None and not create:
            raise no_book(self.place)
        fault = quick_fault(self.connection)
        if fault:
            raise damaged(self.place, fault)
        if version is None or version < current_version():
            self._upgrade()
        if self.read_only:
            return
        # Of a book that was put back from a copy; while others have it open it goes without.
        with contextlib.suppress(sqlite3.OperationalError):
            self.connection.execute("PRAGMA journal_mode = WAL")
        if size_of(self.place.lock):
            with (
                contextlib.suppress(BookInUseError, OSError),
                book_lock.held(self.place.lock, "opening", wait_s=0.0) as lock,
            ):
                _clear(lock.left_behind, self.place, self.connection)

    def _upgrade(self) -> None:
        with self.alone("bringing the book up to date") as lock:
            # Another process may have done it while this one waited.
            version = _checked_version(self.connection, self.place)
            if version == current_version():
                return
            if version is not None:
                kept = dated(self.place.backups / f"before_version_{current_version()}.sqlite")
                copy_database(self.connection, kept, lock)
            self.connection.execute("PRAGMA journal_mode = WAL")
            with self.transaction():
                bring_up_to_date(self.connection, version or 0)


@contextlib.contextmanager
def locked(place: Place, doing: str) -> Iterator[book_lock.Held]:
    """Hold the book's lock, making the book's own folder if it is missing."""
    with plain_write_errors(place.files):
        place.files.mkdir(exist_ok=True)
    with book_lock.held(place.lock, doing) as lock:
        yield lock


def quick_fault(connection: sqlite3.Connection) -> str:
    """What is wrong with the book, as far as a few milliseconds can show; empty if nothing is.

    The tables whose pages are few are checked; the large texts carry a SHA-256 each, which is checked when they are
    read, and `check` reads everything.
    """
    for table in small_tables(connection):
        answer = str(connection.execute(f"PRAGMA quick_check('{table}')").fetchone()[0])
        if answer != "ok":
            return answer.splitlines()[-1]
    return ""


def _missing_bytes(place: Place) -> int:
    """How much shorter the file is than its head says; looked at before SQLite has it open.

    (On POSIX systems the closing of a file takes away the locks that SQLite holds on it in the same process.)
    """
    missing = 0
    for _ in range(3):
        with place.book.open("rb") as file:
            head = file.read(100)
        if len(head) < 100:
            return 0
        page_size, pages = struct.unpack(">H", head[16:18])[0], struct.unpack(">I", head[28:32])[0]
        missing = (65_536 if page_size == 1 else page_size) * pages - size_of(place.book)
        if missing <= 0 or size_of(place.write_ahead) or not head.startswith(b"SQLite format 3\0"):
            return 0
        # Another process may just be moving pages into the file.
        time.sleep(0.05)
    return missing


def _begin(place: Place, *, create: bool) -> None:
    """Make the file of a new book, empty; a reader, or a place with a book's back-ups, is refused."""
    folder = place.book.parent
    if not folder.is_dir() and not place.own:
        raise BookError(
            "the folder of this bench book does not exist",
            where=str(place.book),
            cause=MISSING_DRIVE,
            remedy="plug the drive in, or name another place with --book; nothing was written",
        )
    backup = last_good(place)
    if backup is not None or size_of(place.write_ahead):
        raise BookError(
            "the bench book's file is gone, but what belongs to it is here; no new book was begun in its place",
            where=str(place.book),
            cause="the file was moved or deleted",
            remedy="put it back" + ("" if backup is None else f", or run `{restore_command(backup, place)}`"),
        )
    if not create:
        raise no_book(place)
    folder.mkdir(parents=True, exist_ok=True)
    place.book.touch()


def _checked_version(connection: sqlite3.Connection, place: Place) -> int | None:
    version = version_of(connection)
    if version is None and last_good(place) is not None:
        raise damaged(place, "there is nothing in its file")
    refuse_version(version, place.book)
    return version


def _clear(left_behind: tuple[Path, ...], place: Place, connection: sqlite3.Connection) -> None:
    """Remove what a killed process had begun: temporary files, and copies of recordings that no row tells of."""
    for path in left_behind:
        unfinished = path.name.startswith(".timbre-match-") and path.suffix == ".part"
        if not unfinished and place.recordings in path.parents:
            kept = path.relative_to(place.recordings).as_posix()
            row = connection.execute("SELECT 1 FROM recording_places WHERE kind = 'kept' AND place = ?", (kept,))
            unfinished = row.fetchone() is None
        if unfinished:
            remove_with_side_files(path)


def _lacks_room(error: sqlite3.OperationalError) -> bool:
    return error.sqlite_errorcode & 0xFF in (sqlite3.SQLITE_FULL, sqlite3.SQLITE_IOERR, sqlite3.SQLITE_CANTOPEN)


def _identity(path: Path) -> tuple[int, int]:
    found = path.stat()
    return found.st_dev, found.st_ino
