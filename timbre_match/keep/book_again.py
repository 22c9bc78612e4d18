"""Sessions that are in the book: which one is meant, and measuring its recordings anew."""

import dataclasses
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from timbre_match.advise.wording import plain
from timbre_match.errors import RecordingError, TimbreMatchError, UnknownNameError
from timbre_match.keep import book_reading, book_writing
from timbre_match.keep.book_audio import lying
from timbre_match.keep.book_names import name_key, unknown
from timbre_match.keep.book_records import (
    Again,
    BookedInstrument,
    BookedRecording,
    BookedSession,
    BookedStage,
    Measurement,
    Role,
)
from timbre_match.keep.book_session import listening_for, profile_about, profile_text
from timbre_match.keep.book_store import Store

if TYPE_CHECKING:
    from timbre_match.measure.profile import Profile
    from timbre_match.measure.takes import Measured, Progress


def stage_of(shown: BookedInstrument, stage: str) -> BookedStage:
    """The instrument's stage of this name; without a name the last one with a session that counts.

    Raises
    ------
    UnknownNameError
    """
    if not stage:
        counting = [each for each in shown.stages if any(not session.set_aside for session in each.sessions)]
        if not counting:
            raise UnknownNameError(
                f'no session of "{plain(shown.name)}" has been logged yet',
                remedy="`timbre-match book log INSTRUMENT --stage STAGE TAKE...` logs one",
            )
        return counting[-1]
    for each in shown.stages:
        if name_key(each.name) == name_key(stage):
            return each
    raise unknown(
        stage,
        [each.name for each in shown.stages],
        what=f'stage of "{plain(shown.name)}"',
        remedy="`timbre-match book show INSTRUMENT` shows its stages",
    )


def session_of(shown: BookedInstrument, number: int) -> BookedSession:
    """The instrument's session of this number.

    Raises
    ------
    UnknownNameError
    """
    for stage in shown.stages:
        for session in stage.sessions:
            if session.number == number:
                return session
    raise UnknownNameError(
        f'"{plain(shown.name)}" has no session {number}',
        cause="a slip in the number",
        remedy="`timbre-match book show INSTRUMENT` shows its sessions with their numbers",
    )


def measurement_of(shown: BookedInstrument, *, stage: str, session: int | None, role: Role) -> Measurement:
    """The measurement that counts: the last one of the session, or of the last session of the stage.

    Raises
    ------
    UnknownNameError
        If there is none.
    """
    if session is not None:
        sessions = [session_of(shown, session)]
    else:
        sessions = [each for each in stage_of(shown, stage).sessions if not each.set_aside]
    found = [each for every in sessions for each in every.measurements_of(role)[-1:]]
    if not found:
        what = "control" if role == "control" else "instrument"
        raise UnknownNameError(
            f'there is no measurement of the {what} in this session of "{plain(shown.name)}"',
            remedy="`timbre-match book show INSTRUMENT` shows what was measured",
        )
    return found[-1]


def measure_sessions_again(
    store: Store,
    shown: BookedInstrument,
    stages: Sequence[BookedStage],
    *,
    notes: Sequence[str] | None,
    channel: int | None,
    jobs: int,
    progress: "Progress | None",
) -> Again:
    """Measure the recordings of sessions anew; what each gives is written at once, before the next is measured.

    Raises
    ------
    BookError
        If the book cannot be written to.
    """
    count = 0
    warnings: list[str] = []
    failures: list[TimbreMatchError] = []
    for stage in stages:
        for session in stage.sessions:
            for role in ("instrument", "control"):
                if session.set_aside or not session.takes_of(role):
                    continue
                found, missing = _files(session, role)
                failures += missing
                if not found:
                    continue
                try:
                    measured = _measured(
                        shown, stage, session, role, found, notes=notes, channel=channel, jobs=jobs, progress=progress
                    )
                except TimbreMatchError as error:
                    failures.append(error)
                    continue
                warnings += measured.warnings
                failures += measured.failures
                profile = _as_noted(measured.profile, session)
                with store.writing("book remeasure") as connection:
                    book_writing.insert_measurement(
                        connection,
                        book_reading.session_id_of(connection, session.uuid),
                        role,
                        profile_text(profile),
                        **profile_about(profile),
                    )
                count += 1
    return Again(measurements=count, warnings=tuple(warnings), failures=tuple(failures))


def _measured(
    shown: BookedInstrument,
    stage: BookedStage,
    session: BookedSession,
    role: Role,
    takes: Sequence[Sequence[Path]],
    *,
    notes: Sequence[str] | None,
    channel: int | None,
    jobs: int,
    progress: "Progress | None",
) -> "Measured":
    from timbre_match.measure.takes import measure_takes

    before = session.measurements_of("control")
    control_name = before[-1].instrument if before else "control"
    return measure_takes(
        takes,
        listening_for(session.conditions, notes, channel),
        instrument=shown.name if role == "instrument" else control_name,
        stage=stage.name if role == "instrument" else "",
        family=shown.family,
        session=session.conditions.session(),
        jobs=jobs,
        progress=progress,
    )


def _files(session: BookedSession, role: Role) -> tuple[list[list[Path]], list[TimbreMatchError]]:
    """Where the recordings of each take lie now, and which are not to be found."""
    found, missing = [], []
    for take in session.takes_of(role):
        files = []
        for recording in take.recordings:
            place = _place(recording)
            if place is not None:
                files.append(place)
            else:
                missing.append(
                    RecordingError(
                        "this recording is not where it was noted, or was altered since",
                        where=recording.path or recording.file,
                        cause="it was moved, edited or deleted, or its drive is not plugged in",
                        remedy="put it back, or run `timbre-match book check --look-in FOLDER` to find it",
                    )
                )
        if files:
            found.append(files)
    return found, list(missing)


def _place(recording: BookedRecording) -> Path | None:
    for place in (recording.kept, Path(recording.path) if recording.path else None):
        if place is not None and lying(place, recording.sha256, recording.size_bytes) == "in place":
            return place
    return None


def _as_noted(profile: "Profile", session: BookedSession) -> "Profile":
    """The profile with the recordings named as they were when they were logged, wherever they were read from."""
    names = {recording.sha256: recording.file for take in session.takes for recording in take.recordings}
    takes = tuple(
        dataclasses.replace(
            take,
            recordings=tuple(
                dataclasses.replace(source, file=names.get(source.sha256, source.file)) for source in take.recordings
            ),
        )
        for take in profile.takes
    )
    return dataclasses.replace(profile, takes=takes)
