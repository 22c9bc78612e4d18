"""Profiles, targets and comparisons to write and read, by hand and by Hypothesis."""

import datetime
import math

import numpy as np
from hypothesis import strategies as st

from timbre_match.advise.suggestions import Move, Suggestion
from timbre_match.compare.records import (
    ColourDistance,
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    Region,
    Repeatability,
)
from timbre_match.measure.profile import Profile, Session, Source, Take
from timbre_match.measure.recipe import Recipe

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

    return Recipe(
        note=draw(st.sampled_from(["A4", "F#2", "Bb7", "C-1"])),
        f0_hz=draw(_frequency),
        cents=draw(st.floats(-50.0, 50.0)),
        start_s=start_s,
        end_s=start_s + draw(st.floats(0.01, 100.0)),
        cycles=draw(st.integers(1, 10**6)),
        points_per_cycle=draw(st.integers(1, 10**5)),
        kind=draw(st.sampled_from(["held", "ringing"])),
        k=np.arange(1, count + 1),
        freq_hz=numbers(_frequency),
        level_db=np.where(heard, numbers(_level), np.nan),
        se_db=np.where(heard, numbers(st.floats(0.0, 50.0)), np.nan),
        floor_db=numbers(st.one_of(_level, st.just(-math.inf))),
        heard=heard,
        phase_rad=np.where(heard, numbers(st.floats(-math.pi, math.pi)), np.nan),
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
