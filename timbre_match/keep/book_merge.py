"""A book's rows out to a file, and another book's rows in, without doubles.

Rows are written once and never change, so two books are merged by taking the union of their rows, known by their
identifiers. What a maker has added on two machines under one name is one instrument, and goes by both identifiers.
"""

import json
import sqlite3
import uuid as uuids
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

from timbre_match.compare.target import Target
from timbre_match.errors import SavedFileError, UnknownNameError
from timbre_match.keep import book_reading, book_writing, layout
from timbre_match.keep.book_layout import (
    BOOK_FORMAT,
    BookBody,
    BookedInstrumentLayout,
    BookedSessionLayout,
    BookedTargetLayout,
)
from timbre_match.keep.book_names import name_key, name_of
from timbre_match.keep.book_records import Conditions, Merged
from timbre_match.keep.book_session import profile_about, write_profile
from timbre_match.keep.book_store import Store
from timbre_match.keep.checking import check, read_saved
from timbre_match.keep.files import check_output, profile_from_json, target_from_json, target_to_json
from timbre_match.keep.writing import write_whole

Json = dict[str, Any]


def export_book(connection: sqlite3.Connection, file: Path, names: Sequence[str]) -> None:
    """Write instruments with all that was logged of them; without names all of them, and the targets.

    Raises
    ------
    UnknownNameError
        If there is no such instrument.
    OutputError
        If the file cannot be written, or another file of that name is there.
    """
    check_output(file, [], kind="bench-book")
    if names:
        chosen = [book_reading.find_instrument(connection, name).instrument_id for name in names]
    else:
        chosen = [int(row[0]) for row in connection.execute("SELECT id FROM instruments ORDER BY id")]
    body = {
        "format": BOOK_FORMAT,
        "version": layout.VERSION,
        "instruments": [_instrument_body(connection, instrument_id) for instrument_id in dict.fromkeys(chosen)],
        "targets": [] if names else list(_target_bodies(connection)),
    }
    write_whole(file, (json.dumps(body, allow_nan=False, separators=(",", ":")) + "\n").encode())


def take_in_file(store: Store, file: Path) -> Merged:
    """Take in an exported book, or a single profile or target.

    Raises
    ------
    SavedFileError, FileVersionError
        If it is none of these, or something in it is missing or wrong.
    BookError
        If the book cannot be written to.
    """
    found, content = read_saved(file)
    where = str(file)
    text = json.dumps(content, allow_nan=False)
    if found == layout.PROFILE_FORMAT:
        new = write_profile(store, profile_from_json(text, where=where), instrument="", stage="", conditions=None)
        return Merged(instruments=0, sessions=int(new), measurements=int(new), targets=0, known=int(not new))
    if found == layout.TARGET_FORMAT:
        new = write_target(store, target_from_json(text, where=where))
        return Merged(instruments=0, sessions=0, measurements=0, targets=int(new), known=int(not new))
    if found != BOOK_FORMAT:
        raise SavedFileError(
            f"format is {found[:60]!r}, which the bench book cannot take in",
            where=where,
            cause="another kind of file was named",
            remedy="name what `book export` wrote, or a profile or target",
        )
    body = check(BookBody, content, where)
    with store.writing("book import") as connection:
        return _Merging(connection, content, where).merge(body)


def write_target(store: Store, target: Target) -> bool:
    """Keep a target under its name; False if the book has this one already."""
    name = name_of(target.name, "the target")
    text = target_to_json(target)
    # Made from what it says, so that the same target taken in on two machines is one.
    target_uuid = str(uuids.uuid5(uuids.NAMESPACE_OID, book_writing.sha256_of(text)))
    with store.writing("book import") as connection:
        if _known(connection, "targets", target_uuid):
            return False
        book_writing.insert_target(connection, name, text, target_uuid=target_uuid)
    return True


