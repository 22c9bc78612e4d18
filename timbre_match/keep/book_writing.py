"""Rows into the bench book; each function is called inside a transaction."""

import hashlib
import os
import sqlite3
import uuid
import zlib
from collections.abc import Iterable
from datetime import UTC, datetime, timedelta
from pathlib import Path

from timbre_match.keep.book_names import name_key
from timbre_match.keep.book_records import Conditions, Role

CONDITION_COLUMNS = (
    "date",
    "room",
    "microphone",
    "microphone_distance_m",
    "player",
    "bow",
    "strings",
    "temperature_c",
    "humidity_percent",
    "a4_hz",
    "remarks",
)


def now() -> str:
    """The time as rows have it: UTC, to the microsecond, so that sorting texts sorts times."""
    return datetime.now(UTC).isoformat(timespec="microseconds")


def new_uuid() -> str:
    """An identifier that no other row of any book has."""
    return str(uuid.uuid4())


def insert_instrument(connection: sqlite3.Connection, *, uuids: Iterable[str]) -> int:
    """Add an instrument without any facts yet."""
    instrument_id = _inserted(connection, "INSERT INTO instruments DEFAULT VALUES", ())
    for each in uuids:
        insert_instrument_uuid(connection, instrument_id, each)
    return instrument_id


def insert_instrument_uuid(connection: sqlite3.Connection, instrument_id: int, each: str) -> None:
    """Add an identifier by which another book knows an instrument."""
    connection.execute("INSERT INTO instrument_uuids (uuid, instrument_id) VALUES (?, ?)", (each, instrument_id))


def insert_facts(
    connection: sqlite3.Connection,
    instrument_id: int,
    *,
    name: str,
    family: str,
    remarks: str,
    set_aside: bool,
    fact_uuid: str | None = None,
    written_at: str | None = None,
) -> None:
    """Add what an instrument is called and is, from now on; what it was called before stays."""
    if written_at is None:
        latest = connection.execute(
            "SELECT MAX(written_at) FROM instrument_facts WHERE instrument_id = ?", (instrument_id,)
        ).fetchone()[0]
        written_at = _after(latest)
    connection.execute(
        "INSERT INTO instrument_facts (uuid, instrument_id, written_at, name, name_key, family, remarks, set_aside) "
        "VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        (fact_uuid or new_uuid(), instrument_id, written_at, name, name_key(name), family, remarks, int(set_aside)),
    )


def stage_id_of(connection: sqlite3.Connection, instrument_id: int, name: str, *, stage_uuid: str | None = None) -> int:
    """The stage of this name, added if the instrument does not have it yet."""
    row = connection.execute(
        "SELECT id FROM stages WHERE instrument_id = ? AND name_key = ?", (instrument_id, name_key(name))
    ).fetchone()
    if row is not None:
        return int(row[0])
    return _inserted(
        connection,
        "INSERT INTO stages (uuid, instrument_id, name, name_key) VALUES (?, ?, ?, ?)",
        (stage_uuid or new_uuid(), instrument_id, name, name_key(name)),
    )


def insert_session(
    connection: sqlite3.Connection,
    stage_id: int,
    conditions: Conditions,
    *,
    session_uuid: str | None = None,
    logged_at: str | None = None,
) -> int:
    """Add a session."""
    columns = ("uuid", "stage_id", "logged_at", *CONDITION_COLUMNS)
    values = [session_uuid or new_uuid(), stage_id, logged_at or now()]
    values += [getattr(conditions, column) for column in CONDITION_COLUMNS]
    return _inserted(
        connection,
        f"INSERT INTO sessions ({', '.join(columns)}) VALUES ({', '.join('?' * len(columns))})",
        tuple(values),
    )


def insert_session_mark(
    connection: sqlite3.Connection,
    session_id: int,
    *,
    set_aside: bool,
    mark_uuid: str | None = None,
    written_at: str | None = None,
) -> None:
    """Set a session aside from now on, or bring it back."""
    if written_at is None:
        latest = connection.execute(
            "SELECT MAX(written_at) FROM session_marks WHERE session_id = ?", (session_id,)
        ).fetchone()[0]
        written_at = _after(latest)
    connection.execute(
        "INSERT INTO session_marks (uuid, session_id, written_at, set_aside) VALUES (?, ?, ?, ?)",
        (mark_uuid or new_uuid(), session_id, written_at, int(set_aside)),
    )


