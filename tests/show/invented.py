"""Invented records for drawing tests: nobody's instrument, made from formulas and a seed."""

import math

import numpy as np

from timbre_match.compare.records import (
    ColourDistance,
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    Region,
    Repeatability,
    Verdict,
)
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.measure.recipe import Recipe
from timbre_match.units import note_to_hz

NOTES = ("G3", "B3", "D4", "F#4", "A4", "C#5", "E5", "G#5", "B5")
HIGHEST_HZ = 9000.0
MOST_HARMONICS = 40


def bump_db(freq_hz: float) -> float:
    """The invented truth: 5 dB too weak around 690 Hz, 4 dB too strong around 2.6 kHz."""
    return -5.0 * math.exp(-((math.log2(freq_hz / 690.0) / 0.35) ** 2)) + 4.0 * math.exp(
        -((math.log2(freq_hz / 2600.0) / 0.3) ** 2)
    )


def recipe(note: str, rng: np.random.Generator, *, changed: bool) -> Recipe:
    f0_hz = note_to_hz(note)
    k = np.arange(1, min(int(HIGHEST_HZ / f0_hz), MOST_HARMONICS) + 1)
    freq_hz = np.asarray(k * f0_hz, dtype=np.float64)
    level_db = -9.0 * np.log2(k) + 6.0 * np.sin(freq_hz / 210.0) + rng.normal(0.0, 1.3, k.size)
    if changed:
        level_db += [bump_db(freq) for freq in freq_hz]
    level_db -= 10.0 * np.log10(np.sum(10.0 ** (level_db / 10.0)))
    floor_db = np.full(k.size, -52.0) + rng.normal(0.0, 1.0, k.size)
    heard = level_db > floor_db
    return Recipe(
        note=note,
        f0_hz=f0_hz,
        cents=1.5,
        start_s=0.5,
        end_s=2.5,
        cycles=int(2.0 * f0_hz),
        points_per_cycle=256,
        kind="held",
        k=k,
        freq_hz=freq_hz,
        level_db=np.where(heard, level_db, np.nan),
        se_db=np.where(heard, 0.12, np.nan),
        floor_db=floor_db,
        heard=heard,
        phase_rad=np.where(heard, 0.0, np.nan),
    )


def profile(
    instrument: str = "Copper beech no. 3",
    *,
    changed: bool = True,
    takes: int = 3,
    seed: int = 1,
    notes: tuple[str, ...] = NOTES,
    stage: str = "in the white",
) -> Profile:
    rng = np.random.default_rng(seed)
    return Profile(
        instrument=instrument,
        stage=stage,
        family="violin",
        a4_hz=440.0,
        takes=tuple(
            Take(
                recordings=(Source(file=f"take {number}.flac", sha256="0" * 64),),
                notes=tuple(recipe(note, rng, changed=changed) for note in notes),
            )
            for number in range(1, takes + 1)
        ),
    )


def target(name: str = "The old one on the shelf") -> Target:
    return Target(name=name, members=(profile("old", changed=False, seed=2),))


def region(low_hz: float, high_hz: float, value: float, half: float = 1.4) -> Region:
    return Region(
        low_hz=low_hz,
        high_hz=high_hz,
        difference_db=Interval(value=value, low=value - half, high=value + half),
        verdict="stronger" if value > 0 else "weaker",
        harmonics=8,
        notes=6,
    )


def harmonic(note: str, k: int, value: float, verdict: Verdict, half: float = 2.6) -> HarmonicDifference:
    return HarmonicDifference(
        note=note,
        k=k,
        freq_hz=k * note_to_hz(note),
        difference_db=Interval(value=value, low=value - half, high=value + half),
        p=0.001 if verdict in ("stronger", "weaker") else 0.4,
        verdict=verdict,
        takes_needed=(4 + k % 3 if k % 5 else None) if verdict == "unsettled" else None,
    )


def comparison(
    *,
    instrument: str = "Copper beech no. 3",
    target_name: str = "The old one on the shelf",
    notes: tuple[str, ...] = NOTES,
    regions: tuple[Region, ...] = (region(590.0, 810.0, -4.6), region(2250.0, 3020.0, 3.7)),
    seed: int = 3,
) -> Comparison:
    rng = np.random.default_rng(seed)
    harmonics = []
    for note in notes:
        for k in range(1, min(int(HIGHEST_HZ / note_to_hz(note)), MOST_HARMONICS) + 1):
            value = bump_db(k * note_to_hz(note)) + float(rng.normal(0.0, 0.9))
            verdict: Verdict = "alike" if abs(value) < 1.2 else "unsettled"
            if abs(value) > 2.6:
                verdict = "stronger" if value > 0 else "weaker"
            harmonics.append(harmonic(note, k, value, verdict))
    curve = []
    for freq_hz in np.geomspace(190.0, 9200.0, 90):
        value = bump_db(float(freq_hz))
        half = 0.9 + 0.35 * abs(math.log2(float(freq_hz) / 1200.0))
        curve.append(
            CurvePoint(
                freq_hz=float(freq_hz),
                difference_db=Interval(value=value, low=value - half, high=value + half),
                simultaneous_low_db=value - 1.6 * half,
                simultaneous_high_db=value + 1.6 * half,
            )
        )
    return Comparison(
        instrument=instrument,
        stage="in the white",
        family="violin",
        target=target_name,
        margin_db=3.0,
        colour_distance=ColourDistance(distance_db=Interval(value=3.4, low=2.9, high=3.9), own_db=0.8),
        closeness_percent=Interval(value=62.0, low=55.0, high=70.0),
        repeatability=Repeatability(source="both", takes=3, target_takes=3),
        harmonics=tuple(harmonics),
        body_curve=tuple(curve),
        regions=regions,
        remarks=("The sessions differ: microphone, room and player are in the difference.",),
    )
