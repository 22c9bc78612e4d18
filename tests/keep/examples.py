"""Profiles, targets and comparisons to write and read, by hand and by Hypothesis."""

import dataclasses
import datetime
import math

import numpy as np
from hypothesis import strategies as st
from numpy.typing import NDArray

from timbre_match.advise.suggestions import Move, Suggestion
from timbre_match.compare.records import (
    ColourDistance,
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    PluckNote,
    PluckPoint,
    Region,
    Repeatability,
    SetApart,
    StringNote,
    Strings,
    Sustain,
    SustainHarmonic,
    SustainNote,
    SustainPoint,
    SustainRegion,
)
from timbre_match.intake.notes import NoteKind
from timbre_match.measure.profile import Profile, Session, Source, Take
from timbre_match.measure.records import DecayShape, Recipe, Ringing

SHA = "0123456789abcdef" * 4


def recipe(note: str = "A4", f0_hz: float = 440.25, levels_db: tuple[float, ...] = (-1.5, -6.25, math.nan)) -> Recipe:
    levels = np.array(levels_db)
    heard = np.isfinite(levels)
    k = np.arange(1, len(levels) + 1)
    k_real = k.astype(np.float64)
    return Recipe(
        note=note,
        f0_hz=f0_hz,
        cents=0.9834,
        start_s=0.25,
        end_s=2.125,
        cycles=825,
        points_per_cycle=256,
        kind="held",
        k=k,
        freq_hz=k_real * f0_hz,
        level_db=levels,
        se_db=np.where(heard, 0.125, np.nan),
        floor_db=-70.0 - k_real,
        heard=heard,
        phase_rad=np.where(heard, 0.5 * (k - 1), np.nan),
    )


def ringing_recipe() -> Recipe:
    """A plucked note: a plain decay, a beating one, a partial that is not heard, one of two stages, one unclear."""
    nan = math.nan
    return dataclasses.replace(
        recipe("E4", 329.6, (-3.0, -4.5, nan, -12.0, -20.0)),
        kind="ringing",
        ringing=Ringing(
            onset_s=0.2,
            f0_se_hz=0.0125,
            inharmonicity_b=3.7e-5,
            inharmonicity_se=1.5e-7,
            decay=("plain", "beating", None, "two-stage", "unclear"),
            t60_s=np.array([4.25, 3.5, nan, 2.0, 1.0]),
            t60_se_s=np.array([0.05, 0.25, nan, 0.1, 0.5]),
            early_t60_s=np.array([nan, nan, nan, 1.5, nan]),
            late_t60_s=np.array([nan, nan, nan, 4.5, nan]),
            late_db=np.array([nan, nan, nan, -14.5, nan]),
            beat_hz=np.array([nan, 1.25, nan, nan, nan]),
            beat_depth_db=np.array([nan, 9.5, nan, nan, nan]),
        ),
    )


def profile(*, instrument: str = "No. 41", stage: str = "in the white", takes: int = 2) -> Profile:
    return Profile(
        instrument=instrument,
        stage=stage,
        family="violin",
        a4_hz=442.0,
        takes=tuple(
            Take(
                recordings=(Source(file=f"take {number}.flac", sha256=SHA),),
                notes=(recipe(), recipe("F#5", 740.0, (-0.5, -10.0 - number))),
            )
            for number in range(1, takes + 1)
        ),
        session=Session(date="2026-03-01", room="workshop", microphone="small condenser, 0.7 m"),
    )


REGION = Region(
    low_hz=620.0,
    high_hz=760.0,
    difference_db=Interval(value=-4.6, low=-6.0, high=-3.1),
    verdict="weaker",
    harmonics=8,
    notes=6,
)

COMPARISON = Comparison(
    instrument="No. 41",
    stage="varnished",
    family="violin",
    target="the five that players liked",
    margin_db=3.0,
    colour_distance=ColourDistance(distance_db=Interval(value=3.4, low=2.9, high=3.9), own_db=None),
    closeness_percent=Interval(value=71.0, low=64.0, high=77.0),
    repeatability=Repeatability(source="prior", takes=1, target_takes=5),
    harmonics=(
        HarmonicDifference(
            note="A4",
            k=2,
            freq_hz=880.0,
            difference_db=Interval(value=-1.2, low=-4.4, high=2.0),
            p=1.25e-7,
            verdict="unsettled",
            takes_needed=4,
        ),
        HarmonicDifference(
            note="A4",
            k=3,
            freq_hz=1320.0,
            difference_db=Interval(value=0.1, low=-2.0, high=2.2),
            p=0.92,
            verdict="alike",
            takes_needed=None,
        ),
    ),
    body_curve=(
        CurvePoint(
            freq_hz=680.0,
            difference_db=Interval(value=-4.5, low=-5.5, high=-3.5),
            simultaneous_low_db=-6.5,
            simultaneous_high_db=-2.5,
        ),
    ),
    regions=(REGION,),
    remarks=("One take only: the scatter is that of other instruments.",),
)

_RATIO = Interval(value=0.65, low=0.52, high=0.8)

