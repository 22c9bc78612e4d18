"""Plucked instruments with a known truth: decay times, pluck points, inharmonicity, all the tests' own."""

import hashlib
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.measure.records import DecayShape, Recipe, Ringing
from timbre_match.units import note_to_hz

Array = NDArray[np.float64]

NOTES = ("E2", "A2", "D3", "G3", "B3", "E4", "A4", "C5")
TOP_HZ = 5000.0
MOST_HARMONICS = 24


def nothing(freq_hz: Array) -> Array:
    return np.zeros(freq_hz.shape)


def bell(centre_hz: float, size: float, width_octaves: float) -> Callable[[Array], Array]:
    """A change with the shape of a bell over log frequency; the width is at half size."""
    return lambda freq_hz: size * 2.0 ** (-((2.0 * np.log2(freq_hz / centre_hz) / width_octaves) ** 2))


def body_db(freq_hz: Array) -> Array:
    """Resonances of some decibels on top of a falling spectrum, the same for every instrument here."""
    octave = np.log2(freq_hz / 1000.0)
    return np.asarray(-9.0 * octave + 4.0 * np.sin(6.1 * octave) + 3.0 * np.sin(17.0 * octave + 1.0))


def ideal_comb_db(k: NDArray[np.int64], beta: float) -> Array:
    """|sin(k pi beta)| in dB (Fletcher & Rossing, chapter 2), with nulls that a plectrum's width fills to -30 dB."""
    return np.asarray(20.0 * np.log10(np.maximum(np.abs(np.sin(np.pi * k * beta)), 10.0**-1.5)))


def note_of(
    note: str,
    rng: np.random.Generator,
    *,
    log_t60: Array,
    level_db: Array,
    b: float,
    uneven: float,
) -> Recipe:
    k = np.arange(1, log_t60.size + 1)
    f0_hz = note_to_hz(note)
    shapes: tuple[DecayShape, ...] = tuple("beating" if rng.uniform() < uneven else "plain" for _ in k)
    nan = np.full(k.size, np.nan)
    t60_s = np.exp(log_t60)
    return Recipe(
        note=note,
        f0_hz=f0_hz,
        cents=0.0,
        start_s=0.0,
        end_s=2.0,
        cycles=200,
        points_per_cycle=2 * k.size + 2,
        kind="ringing",
        k=k,
        freq_hz=k * f0_hz * np.sqrt(1.0 + b * k**2),
        level_db=level_db - 10.0 * np.log10(np.sum(10.0 ** (level_db / 10.0))),
        se_db=np.full(k.size, 0.3),
        floor_db=np.full(k.size, -90.0),
        heard=np.ones(k.size, dtype=bool),
        phase_rad=np.zeros(k.size),
        ringing=Ringing(
            onset_s=0.0,
            f0_se_hz=0.01,
            inharmonicity_b=b,
            inharmonicity_se=0.01 * b,
            decay=shapes,
            t60_s=t60_s,
            t60_se_s=0.03 * t60_s,
            early_t60_s=nan,
            late_t60_s=nan,
            late_db=nan,
            beat_hz=nan,
            beat_depth_db=nan,
        ),
    )


def plucked(
    seed: int,
    *,
    decay: Callable[[Array], Array] = nothing,
    level: Callable[[Array], Array] = nothing,
    of_note: dict[str, float] | None = None,
    beta: float | Callable[[int], float] | None = None,
    takes: int = 3,
    notes: tuple[str, ...] = NOTES,
    scatter: float = 0.15,
    note_scatter: float = 0.1,
    take_scatter: float = 0.08,
    level_scatter_db: float = 1.5,
    b: float = 4e-5,
    uneven: float = 0.0,
    family: str = "guitar",
) -> Profile:
    """Takes of an instrument whose log decay times differ by `decay` (and by note), and levels in dB by `level`.

    `beta` is the pluck point, of each take if it is a function; without it there is no comb.
    """
    rng = np.random.default_rng(seed)
    made = []
    for take in range(takes):
        shift = rng.normal(0, take_scatter)
        recipes = []
        for note in notes:
            f0_hz = note_to_hz(note)
            k = np.arange(1, min(MOST_HARMONICS, int(TOP_HZ / f0_hz)) + 1)
            freq_hz = np.asarray(k * f0_hz, dtype=np.float64)
            log_t60 = np.log(5.0) - 0.5 * np.log2(freq_hz / 200.0) + decay(freq_hz) + (of_note or {}).get(note, 0.0)
            log_t60 = log_t60 + shift + rng.normal(0, note_scatter) + rng.normal(0, scatter, k.size)
            level_db = body_db(freq_hz) + level(freq_hz) + rng.normal(0, level_scatter_db, k.size)
            if beta is not None:
                level_db = level_db + ideal_comb_db(k, beta(take) if callable(beta) else beta)
            recipes.append(note_of(note, rng, log_t60=log_t60, level_db=level_db, b=b, uneven=uneven))
        heard = hashlib.sha256(b"".join(one.level_db.tobytes() for one in recipes)).hexdigest()
        made.append(Take(recordings=(Source(file=f"{seed}_{take}.wav", sha256=heard),), notes=tuple(recipes)))
    return Profile(instrument=f"guitar {seed}", stage="", family=family, a4_hz=440.0, takes=tuple(made))
