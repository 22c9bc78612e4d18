"""What the bench book hands out: instruments, stages, sessions, takes, recordings, and what a check has found."""

import math
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from timbre_match.errors import TimbreMatchError, UnknownNameError

if TYPE_CHECKING:
    from timbre_match.measure.profile import Session

Role = Literal["instrument", "control"]
"""Whose takes: those of the instrument itself, or of the control that was recorded in the same session."""

Lying = Literal["in place", "missing", "altered"]
"""Whether a recording is where it was noted: `missing` covers one that was moved, `altered` one with other bytes."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Conditions:
    """Under which conditions a session was recorded, as the maker notes it; what was not noted is empty or None.

    Attributes
    ----------
    date : str
        YYYY-MM-DD.
    room, microphone, player, strings, remarks : str
        In the maker's own words.
    microphone_distance_m : float or None
        From the microphone to the instrument, metres.
    bow : str
        Bow, plectrum, reed or mouthpiece.
    temperature_c, humidity_percent : float or None
        Of the room: degrees Celsius, and relative humidity in percent.
    a4_hz : float or None
        Tuning reference.

    Raises
    ------
    UnknownNameError
        If the date is none, or a number is outside of what can be.
    """

    date: str = ""
    room: str = ""
    microphone: str = ""
    microphone_distance_m: float | None = None
    player: str = ""
    bow: str = ""
    strings: str = ""
    temperature_c: float | None = None
    humidity_percent: float | None = None
    a4_hz: float | None = None
    remarks: str = ""

    def __post_init__(self) -> None:
        for value, name, low, high, unit in (
            (self.microphone_distance_m, "microphone distance", 0.0, 1000.0, " m"),
            (self.temperature_c, "temperature", -60.0, 80.0, " degrees Celsius"),
            (self.humidity_percent, "relative humidity", 0.0, 100.0, " %"),
            (self.a4_hz, "tuning reference", 300.0, 600.0, " Hz"),
        ):
            if value is not None and not (math.isfinite(value) and low <= value <= high):
                raise UnknownNameError(
                    f"{value:g}{unit} is no {name}",
                    cause="a slip, or another unit",
                    remedy=f"{low:g} to {high:g}{unit}",
                )
        for text in (self.room, self.microphone, self.player, self.bow, self.strings, self.remarks):
            whole_characters(text)
        if self.date:
            # The record that profiles carry knows what a date is.
            self.session()

    def session(self) -> "Session":
        """The part of it that a profile carries; the distance belongs to the microphone's words there."""
        from timbre_match.measure.profile import Session

        distance = "" if self.microphone_distance_m is None else f"{self.microphone_distance_m:g} m"
        return Session(
            date=self.date, room=self.room, microphone=", ".join(part for part in (self.microphone, distance) if part)
        )


