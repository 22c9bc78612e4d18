"""Rows of the bench book into records."""

import os
import sqlite3
import zlib
from collections import defaultdict
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from timbre_match.errors import BookDamagedError
from timbre_match.keep.book_names import name_key, unknown
from timbre_match.keep.book_records import (
    BookedInstrument,
    BookedRecording,
    BookedSession,
    BookedStage,
    BookedTake,
    Conditions,
    InstrumentLine,
    Measurement,
    TargetLine,
)
from timbre_match.keep.book_writing import CONDITION_COLUMNS, sha256_of

_CURRENT_FACTS = """
SELECT facts.instrument_id, facts.name, facts.family, facts.remarks, facts.set_aside, facts.name_key
FROM instrument_facts AS facts
WHERE facts.id = (
    SELECT id FROM instrument_facts WHERE instrument_id = facts.instrument_id
    ORDER BY written_at DESC, uuid DESC LIMIT 1
)
"""
_SET_ASIDE = """
COALESCE((SELECT set_aside FROM session_marks WHERE session_id = sessions.id
          ORDER BY written_at DESC, uuid DESC LIMIT 1), 0)
"""


@dataclass(frozen=True, kw_only=True, slots=True)
class Facts:
    """What an instrument is called and is at present."""

    instrument_id: int
    name: str
    family: str
    remarks: str
    set_aside: bool


def find_instrument(connection: sqlite3.Connection, name: str) -> Facts:
    """Look an instrument up by its present name.

    Raises
    ------
    UnknownNameError
        If there is none of this name; the message says which are nearly like it, and what one that had it is called
        now.
    """
    wanted = name_key(name)
    rows = connection.execute(_CURRENT_FACTS).fetchall()
    for row in rows:
        if row[5] == wanted:
            return _facts(row)
    error = unknown(
        name,
        [row[1] for row in rows],
        what="instrument",
        remedy="`timbre-match book list --all` shows all; `timbre-match book add INSTRUMENT --family FAMILY` adds one",
    )
    earlier = connection.execute("SELECT instrument_id FROM instrument_facts WHERE name_key = ?", (wanted,)).fetchone()
    if earlier is not None:
        present = next(row[1] for row in rows if row[0] == earlier[0])
        error.cause = f'it was renamed: it is called "{present}" now'
    raise error


def instrument_by_key(connection: sqlite3.Connection, key: str) -> Facts | None:
    """The instrument whose present name has this key, if there is one."""
    rows = connection.execute(f"{_CURRENT_FACTS} AND facts.name_key = ?", (key,)).fetchall()
    return _facts(rows[0]) if rows else None


def has_other(connection: sqlite3.Connection, key: str, instrument_id: int) -> bool:
    """Whether an instrument other than this one has a present name with this key."""
    return (
        connection.execute(
            f"{_CURRENT_FACTS} AND facts.name_key = ? AND facts.instrument_id <> ?", (key, instrument_id)
        ).fetchone()
        is not None
    )


def facts_of(connection: sqlite3.Connection, instrument_id: int) -> Facts:
    """What one instrument is called and is at present."""
    row = connection.execute(f"{_CURRENT_FACTS} AND facts.instrument_id = ?", (instrument_id,)).fetchone()
    return _facts(row)


def instrument_lines(connection: sqlite3.Connection) -> tuple[InstrumentLine, ...]:
    """All instruments in the order of their names."""
    stages: dict[int, set[int]] = defaultdict(set)
    days: dict[int, list[tuple[str, int, str]]] = defaultdict(list)
    for instrument_id, stage_id, stage, session_id, day in connection.execute(
        "SELECT stages.instrument_id, stages.id, stages.name, sessions.id, "
        "CASE WHEN sessions.date = '' THEN SUBSTR(sessions.logged_at, 1, 10) ELSE sessions.date END "
        f"FROM sessions JOIN stages ON stages.id = sessions.stage_id WHERE NOT {_SET_ASIDE}"
    ):
        stages[instrument_id].add(stage_id)
        days[instrument_id].append((day, session_id, stage))
    uuids = _instrument_uuids(connection)
    lines = []
    for row in sorted(connection.execute(_CURRENT_FACTS), key=lambda row: (row[5], row[0])):
        facts = _facts(row)
        last_day, _, last_stage = max(days[facts.instrument_id], default=("", 0, ""))
        lines.append(
            InstrumentLine(
                uuid=uuids[facts.instrument_id][0],
                name=facts.name,
                family=facts.family,
                remarks=facts.remarks,
                set_aside=facts.set_aside,
                stage_count=len(stages[facts.instrument_id]),
                session_count=len(days[facts.instrument_id]),
                last_stage=last_stage,
                last_day=last_day,
            )
        )
    return tuple(lines)


