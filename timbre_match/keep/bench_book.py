"""The bench book: a maker's record of instruments, stages, sessions, takes and measurements, in one file.

What measures, checks and moves is imported where it is used, so that a list of instruments is there at once.
"""

from collections.abc import Callable, Sequence
from functools import wraps
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, ParamSpec, Self, TypeVar

from timbre_match.keep import book_reading
from timbre_match.keep.book_errors import plain_errors
from timbre_match.keep.book_instruments import add_instrument, rename_instrument, set_aside
from timbre_match.keep.book_names import name_of
from timbre_match.keep.book_place import Place, place_of
from timbre_match.keep.book_reading import Facts
from timbre_match.keep.book_records import (
    Again,
    BookedInstrument,
    BookedSession,
    Checked,
    Conditions,
    InstrumentLine,
    Logged,
    Merged,
    Role,
    TargetLine,
)
from timbre_match.keep.book_store import Store

if TYPE_CHECKING:
    from timbre_match.compare.target import Target
    from timbre_match.keep.book_checking import CheckProgress
    from timbre_match.measure.profile import Profile
    from timbre_match.measure.takes import Progress

_Arguments = ParamSpec("_Arguments")
_Result = TypeVar("_Result")


def _plainly(work: Callable[_Arguments, _Result]) -> Callable[_Arguments, _Result]:
    """Let what SQLite says while a method reads or writes come out as an error of the book."""

    @wraps(work)
    def plain(*arguments: _Arguments.args, **named: _Arguments.kwargs) -> _Result:
        book = arguments[0]
        assert isinstance(book, BenchBook)
        with plain_errors(book.place):
            return work(*arguments, **named)

    return plain