def insert_take(
    connection: sqlite3.Connection,
    session_id: int,
    role: Role,
    number: int,
    recording_ids: Iterable[int],
    *,
    take_uuid: str | None = None,
) -> None:
    """Add a take with its recordings in order."""
    take_id = _inserted(
        connection,
        "INSERT INTO takes (uuid, session_id, role, number) VALUES (?, ?, ?, ?)",
        (take_uuid or new_uuid(), session_id, role, number),
    )
    connection.executemany(
        "INSERT INTO take_recordings (take_id, number, recording_id) VALUES (?, ?, ?)",
        [(take_id, place, recording_id) for place, recording_id in enumerate(recording_ids, start=1)],
    )


def recording_id_of(connection: sqlite3.Connection, *, sha256: str, file: str, size_bytes: int) -> int:
    """The recording with these bytes, added if the book does not have it yet."""
    row = connection.execute("SELECT id FROM recordings WHERE sha256 = ?", (sha256,)).fetchone()
    if row is not None:
        return int(row[0])
    return _inserted(
        connection, "INSERT INTO recordings (sha256, file, size_bytes) VALUES (?, ?, ?)", (sha256, file, size_bytes)
    )


def note_place(connection: sqlite3.Connection, recording_id: int, kind: str, place: Path | str) -> None:
    """Note where a recording lies, unless that is known."""
    stored = storable(place)
    latest = connection.execute(
        "SELECT place FROM recording_places WHERE recording_id = ? AND kind = ? ORDER BY id DESC LIMIT 1",
        (recording_id, kind),
    ).fetchone()
    if latest is None or latest[0] != stored:
        connection.execute(
            "INSERT INTO recording_places (recording_id, noted_at, kind, place) VALUES (?, ?, ?, ?)",
            (recording_id, now(), kind, stored),
        )


def insert_measurement(
    connection: sqlite3.Connection,
    session_id: int,
    role: Role,
    text: str,
    *,
    instrument: str,
    note_count: int,
    sha256s: Iterable[str],
    measured_with: str,
    measurement_uuid: str | None = None,
    measured_at: str | None = None,
) -> None:
    """Add the profile of a session's takes, as the text of a profile file; an earlier one stays."""
    if measured_at is None:
        latest = connection.execute(
            "SELECT MAX(measured_at) FROM measurements WHERE session_id = ? AND role = ?", (session_id, role)
        ).fetchone()[0]
        measured_at = _after(latest)
    measurement_id = _inserted(
        connection,
        "INSERT INTO measurements "
        "(uuid, session_id, role, measured_at, measured_with, instrument, note_count, profile_sha256) "
        "VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
        (
            measurement_uuid or new_uuid(),
            session_id,
            role,
            measured_at,
            measured_with,
            instrument,
            note_count,
            sha256_of(text),
        ),
    )
    connection.execute("INSERT INTO profiles (measurement_id, text_zlib) VALUES (?, ?)", (measurement_id, packed(text)))
    connection.executemany(
        "INSERT OR IGNORE INTO measured_recordings (measurement_id, recording_id) "
        "SELECT ?, id FROM recordings WHERE sha256 = ?",
        [(measurement_id, sha256) for sha256 in sha256s],
    )


def insert_target(
    connection: sqlite3.Connection,
    name: str,
    text: str,
    *,
    target_uuid: str | None = None,
    added_at: str | None = None,
) -> None:
    """Add a target, as the text of a target file; an earlier one of the same name stays."""
    if added_at is None:
        latest = connection.execute(
            "SELECT MAX(added_at) FROM targets WHERE name_key = ?", (name_key(name),)
        ).fetchone()[0]
        added_at = _after(latest)
    connection.execute(
        "INSERT INTO targets (uuid, added_at, name, name_key, text_sha256, text_zlib) VALUES (?, ?, ?, ?, ?, ?)",
        (target_uuid or new_uuid(), added_at, name, name_key(name), sha256_of(text), packed(text)),
    )


def sha256_of(text: str) -> str:
    """SHA-256 of a text, by which it is known again."""
    return hashlib.sha256(text.encode()).hexdigest()


def packed(text: str) -> bytes:
    """A text as it is stored: a profile takes a fifth of its room so."""
    return zlib.compress(text.encode())


def storable(place: Path | str) -> str | bytes:
    """A path as a database can hold it: text, or its bytes where they are no text."""
    text = os.fspath(place)
    try:
        text.encode()
    except UnicodeEncodeError:
        return os.fsencode(text)
    return text


def _after(latest: str | None) -> str:
    """The time now, but later than that of the row it follows, even if the clock has been put back."""
    if latest is None or latest < now():
        return now()
    return (datetime.fromisoformat(latest) + timedelta(microseconds=1)).isoformat(timespec="microseconds")


def _inserted(connection: sqlite3.Connection, statement: str, values: tuple[object, ...]) -> int:
    row_id = connection.execute(statement, values).lastrowid
    assert row_id is not None
    return row_id
