"""The layout of saved files: their keys, and what each may hold.

The classes mirror the JSON key by key. Types are strict (a number written as text is an error), numbers are finite,
and keys that this version does not know are ignored, so that a later minor version may add some.
"""

from typing import Annotated, Literal, Self

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, FiniteFloat, field_validator, model_validator

from timbre_match import units
from timbre_match.errors import UnknownNameError
from timbre_match.measure.profile import Session
from timbre_match.measure.records import DecayShape

PROFILE_FORMAT = "timbre-match/profile"
TARGET_FORMAT = "timbre-match/target"
COMPARISON_FORMAT = "timbre-match/comparison"
VERSION = 1


def _whole_characters(text: str) -> str:
    """Refuse half characters (lone surrogates), which JSON can spell but no screen, table or report can show."""
    if any("\ud800" <= character <= "\udfff" for character in text):
        raise ValueError("the text holds half a character, which cannot be shown")
    return text


Text = Annotated[str, AfterValidator(_whole_characters)]
Frequency = Annotated[FiniteFloat, Field(gt=0.0)]
NotNegative = Annotated[FiniteFloat, Field(ge=0.0)]
Share = Annotated[FiniteFloat, Field(ge=0.0, le=1.0)]
# No count in a recording comes near this; without a bound a hostile file could hold a number of a million digits.
Count = Annotated[int, Field(ge=1, le=2**53)]
CountOrZero = Annotated[int, Field(ge=0, le=2**53)]
Positive = Annotated[FiniteFloat, Field(gt=0.0)]
Verdict = Literal["stronger", "weaker", "alike", "unsettled"]
SustainVerdict = Literal["longer", "shorter", "alike", "unsettled"]


class Layout(BaseModel):
    """Base of all layouts: strict types, unknown keys ignored."""

    model_config = ConfigDict(strict=True, extra="ignore", frozen=True)


class Head(Layout):
    """What every saved file begins with; checked before anything else in it is believed."""

    format: str
    version: int


class NoteName(Layout):
    """Base of what names a note."""

    note: str

    @field_validator("note")
    @classmethod
    def _is_note(cls, name: str) -> str:
        try:
            units.note_number(name)
        except UnknownNameError as error:
            raise ValueError(error.what) from error
        return name


class Harmonic(Layout):
    """One harmonic; `level_db` and `phase_rad` are null exactly where it is not heard.

    What follows `phase_rad` is there for ringing notes alone, and of that only what applies to the partial's decay.
    """

    k: Count
    freq_hz: Frequency
    level_db: FiniteFloat | None
    se_db: NotNegative | None
    floor_db: FiniteFloat | None
    heard: bool
    phase_rad: FiniteFloat | None
    decay: DecayShape | None = None
    t60_s: Positive | None = None
    t60_se_s: NotNegative | None = None
    early_t60_s: Positive | None = None
    late_t60_s: Positive | None = None
    late_db: FiniteFloat | None = None
    beat_hz: NotNegative | None = None
    beat_depth_db: FiniteFloat | None = None

    @model_validator(mode="after")
    def _null_where_not_heard(self) -> Self:
        for name in ("level_db", "phase_rad"):
            if (getattr(self, name) is not None) != self.heard:
                raise ValueError(f"{name} is a number where heard is true, and null where it is false")
        if not self.heard and self.se_db is not None:
            raise ValueError("se_db is null where heard is false")
        return self


class Note(NoteName):
    """The recipe of one note.

    From `onset_s` on for ringing notes alone; missing in files that were written before these were measured.
    """

    f0_hz: Frequency
    cents: FiniteFloat
    start_s: NotNegative
    end_s: NotNegative
    cycles: Count
    points_per_cycle: Count
    kind: Literal["held", "ringing"]
    onset_s: NotNegative | None = None
    f0_se_hz: NotNegative | None = None
    inharmonicity_b: NotNegative | None = None
    inharmonicity_se: NotNegative | None = None
    harmonics: Annotated[list[Harmonic], Field(min_length=1)]

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        if self.end_s <= self.start_s:
            raise ValueError(f"end_s ({self.end_s}) comes after start_s ({self.start_s})")
        for index, harmonic in enumerate(self.harmonics):
            if harmonic.k != index + 1:
                raise ValueError(f"harmonics[{index}].k is {harmonic.k}; harmonics count 1, 2, 3 without a gap")
        return self

    @model_validator(mode="after")
    def _whole_where_ringing(self) -> Self:
        if self.inharmonicity_b is None:
            return self
        if self.kind != "ringing":
            raise ValueError("inharmonicity_b is given of ringing notes alone")
        for name in ("onset_s", "f0_se_hz"):
            if getattr(self, name) is None:
                raise ValueError(f"{name} is missing, though inharmonicity_b is there")
        for index, harmonic in enumerate(self.harmonics):
            for name in ("decay", "t60_s"):
                if (getattr(harmonic, name) is not None) != harmonic.heard:
                    raise ValueError(
                        f"harmonics[{index}].{name} is given where heard is true, and null where it is false"
                    )
        return self


class RecordingFile(Layout):
    """A recording that was measured."""

    file: Text
    sha256: Annotated[str, Field(pattern=r"^[0-9a-f]{64}$")]


class TakeLayout(Layout):
    """One take."""

    recordings: list[RecordingFile]
    notes: list[Note]