class BenchBook:
    """A maker's record of instruments, stages, sessions, takes and measurements.

    Nothing in it is ever overwritten or deleted: a new name, a session set aside, a new measurement are new rows,
    and the latest counts. Use it in a ``with`` statement, or close it::

        with tm.BenchBook.open() as book:
            book.add("Heron 7", family="violin")
            book.log("Heron 7", ["take1.wav", "take2.wav"], stage="in the white")
    """

    def __init__(self, store: Store) -> None:
        self._store = store

    @classmethod
    def open(cls, book: str | Path | None = None, *, create: bool = True) -> Self:
        """Open a bench book.

        Parameters
        ----------
        book : str or Path, optional
            Its file. By default the file that the environment variable TIMBRE_MATCH_BOOK names, else one in the user's
            data folder.
        create : bool
            Whether to begin a new book where there is none.

        Raises
        ------
        BookError
            If there is none, or its drive or folder is not there.
        BookDamagedError
            If it is damaged; the message names the last good back-up.
        FileVersionError
            If a later version of this program wrote it.
        BookInUseError
            If it has to be brought up to date, but another process is writing to it.
        """
        return cls(Store(place_of(book), create=create))

    @property
    def place(self) -> Place:
        """Where the book lies."""
        return self._store.place

    @property
    def read_only(self) -> bool:
        """Whether the book can be read, but not written to."""
        return self._store.read_only

    def close(self) -> None:
        """Close the book."""
        self._store.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @_plainly
    def add(self, instrument: str, *, family: str, remarks: str = "") -> None:
        """Add an instrument.

        Raises
        ------
        UnknownNameError
            If nothing of the name can be seen.
        BookError
            If the book has an instrument of this name, or cannot be written to.
        """
        add_instrument(self._store, instrument, family=family, remarks=remarks)

    @_plainly
    def rename(self, instrument: str, name: str) -> None:
        """Give an instrument another name; the book remembers the earlier one.

        Raises
        ------
        UnknownNameError, BookError
            As :meth:`add`, and if there is no such instrument.
        """
        rename_instrument(self._store, instrument, name)

    @_plainly
    def set_aside(self, instrument: str, *, session: int | None = None, aside: bool = True) -> None:
        """Set an instrument, or one of its sessions, aside; with ``aside=False`` bring it back.

        What is set aside stays in the book, but is not listed and not counted.

        Raises
        ------
        UnknownNameError
            If there is no such instrument or session.
        BookError
            If the book cannot be written to.
        """
        set_aside(self._store, instrument, session=session, aside=aside)

    def log(
        self,
        instrument: str,
        takes: Sequence[str | Path],
        *,
        stage: str,
        controls: Sequence[str | Path] = (),
        control_name: str = "control",
        conditions: Conditions | None = None,
        notes: Sequence[str] | None = None,
        channel: int | None = None,
        jobs: int = 1,
        keep_audio: bool = False,
        progress: "Progress | None" = None,
    ) -> Logged:
        """Measure the takes of a session and write it down.

        The measuring comes first; then the whole session is written at once, or not at all.

        Parameters
        ----------
        instrument : str
            Its name in the book.
        takes : sequence of str or Path
            Each a recording, or a folder whose recordings together are one take.
        stage : str
            The state of the build.
        controls : sequence of str or Path
            Takes of an instrument that does not change, recorded in the same session.
        control_name : str
            What that instrument is called; sessions with the same control can be compared without room and player.
        conditions : Conditions, optional
        notes : sequence of str, optional
            The notes that were played, which settles doubt about octaves.
        channel : int, optional
            Counted from 1; by default the strongest of each recording.
        jobs : int
            Processes that measure recordings side by side.
        keep_audio : bool
            Whether to copy the recordings into the book's own folder.
        progress : Progress, optional
            Wraps the results as they come.

        Returns
        -------
        Logged
            With the recordings that could not be used; the others are in the book.

        Raises
        ------
        UnknownNameError
            If the book has no such instrument.
        TimbreMatchError
            If no recording can be used, or the instrument's recordings are in the book already.
        BookError
            If the session cannot be written.
        """
        from timbre_match.keep.book_session import listening_for, measure_session, write_session

        conditions = conditions or Conditions()
        stage, control_name = name_of(stage, "the stage"), name_of(control_name, "the control")
        with plain_errors(self.place):
            facts = book_reading.find_instrument(self._store.connection, instrument)
        if self.read_only:
            # Said before the work, not after it.
            with self._store.alone("book log"):
                pass
        measured = measure_session(
            facts,
            [Path(take) for take in takes],
            [Path(take) for take in controls],
            stage=stage,
            control_name=control_name,
            conditions=conditions,
            listening=listening_for(conditions, notes, channel),
            jobs=jobs,
            progress=progress,
        )
        uuid, trouble = write_session(self._store, facts, stage, conditions, measured.parts, keep_audio=keep_audio)
        return Logged(
            session=self._session_of(facts, uuid),
            instrument=facts.name,
            stage=stage,
            warnings=(*measured.warnings, *trouble),
            failures=measured.failures,
        )

    def measure_again(
        self,
        instrument: str,
        *,
        stage: str = "",
        notes: Sequence[str] | None = None,
        channel: int | None = None,
        jobs: int = 1,
        progress: "Progress | None" = None,
    ) -> Again:
        """Measure the recordings of an instrument's sessions anew, as this version of the program does.

        The new measurements count from then on; those they replace stay in the book. Recordings are taken from where
        they lay, or from the book's own folder.

        Parameters
        ----------
        instrument, stage : str
            Without a stage, all of them.
        notes, channel, jobs, progress
            As for :meth:`log`.

        Raises
        ------
        UnknownNameError
            If there is no such instrument or stage.
        BookError
            If the book cannot be written to.
        """
        from timbre_match.keep.book_again import measure_sessions_again, stage_of

        shown = self.show(instrument)
        stages = [stage_of(shown, stage)] if stage else list(shown.stages)
        return measure_sessions_again(
            self._store, shown, stages, notes=notes, channel=channel, jobs=jobs, progress=progress
        )

    @_plainly
    def list(self, *, all_of_them: bool = False) -> tuple[InstrumentLine, ...]:
        """Instruments in the order of their names, without those set aside unless `all_of_them`."""
        lines = book_reading.instrument_lines(self._store.connection)
        return tuple(line for line in lines if all_of_them or not line.set_aside)

    @_plainly
    def show(self, instrument: str) -> BookedInstrument:
        """All that was logged of an instrument.

        Raises
        ------
        UnknownNameError
            If there is none of this name.
        """
        facts = book_reading.find_instrument(self._store.connection, instrument)
        return book_reading.read_instrument(self._store.connection, facts, self.place.recordings)

    @_plainly
    def profile(
        self, instrument: str, *, stage: str = "", session: int | None = None, role: Role = "instrument"
    ) -> "Profile":
        """The profile that counts of a session: as it was measured last.

        Parameters
        ----------
        instrument, stage : str
            Without a stage, the last one.
        session : int, optional
            Its number; by default the last session of the stage that is not set aside.
        role : {"instrument", "control"}

        Raises
        ------
        UnknownNameError
            If there is no such instrument, stage or session, or no measurement of it.
        BookDamagedError
            If the profile is not what was written.
        """
        from timbre_match.keep.book_again import measurement_of
        from timbre_match.keep.files import profile_from_json

        shown = self.show(instrument)
        measurement = measurement_of(shown, stage=stage, session=session, role=role)
        return profile_from_json(
            book_reading.profile_text(self._store.connection, measurement.uuid), where=str(self.place.book)
        )

    @_plainly
    def add_profile(
        self, profile: "Profile", *, instrument: str = "", stage: str = "", conditions: Conditions | None = None
    ) -> bool:
        """Write down a session that was measured before, from its profile; False if the book has it already.

        Parameters
        ----------
        profile : Profile
        instrument, stage : str
            By default those that the profile names; the instrument is added if the book does not have it.
        conditions : Conditions, optional
            By default what the profile notes of its session.

        Raises
        ------
        UnknownNameError
            If neither the profile nor the caller names instrument and stage.
        BookError
            If the book cannot be written to.
        """
        from timbre_match.keep.book_session import write_profile

        return write_profile(self._store, profile, instrument=instrument, stage=stage, conditions=conditions)

    @_plainly
    def add_target(self, target: "Target") -> bool:
        """Keep a target under its name; an earlier one of that name stays. False if the book has this one already."""
        from timbre_match.keep.book_merge import write_target

        return write_target(self._store, target)

    @_plainly
    def targets(self) -> tuple[TargetLine, ...]:
        """The targets that the book keeps, in the order of their names."""
        return book_reading.target_lines(self._store.connection)

    @_plainly
    def target(self, name: str) -> "Target":
        """The latest target of this name.

        Raises
        ------
        UnknownNameError
            If there is none.
        """
        from timbre_match.keep.files import target_from_json

        return target_from_json(book_reading.target_text(self._store.connection, name), where=str(self.place.book))

    @_plainly
    def check(self, *, look_in: Sequence[str | Path] = (), progress: "CheckProgress | None" = None) -> Checked:
        """Read the whole book, and look whether every recording is where it was noted.

        Parameters
        ----------
        look_in : sequence of str or Path
            Folders in which to look for recordings that were moved; found by their SHA-256, their new place is noted.
        progress : CheckProgress, optional
            Wraps the recordings as they are looked at.
        """
        from timbre_match.keep.book_checking import check_book

        return check_book(self._store, [Path(folder) for folder in look_in], progress)

    def backup(self, file: str | Path) -> dict[str, int]:
        """Write the whole book to a file, checked, and the recordings that it keeps to a folder beside it.

        Returns the number of rows of each table. For the rest see
        :func:`timbre_match.keep.book_backup.back_up`.
        """
        from timbre_match.keep.book_backup import back_up

        return back_up(self._store, Path(file))

    @staticmethod
    def restore(file: str | Path, book: str | Path | None = None) -> tuple[dict[str, int], Path | None]:
        """Put a back-up in the place of the book, which need not be readable; what was there stays beside it.

        Returns the number of rows of each table, and where the book that was there lies now. For the rest see
        :func:`timbre_match.keep.book_backup.restore`.
        """
        from timbre_match.keep.book_backup import restore

        restored = restore(Path(file), place_of(book))
        Store(place_of(book), create=False).close()
        return restored

    @_plainly
    def export(self, file: str | Path, *, instruments: Sequence[str] = ()) -> None:
        """Write instruments with all their sessions and measurements to a JSON file, which another book can take in.

        Without names, all instruments, and the targets. Recordings are not in it.

        Raises
        ------
        UnknownNameError
            If there is no such instrument.
        OutputError
            If the file cannot be written.
        """
        from timbre_match.keep.book_merge import export_book

        export_book(self._store.connection, Path(file), instruments)

    @_plainly
    def take_in(self, file: str | Path) -> Merged:
        """Take in what another book has exported, or a single profile or target; what is known already is not doubled.

        Instruments of the same name and family are taken for the same instrument. If the families differ, the one
        that comes in gets a number behind its name.

        Raises
        ------
        SavedFileError, FileVersionError
            If the file is none of these, or something in it is missing or wrong.
        BookError
            If the book cannot be written to.
        """
        from timbre_match.keep.book_merge import take_in_file

        return take_in_file(self._store, Path(file))

    def _session_of(self, facts: Facts, uuid: str) -> BookedSession:
        with plain_errors(self.place):
            shown = book_reading.read_instrument(self._store.connection, facts, self.place.recordings)
        return next(session for stage in shown.stages for session in stage.sessions if session.uuid == uuid)
