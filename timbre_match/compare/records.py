"""What a comparison consists of: the records that this room hands on.

All differences are instrument minus target, in dB; intervals hold 95 %. Of ringing notes, times to fall by 60 dB are
compared as ratios, instrument over target.
"""

from dataclasses import dataclass
from typing import Literal

from timbre_match.measure.records import DecayShape

Verdict = Literal["stronger", "weaker", "alike", "unsettled"]
SustainVerdict = Literal["longer", "shorter", "alike", "unsettled"]


@dataclass(frozen=True, kw_only=True, slots=True)
class Interval:
    """A value with its 95 % interval."""

    value: float
    low: float
    high: float


@dataclass(frozen=True, kw_only=True, slots=True)
class ColourDistance:
    """Colour distance in dB with its 95 % interval, and the same number between the instrument's own takes.

    `own_db` is None where one take alone says nothing about it and the prior is silent.
    """

    distance_db: Interval
    own_db: float | None


@dataclass(frozen=True, kw_only=True, slots=True)
class Repeatability:
    """Where the scatter came from, and from how many takes."""

    source: Literal["takes", "prior", "both"]
    takes: int
    target_takes: int


@dataclass(frozen=True, kw_only=True, slots=True)
class HarmonicDifference:
    """Instrument minus target for one harmonic of one note, dB with a 95 % interval.

    `p` is the two-sided p-value of "no difference"; `takes_needed` the number of takes a side that would settle an
    unsettled verdict (None where it is settled, or where no practicable number would settle it).
    """

    note: str
    k: int
    freq_hz: float
    difference_db: Interval
    p: float
    verdict: Verdict
    takes_needed: int | None


@dataclass(frozen=True, kw_only=True, slots=True)
class CurvePoint:
    """The body curve at one frequency: pointwise 95 % interval and the simultaneous 95 % band."""

    freq_hz: float
    difference_db: Interval
    simultaneous_low_db: float
    simultaneous_high_db: float


@dataclass(frozen=True, kw_only=True, slots=True)
class Region:
    """A stretch of frequency where the simultaneous band leaves zero."""

    low_hz: float
    high_hz: float
    difference_db: Interval
    verdict: Verdict
    harmonics: int
    notes: int


@dataclass(frozen=True, kw_only=True, slots=True)
class SustainHarmonic:
    """Decay time of one harmonic of one ringing note, instrument over target; `p` is that of "no difference"."""

    note: str
    k: int
    freq_hz: float
    ratio: Interval
    p: float
    verdict: SustainVerdict


@dataclass(frozen=True, kw_only=True, slots=True)
class SustainNote:
    """Decay time of a ringing note as a whole: the mean over all its harmonics, instrument over target."""

    note: str
    ratio: Interval
    p: float
    verdict: SustainVerdict
    harmonics: int


@dataclass(frozen=True, kw_only=True, slots=True)
class SustainPoint:
    """The curve of decay times at one frequency: a ratio with its pointwise interval and the simultaneous band."""

    freq_hz: float
    ratio: Interval
    simultaneous_low: float
    simultaneous_high: float


@dataclass(frozen=True, kw_only=True, slots=True)
class SustainRegion:
    """A stretch of frequency where partials die sooner or later than the target's, those set apart included."""

    low_hz: float
    high_hz: float
    ratio: Interval
    verdict: SustainVerdict
    harmonics: int
    notes: int


@dataclass(frozen=True, kw_only=True, slots=True)
class SetApart:
    """A harmonic that both sides let one hear, but whose decay has no single time; the shapes that were found."""

    note: str
    k: int
    freq_hz: float
    instrument: DecayShape
    target: DecayShape


@dataclass(frozen=True, kw_only=True, slots=True)
class Sustain:
    """How decay times differ; `source` says whether the takes' own scatter was seen or only allowed for."""

    source: Literal["prior", "both"]
    harmonics: tuple[SustainHarmonic, ...]
    notes: tuple[SustainNote, ...]
    curve: tuple[SustainPoint, ...]
    regions: tuple[SustainRegion, ...]
    apart: tuple[SetApart, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class PluckPoint:
    """Where a string was plucked, as a share of its sounding length from the nearer end, with its standard error."""

    beta: float
    se: float


@dataclass(frozen=True, kw_only=True, slots=True)
class PluckNote:
    """Pluck points of one note, take by take; None where the recipe does not tell.

    `taken_out` says whether what the pluck points do to the recipe was taken out of the differences, and `set_aside`
    lists the harmonics that lie so near to a null of the pluck that nothing can be said of them.
    """

    note: str
    instrument: tuple[PluckPoint | None, ...]
    target: tuple[PluckPoint | None, ...]
    differs: bool
    taken_out: bool
    set_aside: tuple[int, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class StringNote:
    """Inharmonicity of one note on both sides, its ratio with an interval, and whether it is certain to differ."""

    note: str
    b: float
    target_b: float
    ratio: Interval
    p: float
    differs: bool


@dataclass(frozen=True, kw_only=True, slots=True)
class Strings:
    """What speaks of the strings rather than of the body.

    `dull_from_hz` is where a loss of high partials begins that goes on to the top while nothing below differs; None
    where there is none.
    """

    notes: tuple[StringNote, ...]
    dull_from_hz: float | None


@dataclass(frozen=True, kw_only=True, slots=True)
class Comparison:
    """How an instrument differs from a target; all differences are instrument minus target.

    `sustain`, `pluck` and `strings` are there where both sides have ringing notes in common.
    """

    instrument: str
    stage: str
    family: str
    target: str
    margin_db: float
    colour_distance: ColourDistance
    closeness_percent: Interval
    repeatability: Repeatability
    harmonics: tuple[HarmonicDifference, ...]
    body_curve: tuple[CurvePoint, ...]
    regions: tuple[Region, ...]
    remarks: tuple[str, ...]
    sustain: Sustain | None = None
    pluck: tuple[PluckNote, ...] = ()
    strings: Strings | None = None
