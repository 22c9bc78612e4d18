"""What a comparison consists of: the records that this room hands on.

All differences are instrument minus target, in dB; intervals hold 95 %.
"""

from dataclasses import dataclass
from typing import Literal

Verdict = Literal["stronger", "weaker", "alike", "unsettled"]


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
class Comparison:
    """How an instrument differs from a target; all differences are instrument minus target."""

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