class _Merging:
    """One merge: what was new, and what was known."""

    def __init__(self, connection: sqlite3.Connection, content: Any, where: str) -> None:
        self._connection = connection
        self._content = content
        self._where = where
        self._count = {"instruments": 0, "sessions": 0, "measurements": 0, "targets": 0, "known": 0}
        self._renamed: list[tuple[str, str]] = []

    def merge(self, body: BookBody) -> Merged:
        """Write everything that is new."""
        for instrument, source in zip(body.instruments, self._content["instruments"], strict=True):
            self._instrument(instrument, source)
        for target, source in zip(body.targets, self._content["targets"], strict=True):
            self._target(target, source)
        return Merged(**self._count, renamed=tuple(self._renamed))

    def _instrument(self, given: BookedInstrumentLayout, source: Json) -> None:
        connection = self._connection
        latest = max(given.facts, key=lambda facts: (facts.written_at, facts.uuid))
        rows = [
            connection.execute("SELECT instrument_id FROM instrument_uuids WHERE uuid = ?", (each,)).fetchone()
            for each in given.uuids
        ]
        known = [int(row[0]) for row in rows if row is not None]
        if known:
            instrument_id = known[0]
        else:
            namesake = book_reading.instrument_by_key(connection, name_key(latest.name))
            if namesake is not None and _may_be_one(namesake.family, latest.family):
                instrument_id = namesake.instrument_id
            else:
                instrument_id = book_writing.insert_instrument(connection, uuids=[])
                self._count["instruments"] += 1
        for each, row in zip(given.uuids, rows, strict=True):
            if row is None:
                book_writing.insert_instrument_uuid(connection, instrument_id, each)
        for facts in sorted(given.facts, key=lambda facts: facts.written_at):
            if not _known(connection, "instrument_facts", facts.uuid):
                book_writing.insert_facts(
                    connection,
                    instrument_id,
                    name=name_of(facts.name, "the instrument"),
                    family=facts.family,
                    remarks=facts.remarks,
                    set_aside=facts.set_aside,
                    fact_uuid=facts.uuid,
                    written_at=facts.written_at,
                )
        self._keep_names_apart(instrument_id)
        for stage, stage_source in zip(given.stages, source["stages"], strict=True):
            stage_id = book_writing.stage_id_of(
                connection, instrument_id, name_of(stage.name, "the stage"), stage_uuid=self._free(stage.uuid)
            )
            for session, session_source in zip(stage.sessions, stage_source["sessions"], strict=True):
                self._session(stage_id, session, session_source)

    def _free(self, stage_uuid: str) -> str | None:
        """The identifier of a stage, or a new one where the book has it at another name already."""
        return None if _known(self._connection, "stages", stage_uuid) else stage_uuid

    def _keep_names_apart(self, instrument_id: int) -> None:
        """Put a number behind the name of an instrument that came in if another one is called the same."""
        connection = self._connection
        facts = book_reading.facts_of(connection, instrument_id)
        number, name = 1, facts.name
        while book_reading.has_other(connection, name_key(name), instrument_id):
            number += 1
            name = f"{facts.name} ({number})"
        if number > 1:
            book_writing.insert_facts(
                connection,
                instrument_id,
                name=name,
                family=facts.family,
                remarks=facts.remarks,
                set_aside=facts.set_aside,
            )
            self._renamed.append((facts.name, name))

    def _session(self, stage_id: int, given: BookedSessionLayout, source: Json) -> None:
        connection = self._connection
        row = connection.execute("SELECT id FROM sessions WHERE uuid = ?", (given.uuid,)).fetchone()
        if row is None:
            try:
                conditions = Conditions(**given.conditions.model_dump())
            except UnknownNameError as error:
                error.where = self._where
                raise
            session_id = book_writing.insert_session(
                connection, stage_id, conditions, session_uuid=given.uuid, logged_at=given.logged_at
            )
            for take in given.takes:
                recording_ids = [
                    book_writing.recording_id_of(
                        connection, sha256=recording.sha256, file=recording.file, size_bytes=recording.size_bytes
                    )
                    for recording in take.recordings
                ]
                book_writing.insert_take(
                    connection, session_id, take.role, take.number, recording_ids, take_uuid=take.uuid
                )
            self._count["sessions"] += 1
        else:
            session_id = int(row[0])
            self._count["known"] += 1
        for mark in given.marks:
            if not _known(connection, "session_marks", mark.uuid):
                book_writing.insert_session_mark(
                    connection, session_id, set_aside=mark.set_aside, mark_uuid=mark.uuid, written_at=mark.written_at
                )
        for measurement, measurement_source in zip(given.measurements, source["measurements"], strict=True):
            if _known(connection, "measurements", measurement.uuid):
                continue
            text = _text(layout.PROFILE_FORMAT, measurement_source["profile"])
            about = profile_about(profile_from_json(text, where=self._where))
            book_writing.insert_measurement(
                connection,
                session_id,
                measurement.role,
                text,
                instrument=about["instrument"],
                note_count=about["note_count"],
                sha256s=about["sha256s"],
                measured_with=measurement.measured_with,
                measurement_uuid=measurement.uuid,
                measured_at=measurement.measured_at,
            )
            self._count["measurements"] += 1

    def _target(self, given: BookedTargetLayout, source: Json) -> None:
        if _known(self._connection, "targets", given.uuid):
            self._count["known"] += 1
            return
        book_writing.insert_target(
            self._connection,
            name_of(given.target.name, "the target"),
            _text(layout.TARGET_FORMAT, source["target"]),
            target_uuid=given.uuid,
            added_at=given.added_at,
        )
        self._count["targets"] += 1


