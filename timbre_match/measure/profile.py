"""The recipes of an instrument at one build stage, over all takes, and where they came from."""

import datetime
from dataclasses import dataclass
from typing import TYPE_CHECKING

from timbre_match.errors import UnknownNameError

if TYPE_CHECKING:
    from timbre_match.measure.records import Recipe


@dataclass(frozen=True, kw_only=True, slots=True)
class Source:
    """A recording that a take was measured from: file name and SHA-256 of its bytes (hex)."""

    file: str
    sha256: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Session:
    """When, where and with what takes were recorded, as the maker notes it; what is not noted is empty.

    `date` is written YYYY-MM-DD (ISO 8601); `room` and `microphone` are in the maker's own words.

    Raises
    ------
    UnknownNameError
        If `date` is neither empty nor a day of the calendar written so.
    """

    date: str = ""
    room: str = ""
    microphone: str = ""

    def __post_init__(self) -> None:
        if self.date and not _is_date(self.date):
            shown = self.date if len(self.date) <= 30 else self.date[:27] + "..."
            raise UnknownNameError(
                f"{shown!r} is not a date",
                cause="a date is a day of the calendar: year, month and day, in that order and with all their digits",
                remedy="write it like 2026-03-01",
            )


def _is_date(text: str) -> bool:
    try:
        # Other spellings, such as 20260301, are read too, but come back in the one that is wanted here.
        return datetime.date.fromisoformat(text).isoformat() == text
    except ValueError:
        return False


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Take:
    """One run through the notes: its recordings, and the recipes measured in them, in order of playing."""

    recordings: tuple[Source, ...]
    notes: "tuple[Recipe, ...]"


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Profile:
    """All takes of one instrument at one stage.

    `instrument`, `stage` and `family` may be empty where the maker named none. `a4_hz` is the tuning reference that
    the note names go by. `session` says when, where and with what the takes were recorded, as far as it was noted.
    """

    instrument: str
    stage: str
    family: str
    a4_hz: float
    takes: tuple[Take, ...]
    session: Session = Session()
