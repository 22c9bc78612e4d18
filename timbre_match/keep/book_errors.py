"""What SQLite and the system say about the book, in plain words."""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from timbre_match.errors import BookDamagedError, BookError, BookInUseError, OutputError
from timbre_match.keep.book_copy import last_good
from timbre_match.keep.book_lock import holder
from timbre_match.keep.book_place import Place
from timbre_match.keep.writing import plain_write_errors

MISSING_DRIVE = "a slip in the name, or a drive that is not plugged in"


def damaged(place: Place, fault: str) -> BookDamagedError:
    """Make the error for a damaged book: what is wrong, and the last good back-up."""
    backup = last_good(place)
    return BookDamagedError(
        f"the bench book is damaged ({fault}); it was left as it is, and nothing was written",
        where=str(place.book),
        cause="a drive that is failing or was pulled out, or another program that wrote into the file",
        remedy="copy the book as it is to a safe place and restore a back-up of your own with `book restore FILE`"
        if backup is None
        else f"run `{restore_command(backup, place)}`: that is the last good back-up, and the damaged book is set "
        "aside under another name, not deleted",
    )


def restore_command(backup: Path, place: Place) -> str:
    """Write the command that puts a back-up in the place of the book."""
    return f'timbre-match book restore "{backup}"' + ("" if place.own else f' --book "{place.book}"')


def no_book(place: Place) -> BookError:
    """Make the error for a place without a book."""
    return BookError(
        "there is no bench book here yet",
        where=str(place.book),
        cause="" if place.own else MISSING_DRIVE,
        remedy="`timbre-match book add INSTRUMENT --family FAMILY` begins one",
    )


@contextmanager
def plain_errors(place: Place) -> Iterator[None]:
    """Turn what SQLite and the system say into errors of the book, in plain words."""
    try:
        yield
    except sqlite3.DatabaseError as error:
        raise _plain(error, place) from error
    except OSError as error:
        try:
            with plain_write_errors(place.book):
                raise
        except OutputError as plain:
            raise BookError(plain.what, where=str(error.filename or place.book), remedy=plain.remedy) from error


def _plain(error: sqlite3.DatabaseError, place: Place) -> BookError:
    where = str(place.book)
    code = getattr(error, "sqlite_errorcode", 0) & 0xFF
    if code in (sqlite3.SQLITE_BUSY, sqlite3.SQLITE_LOCKED):
        return BookInUseError(
            f"the bench book is held by {holder(place.lock)}",
            where=where,
            cause="another program has the file open and is writing to it",
            remedy="close that program, then run this command again; nothing was written",
        )
    if code in (sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB):
        return damaged(place, str(error))
    what, cause, remedy = {
        sqlite3.SQLITE_FULL: ("the disk is full", "", "make room, then run the command again"),
        sqlite3.SQLITE_READONLY: (
            "this bench book can be read, but not written to",
            "a write-protected drive or file",
            "take the protection off, or copy the book to a folder of your own",
        ),
        sqlite3.SQLITE_CANTOPEN: (
            "the bench book cannot be opened",
            "its folder may not be read or written, or a drive is not plugged in",
            "check the drive and the rights to the folder",
        ),
        sqlite3.SQLITE_IOERR: (
            "the drive did not take or deliver what was asked",
            "a full or failing drive, or one that was pulled out",
            "check the drive, then run the command again",
        ),
    }.get(code, (f"the bench book cannot be used ({error})", "", "run `timbre-match book check`"))
    return BookError(f"{what}; nothing was written", where=where, cause=cause, remedy=remedy)
