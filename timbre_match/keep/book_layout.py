"""The layout of what a bench book exports: its rows as JSON, instrument by instrument.

Profiles and targets stand in it as in files of their own. Times are UTC (ISO 8601); identifiers are UUIDs, by which
another book knows what it has already.
"""

from typing import Annotated, Literal

from pydantic import Field, FiniteFloat

from timbre_match.keep.layout import CountOrZero, Layout, ProfileBody, TargetBody, Text

BOOK_FORMAT = "timbre-match/bench-book"

Uuid = Annotated[str, Field(pattern=r"^[0-9a-f]{8}(-[0-9a-f]{4}){3}-[0-9a-f]{12}$")]
Time = Annotated[str, Field(pattern=r"^\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}\+00:00$")]
Sha256 = Annotated[str, Field(pattern=r"^[0-9a-f]{64}$")]
Name = Annotated[Text, Field(min_length=1)]
BookedRole = Literal["instrument", "control"]


class FactsLayout(Layout):
    """What an instrument was called and was from a time on."""

    uuid: Uuid
    written_at: Time
    name: Name
    family: Text
    remarks: Text
    set_aside: bool


class BookedRecordingLayout(Layout):
    """A recording of a take; `path` is where it lay on the machine that logged it, a hint at most."""

    file: Text
    sha256: Sha256
    size_bytes: CountOrZero


class BookedTakeLayout(Layout):
    """A take."""

    uuid: Uuid
    role: BookedRole
    number: CountOrZero
    recordings: list[BookedRecordingLayout]


class MeasurementLayout(Layout):
    """A measurement with its profile."""

    uuid: Uuid
    role: BookedRole
    measured_at: Time
    measured_with: Text
    profile: ProfileBody


class MarkLayout(Layout):
    """That a session was set aside from a time on, or brought back."""

    uuid: Uuid
    written_at: Time
    set_aside: bool


class ConditionsLayout(Layout):
    """The conditions of a session; what was not noted is empty or null."""

    date: str
    room: Text
    microphone: Text
    microphone_distance_m: FiniteFloat | None
    player: Text
    bow: Text
    strings: Text
    temperature_c: FiniteFloat | None
    humidity_percent: FiniteFloat | None
    a4_hz: FiniteFloat | None
    remarks: Text


class BookedSessionLayout(Layout):
    """A session."""

    uuid: Uuid
    logged_at: Time
    conditions: ConditionsLayout
    marks: list[MarkLayout]
    takes: list[BookedTakeLayout]
    measurements: list[MeasurementLayout]


class BookedStageLayout(Layout):
    """A stage."""

    uuid: Uuid
    name: Name
    sessions: list[BookedSessionLayout]


class BookedInstrumentLayout(Layout):
    """An instrument under all its identifiers."""

    uuids: Annotated[list[Uuid], Field(min_length=1)]
    facts: Annotated[list[FactsLayout], Field(min_length=1)]
    stages: list[BookedStageLayout]


class BookedTargetLayout(Layout):
    """A target."""

    uuid: Uuid
    added_at: Time
    target: TargetBody


class BookBody(Layout):
    """What a bench book exports, without the head."""

    instruments: list[BookedInstrumentLayout]
    targets: list[BookedTargetLayout]
