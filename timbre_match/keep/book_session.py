"""Sessions measured, measured again, and written down whole."""

import dataclasses
import sqlite3
import uuid as uuids
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, TypedDict

from timbre_match.advise.wording import plain
from timbre_match.errors import BookError, NoHeldNoteError, TimbreMatchError
from timbre_match.keep import book_reading, book_writing
from timbre_match.keep.book_audio import AudioFile, files_of_takes, keep_copies
from timbre_match.keep.book_backup import back_up_of_itself
from timbre_match.keep.book_names import name_key, name_of
from timbre_match.keep.book_reading import Facts
from timbre_match.keep.book_records import Conditions, Role
from timbre_match.keep.book_store import Store

if TYPE_CHECKING:
    from timbre_match.measure.profile import Profile
    from timbre_match.measure.takes import Listening, Progress


@dataclass(frozen=True, kw_only=True, slots=True)
class Part:
    """The takes of the instrument or of the control: their recordings, and the profile that they gave."""

    role: Role
    profile: "Profile"
    takes: tuple[tuple[AudioFile, ...], ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class MeasuredSession:
    """A session that is measured and not yet written down."""

    parts: tuple[Part, ...]
    warnings: tuple[str, ...]
    failures: tuple[TimbreMatchError, ...]


def listening_for(conditions: Conditions, notes: Sequence[str] | None, channel: int | None) -> "Listening":
    """How the recordings of a session are to be read."""
    from timbre_match.measure.takes import Listening

    listening = Listening(notes=tuple(notes) if notes else None, channel=channel)
    return listening if conditions.a4_hz is None else dataclasses.replace(listening, a4_hz=conditions.a4_hz)


def measure_session(
    facts: Facts,
    takes: Sequence[Path],
    controls: Sequence[Path],
    *,
    stage: str,
    control_name: str,
    conditions: Conditions,
    listening: "Listening",
    jobs: int,
    progress: "Progress | None",
) -> MeasuredSession:
    """Measure the takes of the instrument, then those of the control.

    Raises
    ------
    TimbreMatchError
        If no take of the instrument can be used, or a recording is on both sides. A control of which none can be used
        is among the failures.
    """
    from timbre_match.measure.takes import measure_takes

    warnings: list[str] = []
    failures: list[TimbreMatchError] = []
    parts: list[Part] = []
    sides: tuple[tuple[Role, Sequence[Path], str, str], ...] = (
        ("instrument", takes, facts.name, stage),
        ("control", controls, control_name, ""),
    )
    for role, paths, name, at_stage in sides:
        if not paths and role == "control":
            continue
        try:
            measured = measure_takes(
                paths,
                listening,
                instrument=name,
                stage=at_stage,
                family=facts.family,
                session=conditions.session(),
                jobs=jobs,
                progress=progress,
            )
        except TimbreMatchError as error:
            if role == "instrument":
                raise
            failures.append(error)
            continue
        warnings += measured.warnings
        failures += measured.failures
        parts.append(_part(role, paths, measured.profile, measured.failures))
    if len(parts) == 2 and (both := _sha256s(parts[0]) & _sha256s(parts[1])):
        name = next(file.name for files in parts[0].takes for file in files if file.sha256 in both)
        raise BookError(
            f"{plain(name)} is a take of the instrument and of the control",
            cause="a file was named twice, or copied",
            remedy="name the recordings of the control, which is another instrument, after --control",
        )
    return MeasuredSession(parts=tuple(parts), warnings=tuple(warnings), failures=tuple(failures))


def write_session(
    store: Store,
    facts: Facts,
    stage: str,
    conditions: Conditions,
    parts: Sequence[Part],
    *,
    keep_audio: bool = False,
    session_uuid: str | None = None,
) -> tuple[str, tuple[str, ...]]:
    """Write a session in one transaction, after copies of its recordings if they are to be kept; then back the book up.

    Returns
    -------
    uuid : str
        Of the session.
    trouble : tuple of str
        What went wrong with the back-up, which does not undo the session.

    Raises
    ------
    BookError
        If a recording of the instrument is in one of its sessions already, or the session cannot be written.
    """
    session_uuid = session_uuid or book_writing.new_uuid()
    texts = [profile_text(part.profile) for part in parts]
    with store.alone("book log") as lock:
        _refuse_logged(store, facts, parts)
        if keep_audio:
            keep_copies([file for part in parts for take in part.takes for file in take], store.place, lock)
        with store.transaction() as connection:
            stage_id = book_writing.stage_id_of(connection, facts.instrument_id, stage)
            session_id = book_writing.insert_session(connection, stage_id, conditions, session_uuid=session_uuid)
            for part, text in zip(parts, texts, strict=True):
                for number, files in enumerate(part.takes, start=1):
                    recording_ids = []
                    for file in files:
                        recording_id = book_writing.recording_id_of(
                            connection, sha256=file.sha256, file=file.name, size_bytes=file.size_bytes
                        )
                        recording_ids.append(recording_id)
                        if file.path is not None:
                            book_writing.note_place(connection, recording_id, "path", file.path)
                            if keep_audio:
                                book_writing.note_place(connection, recording_id, "kept", file.kept_as)
                    book_writing.insert_take(connection, session_id, part.role, number, recording_ids)
                book_writing.insert_measurement(connection, session_id, part.role, text, **profile_about(part.profile))
        lock.note_finished()
        try:
            back_up_of_itself(store, lock)
        except (TimbreMatchError, OSError, sqlite3.Error) as error:
            what = getattr(error, "what", None) or getattr(error, "strerror", None) or str(error)
            return session_uuid, (f"The session is in the book, but the back-up after it could not be made: {what}.",)
    return session_uuid, ()


def write_profile(
    store: Store, profile: "Profile", *, instrument: str, stage: str, conditions: Conditions | None
) -> bool:
    """Write a session from a profile that was measured before; False if the book has it already."""
    name = name_of(instrument or profile.instrument, "the instrument")
    stage = name_of(stage or profile.stage, "the stage")
    if conditions is None:
        noted = profile.session
        conditions = Conditions(date=noted.date, room=noted.room, microphone=noted.microphone, a4_hz=profile.a4_hz)
    # Made from what it says, so that the same profile taken in on two machines is the same session.
    sha256 = book_writing.sha256_of(profile_text(profile))
    session_uuid = str(uuids.uuid5(uuids.NAMESPACE_OID, sha256))
    connection = store.connection
    if connection.execute("SELECT 1 FROM measurements WHERE profile_sha256 = ?", (sha256,)).fetchone() is not None:
        return False
    key = name_key(name)
    if book_reading.instrument_by_key(connection, key) is None:
        with store.writing("book import") as writing:
            instrument_id = book_writing.insert_instrument(writing, uuids=[book_writing.new_uuid()])
            book_writing.insert_facts(
                writing, instrument_id, name=name, family=profile.family, remarks="", set_aside=False
            )
    facts = book_reading.find_instrument(connection, name)
    takes = tuple(
        tuple(AudioFile(name=source.file, sha256=source.sha256) for source in take.recordings) for take in profile.takes
    )
    part = Part(role="instrument", profile=profile, takes=takes)
    write_session(store, facts, stage, conditions, [part], session_uuid=session_uuid)
    return True


class About(TypedDict):
    """What a measurement's row says of its profile."""

    instrument: str
    note_count: int
    sha256s: list[str]
    measured_with: str


def profile_about(profile: "Profile") -> About:
    """What a measurement's row says of its profile, so that lists need not open it."""
    return {
        "instrument": profile.instrument,
        "note_count": sum(len(take.notes) for take in profile.takes),
        "sha256s": [source.sha256 for take in profile.takes for source in take.recordings],
        "measured_with": program_version(),
    }


def program_version() -> str:
    """Version of this program, for the record."""
    from importlib import metadata

    try:
        return metadata.version("timbre-match")
    except metadata.PackageNotFoundError:
        return "not installed"


def profile_text(profile: "Profile") -> str:
    """The text that a profile file of it would have."""
    from timbre_match.keep.files import profile_to_json

    return profile_to_json(profile)


def _part(role: Role, paths: Sequence[Path], profile: "Profile", failures: Sequence[TimbreMatchError]) -> Part:
    """The recordings of each take that were measured, or in which no note was found: those remain to be measured."""
    measured = {source.sha256 for take in profile.takes for source in take.recordings}
    unheld = {error.where for error in failures if isinstance(error, NoHeldNoteError)}
    seen: set[str] = set()
    takes = []
    for files in files_of_takes(paths):
        belonging = []
        for file in files:
            if file.sha256 not in seen and (file.sha256 in measured or file.given_as in unheld):
                seen.add(file.sha256)
                belonging.append(file)
        if belonging:
            takes.append(tuple(belonging))
    if measured - seen:
        name = next(source.file for take in profile.takes for source in take.recordings if source.sha256 not in seen)
        raise BookError(
            f"{plain(name)} was altered while it was being measured; nothing was written",
            cause="another program is still writing it",
            remedy="wait until the recording is finished, then run the command again",
        )
    return Part(role=role, profile=profile, takes=tuple(takes))


def _sha256s(part: Part) -> set[str]:
    return {file.sha256 for files in part.takes for file in files}


def _refuse_logged(store: Store, facts: Facts, parts: Sequence[Part]) -> None:
    """Refuse recordings that a session of the instrument has already: twice the same sound is no second session."""
    shown = book_reading.read_instrument(store.connection, facts, store.place.recordings)
    logged = {
        recording.sha256: (stage, session)
        for stage in shown.stages
        for session in stage.sessions
        if not session.set_aside
        for take in session.takes_of("instrument")
        for recording in take.recordings
    }
    for part in parts:
        for files in part.takes:
            for file in files:
                if part.role == "instrument" and file.sha256 in logged:
                    stage, session = logged[file.sha256]
                    raise BookError(
                        f'{plain(file.name)} is in session {session.number} of "{plain(facts.name)}" already, stage '
                        f'"{plain(stage.name)}"; nothing was written',
                        cause="the session was logged before, or a recording was named twice",
                        remedy="leave it out; or, if that session was logged wrongly, set it aside first with "
                        f"`book aside INSTRUMENT --session {session.number}`",
                    )
