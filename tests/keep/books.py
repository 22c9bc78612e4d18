"""Bench books for tests: filled without measuring, and looked through after the worst."""

import dataclasses
import hashlib
from collections.abc import Sequence
from pathlib import Path

import timbre_match as tm
from tests.keep.examples import profile
from timbre_match.keep.book_audio import audio_file
from timbre_match.keep.book_copy import checked_counts
from timbre_match.keep.book_place import place_of, size_of
from timbre_match.keep.book_reading import find_instrument
from timbre_match.keep.book_records import Conditions
from timbre_match.keep.book_session import Part, write_session
from timbre_match.keep.book_store import Store
from timbre_match.measure.profile import Profile, Source

NAMES = (
    "Heron 7",
    "Geige Nr. 3 „Häher“",
    'O\'Brien "the loud one"',
    "鷺七号",
    "🎻 no. 7 👩‍🔧",
    "كمان ٧",
    "=cmd()",
    "[red]varnish[/red]",
    "<script>alert(1)</script>",
    "x" * 500,
    "'; DROP TABLE instruments; --",
    "a\x1b[2Jb\nc",
)
"""Names as makers give them, and as someone might who means harm."""

STEP_2 = """
CREATE TABLE varnishes (id INTEGER PRIMARY KEY, uuid TEXT NOT NULL UNIQUE, name TEXT NOT NULL);
INSERT INTO varnishes (uuid, name) SELECT uuid, 'none noted' FROM sessions;
ALTER TABLE sessions ADD COLUMN varnish_id INTEGER REFERENCES varnishes (id);
UPDATE sessions SET varnish_id = (SELECT id FROM varnishes WHERE varnishes.uuid = sessions.uuid);
"""
"""What a later version might do: a new table, a new column, and every old row changed, in one step."""


def profile_of(*contents: bytes, instrument: str = "Heron 7", stage: str = "in the white") -> Profile:
    """A profile whose takes come from files with these contents, one each."""
    takes = tuple(
        dataclasses.replace(
            profile().takes[0],
            recordings=(Source(file=f"take {number}.wav", sha256=hashlib.sha256(content).hexdigest()),),
        )
        for number, content in enumerate(contents, start=1)
    )
    return dataclasses.replace(profile(instrument=instrument, stage=stage), takes=takes)


def log_without_measuring(
    book: Path, instrument: str, stage: str, files: Sequence[Path], *, keep_audio: bool = False, room: str = ""
) -> str:
    """Write a session into a book from files with any content; returns its identifier."""
    uuid, trouble = write_down(book, instrument, stage, files, keep_audio=keep_audio, room=room)
    assert trouble == ()
    return uuid


def write_down(
    book: Path, instrument: str, stage: str, files: Sequence[Path], *, keep_audio: bool = False, room: str = ""
) -> tuple[str, tuple[str, ...]]:
    """The same, with what went wrong with the back-up."""
    measured = profile_of(*(file.read_bytes() for file in files), instrument=instrument, stage=stage)
    takes = tuple((audio_file(file),) for file in files)
    store = Store(place_of(book), create=False)
    try:
        return write_session(
            store,
            find_instrument(store.connection, instrument),
            stage,
            Conditions(room=room),
            [Part(role="instrument", profile=measured, takes=takes)],
            keep_audio=keep_audio,
        )
    finally:
        store.close()


def assert_whole(book: Path, promised: Sequence[str] = (), *, kept_for_others: bool = False) -> None:
    """The book opens, is undamaged, holds the promised sessions and no half one, and nothing unfinished lies about.

    With `kept_for_others` there may be recordings of a book that this one has replaced.
    """
    with tm.BenchBook.open(book, create=False) as opened:
        checked = opened.check()
        assert checked.damage == ()
        assert all(state.lying == "in place" for state in checked.recordings if state.kept)
        sessions = {
            session.uuid: session
            for line in opened.list(all_of_them=True)
            for stage in opened.show(line.name).stages
            for session in stage.sessions
        }
        assert set(promised) <= set(sessions)
        assert len(sessions) == checked.counts["sessions"]
        for session in sessions.values():
            assert session.takes
            assert all(take.recordings for take in session.takes)
            assert len(session.measurements_of("instrument")) == 1
        kept = {Path(state.place) for state in checked.recordings if state.kept}
        place = opened.place
    unfinished = [*book.parent.glob(".timbre-match-*"), *place.files.rglob(".timbre-match-*")]
    assert unfinished == []
    assert [path.name for path in book.parent.glob(f"{book.name}-*")] == []
    if place.files.exists():
        there = {path for path in place.recordings.rglob("*") if path.is_file()}
        assert there >= kept if kept_for_others else there == kept
        assert size_of(place.lock) == 0
        for backup in place.backups.glob("*.sqlite"):
            checked_counts(backup)
