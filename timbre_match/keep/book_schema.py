"""How the bench book's database is laid out, and how an older layout is brought up to date.

Every row is written once and stays: what changes (a name, whether something is set aside, where a recording lies) is a
new row with the time of writing, and the latest counts. The database itself refuses changes and deletions, so no
program fault can lose what a maker has noted. It also makes two books easy to merge: the union of their rows.
"""

import sqlite3
from pathlib import Path

from timbre_match.errors import BookError, FileVersionError

APPLICATION_ID = 0x544D_4242
"""What stands in the file's header, so that no other program's database is taken for a bench book ("TMBB")."""

_VERSION_1 = """
CREATE TABLE instruments (
    id INTEGER PRIMARY KEY
);
-- Every identifier that an instrument goes by: one of its own, and those it had in books that were merged into this.
CREATE TABLE instrument_uuids (
    uuid TEXT PRIMARY KEY,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id)
);
CREATE INDEX instrument_uuids_of ON instrument_uuids (instrument_id);
CREATE TABLE instrument_facts (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id),
    written_at TEXT NOT NULL,
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    family TEXT NOT NULL,
    remarks TEXT NOT NULL,
    set_aside INTEGER NOT NULL CHECK (set_aside IN (0, 1))
);
CREATE INDEX instrument_facts_of ON instrument_facts (instrument_id, written_at, uuid);
CREATE TABLE stages (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    instrument_id INTEGER NOT NULL REFERENCES instruments (id),
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    UNIQUE (instrument_id, name_key)
);
CREATE TABLE sessions (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    stage_id INTEGER NOT NULL REFERENCES stages (id),
    logged_at TEXT NOT NULL,
    date TEXT NOT NULL,
    room TEXT NOT NULL,
    microphone TEXT NOT NULL,
    microphone_distance_m REAL,
    player TEXT NOT NULL,
    bow TEXT NOT NULL,
    strings TEXT NOT NULL,
    temperature_c REAL,
    humidity_percent REAL,
    a4_hz REAL,
    remarks TEXT NOT NULL
);
CREATE INDEX sessions_of ON sessions (stage_id);
CREATE TABLE session_marks (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    written_at TEXT NOT NULL,
    set_aside INTEGER NOT NULL CHECK (set_aside IN (0, 1))
);
CREATE INDEX session_marks_of ON session_marks (session_id, written_at, uuid);
-- One row for each distinct recording, whichever sessions it belongs to.
CREATE TABLE recordings (
    id INTEGER PRIMARY KEY,
    sha256 TEXT NOT NULL UNIQUE,
    file TEXT NOT NULL,
    size_bytes INTEGER NOT NULL
);
-- Where a recording lies: "path" on this machine, "kept" inside the book's own folder. The latest of each counts.
CREATE TABLE recording_places (
    id INTEGER PRIMARY KEY,
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    noted_at TEXT NOT NULL,
    kind TEXT NOT NULL CHECK (kind IN ('path', 'kept')),
    place NOT NULL
);
CREATE INDEX recording_places_of ON recording_places (recording_id, kind);
CREATE TABLE takes (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    role TEXT NOT NULL CHECK (role IN ('instrument', 'control')),
    number INTEGER NOT NULL,
    UNIQUE (session_id, role, number)
);
CREATE TABLE take_recordings (
    take_id INTEGER NOT NULL REFERENCES takes (id),
    number INTEGER NOT NULL,
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    PRIMARY KEY (take_id, number)
);
CREATE INDEX take_recordings_of ON take_recordings (recording_id);
-- The profile of a session's takes as a profile file has it, compressed (zlib). A later one stands for the earlier.
CREATE TABLE measurements (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    session_id INTEGER NOT NULL REFERENCES sessions (id),
    role TEXT NOT NULL CHECK (role IN ('instrument', 'control')),
    measured_at TEXT NOT NULL,
    measured_with TEXT NOT NULL,
    instrument TEXT NOT NULL,
    note_count INTEGER NOT NULL,
    profile_sha256 TEXT NOT NULL
);
CREATE INDEX measurements_of ON measurements (session_id, role, measured_at, uuid);
CREATE TABLE measured_recordings (
    measurement_id INTEGER NOT NULL REFERENCES measurements (id),
    recording_id INTEGER NOT NULL REFERENCES recordings (id),
    PRIMARY KEY (measurement_id, recording_id)
) WITHOUT ROWID;
CREATE TABLE profiles (
    measurement_id INTEGER PRIMARY KEY REFERENCES measurements (id),
    text_zlib BLOB NOT NULL
);
CREATE TABLE targets (
    id INTEGER PRIMARY KEY,
    uuid TEXT NOT NULL UNIQUE,
    added_at TEXT NOT NULL,
    name TEXT NOT NULL,
    name_key TEXT NOT NULL,
    text_sha256 TEXT NOT NULL,
    text_zlib BLOB NOT NULL
);
CREATE INDEX targets_of ON targets (name_key, added_at);
"""