class SessionLayout(Layout):
    """When, where and with what takes were recorded; what is empty or missing was not noted."""

    date: str = ""
    room: Text = ""
    microphone: Text = ""

    @field_validator("date")
    @classmethod
    def _is_date(cls, date: str) -> str:
        try:
            Session(date=date)
        except UnknownNameError as error:
            raise ValueError(f"{error.what}; {error.remedy}") from error
        return date


class ProfileBody(Layout):
    """A profile without the head."""

    instrument: Text
    stage: Text
    family: Text
    a4_hz: Frequency
    session: SessionLayout = SessionLayout()  # missing in files that were written before sessions were noted
    takes: Annotated[list[TakeLayout], Field(min_length=1)]


class TargetBody(Layout):
    """A target without the head; its members are whole profiles."""

    name: Text
    members: Annotated[list[ProfileBody], Field(min_length=1)]


class IntervalLayout(Layout):
    """A value with its 95 % interval."""

    value: FiniteFloat
    low: FiniteFloat
    high: FiniteFloat


class ColourDistanceLayout(IntervalLayout):
    """The colour distance, and the same number between the instrument's own takes."""

    own: FiniteFloat | None


class RepeatabilityLayout(Layout):
    """Where the scatter came from."""

    source: Literal["takes", "prior", "both"]
    takes: CountOrZero
    target_takes: CountOrZero


class DifferenceLayout(NoteName):
    """The difference of one harmonic of one note."""

    k: Count
    freq_hz: Frequency
    difference_db: FiniteFloat
    low_db: FiniteFloat
    high_db: FiniteFloat
    p: Share
    verdict: Verdict
    takes_needed: Count | None


class CurvePointLayout(Layout):
    """The body curve at one frequency."""

    freq_hz: Frequency
    difference_db: FiniteFloat
    low_db: FiniteFloat
    high_db: FiniteFloat
    simultaneous_low_db: FiniteFloat
    simultaneous_high_db: FiniteFloat


class RegionLayout(Layout):
    """A stretch of frequency that differs."""

    low_hz: Frequency
    high_hz: Frequency
    difference_db: FiniteFloat
    low_db: FiniteFloat
    high_db: FiniteFloat
    verdict: Verdict
    harmonics: CountOrZero
    notes: CountOrZero


class SustainHarmonicLayout(NoteName):
    """The decay time of one harmonic, instrument over target."""

    k: Count
    freq_hz: Frequency
    ratio: Positive
    low: NotNegative
    high: Positive
    p: Share
    verdict: SustainVerdict


class SustainNoteLayout(NoteName):
    """The decay time of one note."""

    ratio: Positive
    low: NotNegative
    high: Positive
    p: Share
    verdict: SustainVerdict
    harmonics: CountOrZero


class SustainPointLayout(Layout):
    """The curve of decay times at one frequency."""

    freq_hz: Frequency
    ratio: Positive
    low: NotNegative
    high: Positive
    simultaneous_low: NotNegative
    simultaneous_high: Positive


class SustainRegionLayout(Layout):
    """A stretch of frequency whose decay times differ."""

    low_hz: Frequency
    high_hz: Frequency
    ratio: Positive
    low: NotNegative
    high: Positive
    verdict: SustainVerdict
    harmonics: CountOrZero
    notes: CountOrZero


class SetApartLayout(NoteName):
    """A harmonic whose decay has no single time."""

    k: Count
    freq_hz: Frequency
    instrument: DecayShape
    target: DecayShape


class SustainLayout(Layout):
    """How decay times differ."""

    source: Literal["prior", "both"]
    harmonics: list[SustainHarmonicLayout]
    notes: list[SustainNoteLayout]
    curve: list[SustainPointLayout]
    regions: list[SustainRegionLayout]
    apart: list[SetApartLayout]


class PluckPointLayout(Layout):
    """Where a string was plucked, as a share of its length."""

    beta: Annotated[FiniteFloat, Field(gt=0.0, le=0.5)]
    se: NotNegative


class PluckNoteLayout(NoteName):
    """The pluck points of one note; null where a take does not tell."""

    instrument: list[PluckPointLayout | None]
    target: list[PluckPointLayout | None]
    differs: bool
    taken_out: bool
    set_aside: list[Count]


class StringNoteLayout(NoteName):
    """The inharmonicity of one note on both sides."""

    b: Positive
    target_b: Positive
    ratio: Positive
    low: NotNegative
    high: Positive
    p: Share
    differs: bool


class StringsLayout(Layout):
    """What speaks of the strings."""

    notes: list[StringNoteLayout]
    dull_from_hz: Frequency | None


class MoveLayout(Layout):
    """Something that makers try."""

    text: Text
    reversible: bool
    basis: Text


class SuggestionLayout(Layout):
    """One ranked suggestion; `region` is null where its evidence is single harmonics."""

    rank: Count
    region: RegionLayout | None
    evidence: Text
    moves: list[MoveLayout]
    cautions: list[Text]


class ComparisonBody(Layout):
    """A comparison with its suggestions, without the head."""

    instrument: Text
    stage: Text
    family: Text
    target: Text
    margin_db: Annotated[FiniteFloat, Field(gt=0.0)]
    colour_distance_db: ColourDistanceLayout
    closeness_percent: IntervalLayout
    repeatability: RepeatabilityLayout
    harmonics: list[DifferenceLayout]
    body_curve: list[CurvePointLayout]
    regions: list[RegionLayout]
    remarks: list[Text]
    # These three are there for ringing notes alone, and missing in files that were written before.
    sustain: SustainLayout | None = None
    pluck: list[PluckNoteLayout] = []
    strings: StringsLayout | None = None
    suggestions: list[SuggestionLayout]
