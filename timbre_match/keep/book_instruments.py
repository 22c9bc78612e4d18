"""Instruments added, renamed and set aside: each a new row of facts, the earlier ones staying as they are."""

import sqlite3

from timbre_match.advise.wording import plain
from timbre_match.errors import BookError
from timbre_match.keep import book_reading, book_writing
from timbre_match.keep.book_names import name_key, name_of
from timbre_match.keep.book_reading import Facts
from timbre_match.keep.book_records import whole_characters
from timbre_match.keep.book_store import Store


def add_instrument(store: Store, instrument: str, *, family: str, remarks: str) -> None:
    """Add an instrument.

    Raises
    ------
    UnknownNameError
        If nothing of the name can be seen.
    BookError
        If the book has an instrument of this name, or cannot be written to.
    """
    name = name_of(instrument, "the instrument")
    whole_characters(family + remarks)
    with store.writing("book add") as connection:
        _refuse_double(connection, name)
        instrument_id = book_writing.insert_instrument(connection, uuids=[book_writing.new_uuid()])
        book_writing.insert_facts(connection, instrument_id, name=name, family=family, remarks=remarks, set_aside=False)


def rename_instrument(store: Store, instrument: str, name: str) -> None:
    """Give an instrument another name.

    Raises
    ------
    UnknownNameError, BookError
        As :func:`add_instrument`, and if there is no such instrument.
    """
    name = name_of(name, "the instrument")
    with store.writing("book rename") as connection:
        facts = book_reading.find_instrument(connection, instrument)
        if name_key(name) != name_key(facts.name):
            _refuse_double(connection, name)
        _write_facts(connection, facts, name=name)


def set_aside(store: Store, instrument: str, *, session: int | None, aside: bool) -> None:
    """Set an instrument, or one of its sessions, aside, or bring it back.

    Raises
    ------
    UnknownNameError
        If there is no such instrument or session.
    BookError
        If the book cannot be written to.
    """
    from timbre_match.keep.book_again import session_of

    with store.writing("book aside") as connection:
        facts = book_reading.find_instrument(connection, instrument)
        if session is None:
            _write_facts(connection, facts, set_aside=aside)
            return
        found = session_of(book_reading.read_instrument(connection, facts, store.place.recordings), session)
        book_writing.insert_session_mark(
            connection, book_reading.session_id_of(connection, found.uuid), set_aside=aside
        )


def _refuse_double(connection: sqlite3.Connection, name: str) -> None:
    present = book_reading.instrument_by_key(connection, name_key(name))
    if present is not None:
        aside = ", and is set aside" if present.set_aside else ""
        raise BookError(
            f'there is an instrument "{plain(present.name)}" in the bench book already{aside}',
            cause="it was added before; capitals and spacing make no second name",
            remedy="choose another name, or bring it back with `book aside INSTRUMENT --back`"
            if present.set_aside
            else "log its sessions, or choose another name",
        )


def _write_facts(
    connection: sqlite3.Connection, facts: Facts, *, name: str | None = None, set_aside: bool | None = None
) -> None:
    book_writing.insert_facts(
        connection,
        facts.instrument_id,
        name=facts.name if name is None else name,
        family=facts.family,
        remarks=facts.remarks,
        set_aside=facts.set_aside if set_aside is None else set_aside,
    )