UPGRADES: tuple[str, ...] = (_VERSION_1,)
"""Step n brings a book from version n to n + 1; a new book takes them all. What has been released is never changed."""

LARGE = frozenset({"profiles", "targets"})
"""Tables that hold nearly all of the bytes: left out of the check at opening; each of their texts has a SHA-256."""


def current_version() -> int:
    """Give the version of the layout that this program writes."""
    return len(UPGRADES)


def bring_up_to_date(connection: sqlite3.Connection, version: int) -> None:
    """Take a book from `version` to the current one, inside the transaction that the caller has begun.

    Either the whole of it is committed or nothing: SQLite keeps its version number (`user_version`) in the database
    itself, so that it changes with the tables.
    """
    for step in UPGRADES[version:]:
        # Changing tables is the one thing that the triggers may not stand in the way of.
        for name in _names(connection, "trigger"):
            connection.execute(f"DROP TRIGGER {name}")
        for statement in _statements(step):
            connection.execute(statement)
    for table in table_names(connection):
        for event in ("UPDATE", "DELETE"):
            connection.execute(
                f"CREATE TRIGGER {table}_no_{event.lower()} BEFORE {event} ON {table} "
                "BEGIN SELECT RAISE(ABORT, 'rows of the bench book are never changed or deleted'); END"
            )
    connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
    connection.execute(f"PRAGMA user_version = {current_version()}")


def table_names(connection: sqlite3.Connection) -> list[str]:
    """Names of all tables."""
    return _names(connection, "table")


def small_tables(connection: sqlite3.Connection) -> list[str]:
    """Names of the tables that are checked at every opening."""
    return [name for name in table_names(connection) if name not in LARGE]


def version_of(connection: sqlite3.Connection) -> int | None:
    """Version of the book's layout; None of a database with nothing in it, -1 of another program's."""
    application = connection.execute("PRAGMA application_id").fetchone()[0]
    version = connection.execute("PRAGMA user_version").fetchone()[0]
    if application == APPLICATION_ID and version > 0:
        return int(version)
    empty = connection.execute("SELECT COUNT(*) FROM sqlite_master").fetchone()[0] == 0
    return None if empty and not application and not version else -1


def refuse_version(version: int | None, where: Path) -> None:
    """Refuse a database that is no book, or a later one's.

    Raises
    ------
    BookError, FileVersionError
    """
    if version == -1:
        raise BookError(
            "this is a database of another program, not a bench book; it was left alone",
            where=str(where),
            cause="another file was named",
            remedy="name the bench book, or a new file",
        )
    if version is not None and version > current_version():
        raise FileVersionError(
            f"the bench book has version {version}; this program knows up to version {current_version()}",
            where=str(where),
            cause="it was written by a later version of this program",
            remedy="update this program; the book was left as it is",
        )


def _names(connection: sqlite3.Connection, kind: str) -> list[str]:
    rows = connection.execute(
        "SELECT name FROM sqlite_master WHERE type = ? AND name NOT LIKE 'sqlite!_%' ESCAPE '!' ORDER BY name", (kind,)
    )
    return [str(row[0]) for row in rows]


def _statements(script: str) -> list[str]:
    """The statements of a script one by one, since running it as a whole would commit the transaction first."""
    found, statement = [], ""
    for line in script.splitlines(keepends=True):
        statement += line
        if sqlite3.complete_statement(statement):
            found.append(statement)
            statement = ""
    return found
