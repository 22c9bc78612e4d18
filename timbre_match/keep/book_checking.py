"""Whether the book is whole, every recording is where it was noted, and every take is measured."""

import sqlite3
from collections import defaultdict
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

from timbre_match.errors import BookDamagedError
from timbre_match.keep import book_writing
from timbre_match.keep.book_audio import AudioFile, audio_file, lying
from timbre_match.keep.book_copy import damage_in, last_good, row_counts
from timbre_match.keep.book_reading import facts_of, path_of, unpacked
from timbre_match.keep.book_records import Checked, RecordingState, UnmeasuredTake
from timbre_match.keep.book_store import Store

CheckProgress = Callable[[Iterable[object], int], Iterable[object]]
"""Wraps what is looked at as it goes, with its number: a progress bar, for example."""


def check_book(store: Store, look_in: Sequence[Path], progress: CheckProgress | None) -> Checked:
    """Check everything; recordings that were moved into one of the folders get their new place noted."""
    connection = store.connection
    damage = damage_in(connection)
    if damage:
        # What else is in it cannot be relied upon.
        return Checked(damage=tuple(damage), last_good=last_good(store.place), recordings=(), unmeasured=(), counts={})
    damage = _altered_texts(connection)
    states = _states(store, progress)
    if look_in and any(state.lying != "in place" for state in states) and _find_again(store, states, look_in):
        states = _states(store, progress)
    return Checked(
        damage=tuple(damage),
        last_good=last_good(store.place) if damage else None,
        recordings=tuple(states),
        unmeasured=tuple(_unmeasured(connection)),
        counts=row_counts(connection),
    )


def _altered_texts(connection: sqlite3.Connection) -> list[str]:
    found = []
    for table, column, key in (("profiles", "profile_sha256", "measurement_id"), ("targets", "text_sha256", "id")):
        source = f"{table} JOIN measurements ON measurements.id = measurement_id" if table == "profiles" else table
        for row_id, data, sha256 in connection.execute(f"SELECT {key}, text_zlib, {column} FROM {source}"):
            try:
                unpacked(data, sha256)
            except BookDamagedError:
                found.append(f"row {row_id} of {table} is not what was written")
    return found


def _states(store: Store, progress: CheckProgress | None) -> list[RecordingState]:
    """Every latest place of every recording; a copy in the book's folder counts as a place of its own."""
    connection = store.connection
    owners: dict[int, dict[str, None]] = defaultdict(dict)
    for recording_id, name in connection.execute(
        "SELECT DISTINCT take_recordings.recording_id, facts.name FROM take_recordings "
        "JOIN takes ON takes.id = take_id JOIN sessions ON sessions.id = takes.session_id "
        "JOIN stages ON stages.id = sessions.stage_id "
        "JOIN instrument_facts AS facts ON facts.instrument_id = stages.instrument_id "
        "WHERE facts.id = (SELECT id FROM instrument_facts WHERE instrument_id = facts.instrument_id "
        "                  ORDER BY written_at DESC, uuid DESC LIMIT 1) ORDER BY facts.name_key"
    ):
        owners[recording_id][name] = None
    rows = connection.execute(
        "SELECT recordings.id, file, sha256, size_bytes, kind, place FROM recordings "
        "JOIN recording_places AS places ON places.recording_id = recordings.id "
        "WHERE places.id = (SELECT MAX(id) FROM recording_places "
        "                   WHERE recording_id = recordings.id AND kind = places.kind) ORDER BY recordings.id, kind"
    ).fetchall()
    states = []
    for row in rows if progress is None else progress(rows, len(rows)):
        assert isinstance(row, tuple)
        recording_id, file, sha256, size_bytes, kind, stored = row
        kept = kind == "kept"
        place = store.place.recordings / stored if kept else path_of(stored)
        states.append(
            RecordingState(
                file=file,
                sha256=sha256,
                place=str(place),
                kept=kept,
                lying=lying(place, sha256, size_bytes),
                instruments=tuple(owners[recording_id]),
            )
        )
    return states


def _find_again(store: Store, states: Sequence[RecordingState], folders: Sequence[Path]) -> bool:
    """Look for recordings by size and SHA-256 in folders, and note their new places; True if any was found."""
    wanted = {state.sha256 for state in states if state.lying != "in place" and not state.kept}
    sizes = dict(store.connection.execute("SELECT sha256, size_bytes FROM recordings"))
    lengths = {sizes[sha256] for sha256 in wanted}
    found: dict[str, AudioFile] = {}
    for folder in folders:
        for path in sorted(folder.rglob("*")):
            try:
                if path.is_file() and (path.stat().st_size in lengths or 0 in lengths):
                    file = audio_file(path)
                    if file.sha256 in wanted:
                        found.setdefault(file.sha256, file)
            except OSError:
                continue
    if found:
        with store.writing("book check") as connection:
            for file in found.values():
                recording_id = book_writing.recording_id_of(
                    connection, sha256=file.sha256, file=file.name, size_bytes=file.size_bytes
                )
                assert file.path is not None
                book_writing.note_place(connection, recording_id, "path", file.path)
    return bool(found)


def _unmeasured(connection: sqlite3.Connection) -> Iterable[UnmeasuredTake]:
    numbers: dict[int, dict[int, int]] = defaultdict(dict)
    for instrument_id, session_id in connection.execute(
        "SELECT instrument_id, sessions.id FROM sessions JOIN stages ON stages.id = stage_id ORDER BY sessions.id"
    ):
        numbers[instrument_id][session_id] = len(numbers[instrument_id]) + 1
    for instrument_id, stage, session_id, number, role, file in connection.execute(
        "SELECT instrument_id, stages.name, sessions.id, takes.number, takes.role, file FROM take_recordings "
        "JOIN takes ON takes.id = take_id JOIN recordings ON recordings.id = recording_id "
        "JOIN sessions ON sessions.id = takes.session_id JOIN stages ON stages.id = sessions.stage_id "
        "WHERE NOT EXISTS (SELECT 1 FROM measured_recordings JOIN measurements ON measurements.id = measurement_id "
        "                  WHERE recording_id = recordings.id AND measurements.session_id = takes.session_id) "
        "ORDER BY takes.id, take_recordings.number"
    ).fetchall():
        yield UnmeasuredTake(
            instrument=facts_of(connection, instrument_id).name,
            stage=stage,
            session_number=numbers[instrument_id][session_id],
            take_number=number,
            role=role,
            file=file,
        )