RINGING_COMPARISON = dataclasses.replace(
    COMPARISON,
    family="guitar",
    sustain=Sustain(
        source="both",
        harmonics=(SustainHarmonic(note="E4", k=2, freq_hz=660.5, ratio=_RATIO, p=1.5e-9, verdict="shorter"),),
        notes=(SustainNote(note="E4", ratio=_RATIO, p=0.004, verdict="unsettled", harmonics=9),),
        curve=(SustainPoint(freq_hz=500.0, ratio=_RATIO, simultaneous_low=0.5, simultaneous_high=0.9),),
        regions=(SustainRegion(low_hz=300.0, high_hz=500.0, ratio=_RATIO, verdict="shorter", harmonics=8, notes=5),),
        apart=(SetApart(note="E4", k=3, freq_hz=991.0, instrument="beating", target="plain"),),
    ),
    pluck=(
        PluckNote(
            note="E4",
            instrument=(PluckPoint(beta=0.125, se=0.003), None),
            target=(PluckPoint(beta=0.2, se=0.004),),
            differs=True,
            taken_out=False,
            set_aside=(5, 8),
        ),
    ),
    strings=Strings(
        notes=(
            StringNote(
                note="E4",
                b=4.4e-5,
                target_b=3.1e-5,
                ratio=Interval(value=1.4, low=1.2, high=1.7),
                p=0.001,
                differs=True,
            ),
        ),
        dull_from_hz=2500.0,
    ),
)

SUGGESTIONS = (
    Suggestion(
        rank=1,
        region=REGION,
        evidence="620 to 760 Hz is weak by 4.6 dB",
        moves=(Move(text="Move the soundpost by its own width at most.", reversible=True, basis="common practice"),),
        cautions=("Slacken the strings first.",),
    ),
    Suggestion(rank=2, region=None, evidence="Harmonic 3 of D4 stands out.", moves=(), cautions=()),
)

_frequency = st.floats(1.0, 20_000.0)
_level = st.floats(-200.0, 0.0)


@st.composite
def recipes(draw: st.DrawFn) -> Recipe:
    count = draw(st.integers(1, 5))
    heard = np.array(draw(st.lists(st.booleans(), min_size=count, max_size=count)))
    start_s = draw(st.floats(0.0, 1000.0))

    def numbers(strategy: st.SearchStrategy[float]) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        return np.array(draw(st.lists(strategy, min_size=count, max_size=count)))

    kind: NoteKind = draw(st.sampled_from(["held", "ringing"]))
    return Recipe(
        note=draw(st.sampled_from(["A4", "F#2", "Bb7", "C-1"])),
        f0_hz=draw(_frequency),
        cents=draw(st.floats(-50.0, 50.0)),
        start_s=start_s,
        end_s=start_s + draw(st.floats(0.01, 100.0)),
        cycles=draw(st.integers(1, 10**6)),
        points_per_cycle=draw(st.integers(1, 10**5)),
        kind=kind,
        k=np.arange(1, count + 1),
        freq_hz=numbers(_frequency),
        level_db=np.where(heard, numbers(_level), np.nan),
        se_db=np.where(heard, numbers(st.floats(0.0, 50.0)), np.nan),
        floor_db=numbers(st.one_of(_level, st.just(-math.inf))),
        heard=heard,
        phase_rad=np.where(heard, numbers(st.floats(-math.pi, math.pi)), np.nan),
        ringing=draw(_ringing(heard)) if kind == "ringing" and draw(st.booleans()) else None,
    )


@st.composite
def _ringing(draw: st.DrawFn, heard: NDArray[np.bool_]) -> Ringing:
    shapes: list[DecayShape] = ["plain", "two-stage", "beating", "unclear"]
    decay = tuple(draw(st.sampled_from(shapes)) if each else None for each in heard)

    def numbers(low: float, high: float, where: list[bool]) -> NDArray[np.float64]:
        return np.array([draw(st.floats(low, high)) if each else math.nan for each in where])

    staged, beating = [shape == "two-stage" for shape in decay], [shape == "beating" for shape in decay]
    return Ringing(
        onset_s=draw(st.floats(0.0, 100.0)),
        f0_se_hz=draw(st.floats(0.0, 1.0)),
        inharmonicity_b=draw(st.floats(0.0, 1e-2)),
        inharmonicity_se=draw(st.one_of(st.floats(0.0, 1e-3), st.just(math.nan))),
        decay=decay,
        t60_s=numbers(0.05, 60.0, list(heard)),
        t60_se_s=numbers(0.0, 10.0, list(heard)),
        early_t60_s=numbers(0.05, 60.0, staged),
        late_t60_s=numbers(0.05, 60.0, staged),
        late_db=numbers(-60.0, 6.0, staged),
        beat_hz=numbers(0.01, 50.0, beating),
        beat_depth_db=numbers(0.1, 40.0, beating),
    )


_text = st.text(st.characters(exclude_categories=["Cs"]), max_size=20)


@st.composite
def profiles(draw: st.DrawFn) -> Profile:
    takes = st.builds(
        Take,
        recordings=st.lists(st.builds(Source, file=_text, sha256=st.just(SHA)), max_size=2).map(tuple),
        notes=st.lists(recipes(), max_size=3).map(tuple),
    )
    return Profile(
        instrument=draw(_text),
        stage=draw(_text),
        family=draw(_text),
        a4_hz=draw(st.floats(380.0, 480.0)),
        takes=tuple(draw(st.lists(takes, min_size=1, max_size=3))),
        session=Session(
            date=draw(st.one_of(st.just(""), st.dates().map(datetime.date.isoformat))),
            room=draw(_text),
            microphone=draw(_text),
        ),
    )