def _may_be_one(family: str, other: str) -> bool:
    return not family or not other or name_key(family) == name_key(other)


def _known(connection: sqlite3.Connection, table: str, row_uuid: str) -> bool:
    return connection.execute(f"SELECT 1 FROM {table} WHERE uuid = ?", (row_uuid,)).fetchone() is not None


def _text(name: str, body: Json) -> str:
    """The text that a file of its own would have."""
    head = {"format": name, "version": layout.VERSION}
    return json.dumps(head | body, allow_nan=False, separators=(",", ":")) + "\n"


def _body(text: str) -> Json:
    """What the text of a profile or target file says, without its head."""
    body: Json = json.loads(text)
    del body["format"], body["version"]
    return body


def _instrument_body(connection: sqlite3.Connection, instrument_id: int) -> Json:
    return {
        "uuids": [
            row[0]
            for row in connection.execute(
                "SELECT uuid FROM instrument_uuids WHERE instrument_id = ? ORDER BY rowid", (instrument_id,)
            )
        ],
        "facts": [
            {
                "uuid": uuid,
                "written_at": written_at,
                "name": name,
                "family": family,
                "remarks": remarks,
                "set_aside": bool(set_aside),
            }
            for uuid, written_at, name, family, remarks, set_aside in connection.execute(
                "SELECT uuid, written_at, name, family, remarks, set_aside FROM instrument_facts "
                "WHERE instrument_id = ? ORDER BY written_at, uuid",
                (instrument_id,),
            )
        ],
        "stages": [
            {"uuid": uuid, "name": name, "sessions": list(_session_bodies(connection, stage_id))}
            for stage_id, uuid, name in connection.execute(
                "SELECT id, uuid, name FROM stages WHERE instrument_id = ? ORDER BY id", (instrument_id,)
            )
        ],
    }


def _session_bodies(connection: sqlite3.Connection, stage_id: int) -> Iterator[Json]:
    columns = book_writing.CONDITION_COLUMNS
    for session_id, uuid, logged_at, *conditions in connection.execute(
        f"SELECT id, uuid, logged_at, {', '.join(columns)} FROM sessions WHERE stage_id = ? ORDER BY id", (stage_id,)
    ):
        yield {
            "uuid": uuid,
            "logged_at": logged_at,
            "conditions": dict(zip(columns, conditions, strict=True)),
            "marks": [
                {"uuid": mark, "written_at": written_at, "set_aside": bool(set_aside)}
                for mark, written_at, set_aside in connection.execute(
                    "SELECT uuid, written_at, set_aside FROM session_marks WHERE session_id = ? ORDER BY written_at",
                    (session_id,),
                )
            ],
            "takes": [
                {
                    "uuid": take,
                    "role": role,
                    "number": number,
                    "recordings": [
                        {"file": file, "sha256": sha256, "size_bytes": size_bytes}
                        for file, sha256, size_bytes in connection.execute(
                            "SELECT file, sha256, size_bytes FROM take_recordings "
                            "JOIN recordings ON recordings.id = recording_id WHERE take_id = ? ORDER BY number",
                            (take_id,),
                        )
                    ],
                }
                for take_id, take, role, number in connection.execute(
                    "SELECT id, uuid, role, number FROM takes WHERE session_id = ? ORDER BY role, number", (session_id,)
                )
            ],
            "measurements": [
                {
                    "uuid": measurement,
                    "role": role,
                    "measured_at": measured_at,
                    "measured_with": measured_with,
                    "profile": _body(book_reading.unpacked(data, sha256)),
                }
                for measurement, role, measured_at, measured_with, data, sha256 in connection.execute(
                    "SELECT uuid, role, measured_at, measured_with, text_zlib, profile_sha256 FROM measurements "
                    "JOIN profiles ON measurement_id = measurements.id WHERE session_id = ? ORDER BY measured_at, uuid",
                    (session_id,),
                )
            ],
        }


def _target_bodies(connection: sqlite3.Connection) -> Iterator[Json]:
    for uuid, added_at, data, sha256 in connection.execute(
        "SELECT uuid, added_at, text_zlib, text_sha256 FROM targets ORDER BY added_at, uuid"
    ):
        yield {"uuid": uuid, "added_at": added_at, "target": _body(book_reading.unpacked(data, sha256))}
