"""The recipes of an instrument at one build stage, over all takes, and where they came from."""

from dataclasses import dataclass

from timbre_match.measure.recipe import Recipe


@dataclass(frozen=True, kw_only=True, slots=True)
class Source:
    """A recording that a take was measured from: file name and SHA-256 of its bytes (hex)."""

    file: str
    sha256: str


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Take:
    """One run through the notes: its recordings, and the recipes measured in them, in order of playing."""

    recordings: tuple[Source, ...]
    notes: tuple[Recipe, ...]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Profile:
    """All takes of one instrument at one stage.

    `instrument`, `stage` and `family` may be empty where the maker named none. `a4_hz` is the tuning reference that
    the note names go by.
    """

    instrument: str
    stage: str
    family: str
    a4_hz: float
    takes: tuple[Take, ...]