@dataclass(frozen=True, kw_only=True, slots=True)
class BookedRecording:
    """A recording: its file's name, size and SHA-256, where it lies, and whether it was measured.

    `path` is where it lay when it was logged (empty if that was on another machine), `kept` its copy in the book's own
    folder, if there is one.
    """

    file: str
    sha256: str
    size_bytes: int
    path: str
    kept: Path | None
    measured: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class BookedTake:
    """One take of a session."""

    uuid: str
    role: Role
    number: int
    recordings: tuple[BookedRecording, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Measurement:
    """One measuring of a session's takes: when, with which version of this program, and how many notes it gave.

    `instrument` is the name that its profile carries: of a control, what the maker calls that.
    """

    uuid: str
    role: Role
    measured_at: str
    measured_with: str
    instrument: str
    note_count: int


@dataclass(frozen=True, kw_only=True, slots=True)
class BookedSession:
    """One session of an instrument at a stage.

    `number` counts the sessions of the instrument in the order in which they were logged; `measurements` are in order,
    the last of each role being the one that counts.
    """

    uuid: str
    number: int
    logged_at: str
    conditions: Conditions
    set_aside: bool
    takes: tuple[BookedTake, ...]
    measurements: tuple[Measurement, ...]

    @property
    def day(self) -> str:
        """The day of the recording, or where that was not noted, of the logging (UTC)."""
        return self.conditions.date or self.logged_at[:10]

    def takes_of(self, role: Role) -> tuple[BookedTake, ...]:
        """The takes of the instrument, or of the control."""
        return tuple(take for take in self.takes if take.role == role)

    def measurements_of(self, role: Role) -> tuple[Measurement, ...]:
        """The measurements of the instrument, or of the control; the last one counts."""
        return tuple(measurement for measurement in self.measurements if measurement.role == role)


@dataclass(frozen=True, kw_only=True, slots=True)
class BookedStage:
    """A state of the build and its sessions, the earliest first."""

    uuid: str
    name: str
    sessions: tuple[BookedSession, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class InstrumentLine:
    """One instrument in the list: its facts, how many stages and sessions it has (without those set aside)."""

    uuid: str
    name: str
    family: str
    remarks: str
    set_aside: bool
    stage_count: int
    session_count: int
    last_stage: str
    last_day: str


@dataclass(frozen=True, kw_only=True, slots=True)
class BookedInstrument:
    """An instrument with all that was logged of it, its stages in the order of their first session."""

    uuid: str
    name: str
    earlier_names: tuple[str, ...]
    family: str
    remarks: str
    set_aside: bool
    added_at: str
    stages: tuple[BookedStage, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class TargetLine:
    """A target that the book holds."""

    uuid: str
    name: str
    added_at: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Logged:
    """A session that was written, what the maker should know about it, and what could not be used."""

    session: BookedSession
    instrument: str
    stage: str
    warnings: tuple[str, ...]
    failures: tuple[TimbreMatchError, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class Again:
    """How many measurements were made anew, what the maker should know about them, and what could not be used."""

    measurements: int
    warnings: tuple[str, ...]
    failures: tuple[TimbreMatchError, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class RecordingState:
    """One place of a recording, and how it lies there now."""

    file: str
    sha256: str
    place: str
    kept: bool
    lying: Lying
    instruments: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class UnmeasuredTake:
    """A recording of a take that no measurement covers."""

    instrument: str
    stage: str
    session_number: int
    take_number: int
    role: Role
    file: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Checked:
    """What a check of the whole book has found.

    Attributes
    ----------
    damage : tuple of str
        What is wrong inside the book itself; empty for a sound one.
    last_good : Path or None
        For a damaged book, the latest of its own back-ups that is whole.
    recordings : tuple of RecordingState
        Every noted place of every recording; of a damaged book none, as nothing in it can be relied upon.
    unmeasured : tuple of UnmeasuredTake
    counts : dict of str to int
        Rows of each table.
    """

    damage: tuple[str, ...]
    last_good: Path | None
    recordings: tuple[RecordingState, ...]
    unmeasured: tuple[UnmeasuredTake, ...]
    counts: dict[str, int]

    @property
    def sound(self) -> bool:
        """Whether the book is whole and every recording is where it was noted."""
        return not self.damage and all(state.lying == "in place" for state in self.recordings)


@dataclass(frozen=True, kw_only=True, slots=True)
class Merged:
    """What came in: how many of each were new, and how many were known already."""

    instruments: int
    sessions: int
    measurements: int
    targets: int
    known: int
    renamed: tuple[tuple[str, str], ...] = ()


def whole_characters(text: str) -> str:
    """Refuse half characters (lone surrogates), which neither a database nor a screen can hold.

    Raises
    ------
    UnknownNameError
    """
    if any("\ud800" <= character <= "\udfff" for character in text):
        raise UnknownNameError(
            "the text holds half a character, which cannot be written down",
            cause="the terminal's alphabet is not the one that the text was written in",
            remedy="type the text anew",
        )
    return text