def read_instrument(connection: sqlite3.Connection, facts: Facts, recordings_folder: Path) -> BookedInstrument:
    """All that was logged of an instrument."""
    named = connection.execute(
        "SELECT name, written_at FROM instrument_facts WHERE instrument_id = ? ORDER BY written_at, uuid",
        (facts.instrument_id,),
    ).fetchall()
    earlier = dict.fromkeys(name for name, _ in named if name != facts.name)
    by_stage: dict[int, list[BookedSession]] = defaultdict(list)
    for stage_id, session in _sessions(connection, facts.instrument_id, recordings_folder):
        by_stage[stage_id].append(session)
    stages = []
    for stage_id, stage_uuid, stage in connection.execute(
        "SELECT id, uuid, name FROM stages WHERE instrument_id = ? ORDER BY id", (facts.instrument_id,)
    ):
        ordered = sorted(by_stage[stage_id], key=lambda session: (session.day, session.number))
        stages.append(BookedStage(uuid=stage_uuid, name=stage, sessions=tuple(ordered)))
    stages.sort(key=_when)
    return BookedInstrument(
        uuid=_instrument_uuids(connection)[facts.instrument_id][0],
        name=facts.name,
        earlier_names=tuple(earlier),
        family=facts.family,
        remarks=facts.remarks,
        set_aside=facts.set_aside,
        added_at=named[0][1],
        stages=tuple(stages),
    )


def profile_text(connection: sqlite3.Connection, measurement_uuid: str) -> str:
    """The text of a measurement's profile, as a profile file has it.

    Raises
    ------
    BookDamagedError
        If it is not what was written.
    """
    row = connection.execute(
        "SELECT text_zlib, profile_sha256 FROM profiles JOIN measurements ON measurements.id = measurement_id "
        "WHERE measurements.uuid = ?",
        (measurement_uuid,),
    ).fetchone()
    return unpacked(*row)


def target_lines(connection: sqlite3.Connection) -> tuple[TargetLine, ...]:
    """All targets, the latest of each name, in the order of their names."""
    latest = {
        key: TargetLine(uuid=uuid, name=name, added_at=added_at)
        for uuid, name, key, added_at in connection.execute(
            "SELECT uuid, name, name_key, added_at FROM targets ORDER BY added_at, uuid"
        )
    }
    return tuple(latest[key] for key in sorted(latest))


def target_text(connection: sqlite3.Connection, name: str) -> str:
    """The text of the latest target of this name, as a target file has it.

    Raises
    ------
    UnknownNameError
        If there is none.
    BookDamagedError
        If it is not what was written.
    """
    row = connection.execute(
        "SELECT text_zlib, text_sha256 FROM targets WHERE name_key = ? ORDER BY added_at DESC, uuid DESC LIMIT 1",
        (name_key(name),),
    ).fetchone()
    if row is None:
        names = [line.name for line in target_lines(connection)]
        raise unknown(name, names, what="target", remedy="`timbre-match book import T.json` takes one in")
    return unpacked(*row)


def unpacked(data: bytes, sha256: str) -> str:
    """A stored text, checked against its SHA-256.

    Raises
    ------
    BookDamagedError
    """
    try:
        text = zlib.decompress(data).decode()
    except (zlib.error, UnicodeDecodeError):
        text = ""
    if sha256_of(text) != sha256:
        raise BookDamagedError(
            "a measurement in the bench book is not what was written",
            cause="a drive that is failing, or another program that wrote into the file",
            remedy="run `timbre-match book check`, which says what else is wrong, and restore a back-up",
        )
    return text


def session_id_of(connection: sqlite3.Connection, session_uuid: str) -> int:
    """The row of a session."""
    return int(connection.execute("SELECT id FROM sessions WHERE uuid = ?", (session_uuid,)).fetchone()[0])


def path_of(stored: str | bytes) -> Path:
    """A path as it was before it was stored."""
    return Path(os.fsdecode(stored))


def _facts(row: tuple[int, str, str, str, int, str]) -> Facts:
    return Facts(instrument_id=row[0], name=row[1], family=row[2], remarks=row[3], set_aside=bool(row[4]))


def _instrument_uuids(connection: sqlite3.Connection) -> dict[int, list[str]]:
    found: dict[int, list[str]] = defaultdict(list)
    for uuid, instrument_id in connection.execute("SELECT uuid, instrument_id FROM instrument_uuids ORDER BY rowid"):
        found[instrument_id].append(uuid)
    return found


def _when(stage: BookedStage) -> tuple[bool, str, int]:
    """For the order of stages: by their first session that counts; those without one come last."""
    counting = [session for session in stage.sessions if not session.set_aside]
    first = counting[0] if counting else None
    return first is None, first.day if first else "", first.number if first else 0


def _sessions(
    connection: sqlite3.Connection, instrument_id: int, recordings_folder: Path
) -> Iterable[tuple[int, BookedSession]]:
    of_instrument = (
        "JOIN sessions ON sessions.id = {}.session_id JOIN stages ON stages.id = sessions.stage_id "
        "WHERE stages.instrument_id = ?"
    )
    measurements: dict[int, list[Measurement]] = defaultdict(list)
    for session_id, uuid, role, measured_at, measured_with, name, note_count in connection.execute(
        "SELECT measurements.session_id, measurements.uuid, role, measured_at, measured_with, instrument, note_count "
        f"FROM measurements {of_instrument.format('measurements')} ORDER BY measured_at, measurements.uuid",
        (instrument_id,),
    ):
        measurements[session_id].append(
            Measurement(
                uuid=uuid,
                role=role,
                measured_at=measured_at,
                measured_with=measured_with,
                instrument=name,
                note_count=note_count,
            )
        )
    recordings = _recordings(connection, instrument_id, recordings_folder)
    takes: dict[int, list[BookedTake]] = defaultdict(list)
    for take_id, session_id, uuid, role, number in connection.execute(
        "SELECT takes.id, takes.session_id, takes.uuid, role, number "
        f"FROM takes {of_instrument.format('takes')} ORDER BY role DESC, number",
        (instrument_id,),
    ):
        takes[session_id].append(BookedTake(uuid=uuid, role=role, number=number, recordings=tuple(recordings[take_id])))
    rows = connection.execute(
        f"SELECT sessions.id, stage_id, sessions.uuid, logged_at, {_SET_ASIDE}, {', '.join(CONDITION_COLUMNS)} "
        "FROM sessions JOIN stages ON stages.id = stage_id WHERE instrument_id = ? ORDER BY sessions.id",
        (instrument_id,),
    )
    for number, (session_id, stage_id, uuid, logged_at, set_aside, *conditions) in enumerate(rows, start=1):
        yield (
            stage_id,
            BookedSession(
                uuid=uuid,
                number=number,
                logged_at=logged_at,
                conditions=Conditions(**dict(zip(CONDITION_COLUMNS, conditions, strict=True))),
                set_aside=bool(set_aside),
                takes=tuple(takes[session_id]),
                measurements=tuple(measurements[session_id]),
            ),
        )


def _recordings(
    connection: sqlite3.Connection, instrument_id: int, recordings_folder: Path
) -> dict[int, list[BookedRecording]]:
    latest_place = (
        "(SELECT place FROM recording_places WHERE recording_id = recordings.id AND kind = '{}' "
        "ORDER BY id DESC LIMIT 1)"
    )
    found: dict[int, list[BookedRecording]] = defaultdict(list)
    for take_id, file, sha256, size_bytes, path, kept, measured in connection.execute(
        f"SELECT takes.id, file, sha256, size_bytes, {latest_place.format('path')}, {latest_place.format('kept')}, "
        "EXISTS (SELECT 1 FROM measured_recordings JOIN measurements ON measurements.id = measurement_id "
        "        WHERE recording_id = recordings.id AND measurements.session_id = takes.session_id) "
        "FROM take_recordings JOIN takes ON takes.id = take_id JOIN recordings ON recordings.id = recording_id "
        "JOIN sessions ON sessions.id = takes.session_id JOIN stages ON stages.id = sessions.stage_id "
        "WHERE stages.instrument_id = ? ORDER BY takes.id, take_recordings.number",
        (instrument_id,),
    ):
        found[take_id].append(
            BookedRecording(
                file=file,
                sha256=sha256,
                size_bytes=size_bytes,
                path="" if path is None else str(path_of(path)),
                kept=None if kept is None else recordings_folder / kept,
                measured=bool(measured),
            )
        )
    return found
