"""Notes of strings with known partials, measured: errors against the truth and the Cramer-Rao bound.

Every trial draws a string of its own: an exact pitch, up to 20 partials on f_k = k f0 sqrt(1 + B k^2) (Fletcher 1964),
levels that fall with frequency with some scatter, times to fall 60 dB that fall with frequency, phases, and fresh white
noise. The measurement is told nothing of this. The bound is that of damped exponentials in white noise (Yao & Pandit
1995, IEEE Trans. Signal Process. 43:878) over the stretch that is measured: of a cosine under A exp(-a t) in noise of
variance s^2, the Fisher information of (ln A, a), and equally of (phase, angular frequency), is 1/2 rate / s^2 times
the integral of A^2 exp(-2 a t) (1, t; t, t^2). `benchmarks/ringing.py` prints a table.
"""

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from tests.intake.sounds import recording_of
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import HeldNote, held_notes
from timbre_match.intake.recording import Recording
from timbre_match.measure.recipe import measure_recipe
from timbre_match.measure.records import Recipe, Ringing

Array = NDArray[np.float64]
Kind = Literal["plain", "two-stage", "beating"]

RATE = 44_100
MOST_PARTIALS = 20
LEAD_S = 0.3
PEAK = 0.3
DB_PER_NEPER = 20.0 / np.log(10.0)
LN_1000 = np.log(1000.0)

CENTS_LIMIT, B_SHARE_LIMIT, B_LIMIT, LEVEL_LIMIT_DB, T60_LIMIT, BOUND_LIMIT, SE_LIMIT, NAMED_LIMIT = (
    *(0.5, 0.05, 2e-6, 0.5, 0.05, 1.5, 0.25, 0.9),
)
CLEAR_DB = 20.0
"""How far a partial must lie above its floor for its own level and T60 to be judged."""
SURE = 2.5
POSSIBLE = 0.5
"""A limit can be kept by any method where the bound is at most this share of it."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Setting:
    """What strings to draw: f0, B, T60 of the lowest partial, and the power of all partials at the onset over noise."""

    f0_hz: float
    b: float
    t60_s: float
    snr_db: float

    @property
    def length_s(self) -> float:
        return min(8.0, 0.8 * self.t60_s + 0.3)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class String:
    """A drawn note: its truth and its sound. Arrays of shape (partials,)."""

    f0_hz: float
    b: float
    freq_hz: Array
    amplitude: Array
    t60_s: Array
    kinds: tuple[Kind, ...]
    noise: float
    samples: Array = field(repr=False)

    @property
    def recording(self) -> Recording:
        return recording_of(self.samples, RATE)

    @property
    def level_db(self) -> Array:
        return np.asarray(20.0 * np.log10(self.amplitude) - 10.0 * np.log10(np.sum(self.amplitude**2)))


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Outcome:
    """Errors of the trials in which the right note was found.

    `cents`, `b` and their standard errors have shape (found,); the rest speaks of all partials that are clear of their
    floor, shape (partials,): errors of the level in dB and of T60 as a share of it, with standard errors and bounds.
    """

    missed: int
    heard: int
    cents: Array
    cents_se: Array
    b: Array
    b_se: Array
    level_db: Array
    level_se_db: Array
    level_bound_db: Array
    t60: Array
    t60_se: Array
    t60_bound: Array


def bounds(string: String, begin_s: float, end_s: float) -> tuple[Array, Array]:
    """Bounds of the standard deviations of level (dB, of the share in the total) and of T60 (a share of it)."""
    step_s = 1e-3
    t = np.arange(begin_s, end_s, step_s)
    a = LN_1000 / string.t60_s
    square = string.amplitude[:, None] ** 2 * np.exp(-2.0 * a[:, None] * t)
    zero, one, two = (0.5 * RATE / string.noise**2 * step_s * (square * t**power).sum(axis=1) for power in (0, 1, 2))
    determinant = zero * two - one**2
    own = DB_PER_NEPER**2 * two / determinant
    share = string.amplitude**2 / np.sum(string.amplitude**2)
    level = np.sqrt(own * (1.0 - 2.0 * share) + np.sum(share**2 * own))
    return level, np.sqrt(zero / determinant) / a


def draw_string(setting: Setting, rng: np.random.Generator) -> String:
    """A string whose partials all decay plainly."""
    f0_hz = setting.f0_hz * 2.0 ** (rng.uniform(-40.0, 40.0) / 1200.0)
    k = np.arange(1, MOST_PARTIALS + 1)
    freq_hz = k * f0_hz * np.sqrt(1.0 + setting.b * k**2)
    k = k[freq_hz < 0.4 * RATE]
    freq_hz = freq_hz[: len(k)]
    amplitude = 10.0 ** ((-9.0 * np.log2(k) + rng.uniform(-5.0, 5.0, len(k))) / 20.0)
    t60_s = np.clip(setting.t60_s * k**-0.5 * rng.uniform(0.7, 1.3, len(k)), 0.3, 20.0)
    time_s = np.arange(round(setting.length_s * RATE)) / RATE
    tones = np.zeros(len(time_s))
    for f, a, t60 in zip(freq_hz, amplitude, t60_s, strict=True):
        tones += damped(time_s, f, a, t60, rng.uniform(0.0, 2.0 * np.pi))
    kinds: tuple[Kind, ...] = tuple("plain" for _ in k)
    return _in_noise(tones, setting.snr_db, rng, f0_hz, setting.b, freq_hz, amplitude, t60_s, kinds)


def draw_coupled(rng: np.random.Generator) -> String:
    """A string of eight partials, each of a shape of its own.

    Late stages begin 6 to 18 dB down and last 2.5 to 6 times as long; beats are 3 to 8 in the time of a fall by 60 dB.
    The T60 of a two-stage partial is that of its late stage.
    """
    f0_hz = float(np.exp(rng.uniform(np.log(60.0), np.log(800.0))))
    k = np.arange(1, 9)
    freq_hz = k * f0_hz * np.sqrt(1.0 + 1e-4 * k**2)
    amplitude = 10.0 ** ((-4.0 * np.log2(k) + rng.uniform(-3.0, 3.0, 8)) / 20.0)
    first_s = float(np.exp(rng.uniform(0.0, np.log(8.0))))
    t60_s = first_s * k**-0.3 * rng.uniform(0.8, 1.2, 8)
    time_s = np.arange(round(min(8.0, 0.9 * first_s + 0.3) * RATE)) / RATE
    tones = np.zeros(len(time_s))
    names: tuple[Kind, ...] = ("plain", "two-stage", "beating")
    kinds = tuple(names[rng.integers(3)] for _ in k)
    for f, a, t60, kind in zip(freq_hz, amplitude, t60_s, kinds, strict=True):
        phase = rng.uniform(0.0, 2.0 * np.pi)
        if kind == "two-stage":
            late_db = rng.uniform(-18.0, -6.0)
            tones += damped(time_s, f, a, t60 / rng.uniform(2.5, 6.0), phase)
            tones += damped(time_s, f, a * 10.0 ** (late_db / 20.0), t60, phase)
        else:
            tones += damped(time_s, f, a, t60, phase)
        if kind == "beating":
            beat_hz = rng.uniform(3.0, 8.0) / t60
            other = a * rng.uniform(0.4, 0.95)
            tones += damped(time_s, f + beat_hz, other, t60 * rng.uniform(0.8, 1.25), rng.uniform(0.0, 2.0 * np.pi))
    return _in_noise(tones, rng.uniform(30.0, 60.0), rng, f0_hz, 1e-4, freq_hz, amplitude, t60_s, kinds)


def damped(time_s: Array, freq_hz: float, amplitude: float, t60_s: float, phase: float) -> Array:
    """A damped cosine."""
    return np.asarray(
        amplitude * np.exp(-LN_1000 / t60_s * time_s) * np.cos(2.0 * np.pi * freq_hz * time_s + phase),
        dtype=np.float64,
    )


def _in_noise(
    tones: Array,
    snr_db: float,
    rng: np.random.Generator,
    f0_hz: float,
    b: float,
    freq_hz: Array,
    amplitude: Array,
    t60_s: Array,
    kinds: tuple[Kind, ...],
) -> String:
    gain = PEAK / np.abs(tones).max()
    noise = gain * float(np.sqrt(0.5 * np.sum(amplitude**2))) * 10.0 ** (-snr_db / 20.0)
    samples = np.concatenate([np.zeros(round(LEAD_S * RATE)), gain * tones])
    samples += noise * rng.standard_normal(len(samples))
    return String(
        f0_hz=f0_hz,
        b=b,
        freq_hz=freq_hz,
        amplitude=gain * amplitude,
        t60_s=t60_s,
        kinds=kinds,
        noise=noise,
        samples=samples,
    )


def ringing_note(string: String) -> HeldNote | None:
    """The longest note in it, if it is the right one and rings."""
    try:
        note = max(held_notes(string.recording), key=lambda found: found.end_s - found.start_s)
    except NoHeldNoteError:
        return None
    right = abs(np.log2(note.f0_hz / string.freq_hz[0])) < 1.0 / 24.0
    return note if right and note.kind == "ringing" else None


def measured(string: String) -> tuple[Recipe, Ringing] | None:
    """What is measured of it; None where the note is not found."""
    note = ringing_note(string)
    if note is None:
        return None
    recipe = measure_recipe(string.recording, note)
    assert recipe.ringing is not None
    return recipe, recipe.ringing


def clear_partials(string: String, recipe: Recipe) -> NDArray[np.int64]:
    """Indices of the partials that lie clear of their floor."""
    count = min(len(recipe.k), len(string.freq_hz))
    above_db = np.where(recipe.heard, recipe.level_db - recipe.floor_db, -np.inf)[:count]
    return np.flatnonzero(above_db > CLEAR_DB)


def run(setting: Setting, trials: int, rng: np.random.Generator) -> Outcome:
    """Draw and measure strings."""
    notes: list[tuple[float, ...]] = []
    partials: list[Array] = []
    heard = 0
    for _ in range(trials):
        string = draw_string(setting, rng)
        found = measured(string)
        if found is None:
            continue
        recipe, ringing = found
        heard += int(recipe.heard.sum())
        off_cents = 1200.0 * float(np.log2(recipe.f0_hz / string.f0_hz))
        notes.append(
            (
                off_cents,
                1200.0 / float(np.log(2.0)) * ringing.f0_se_hz / string.f0_hz,
                ringing.inharmonicity_b - string.b,
                ringing.inharmonicity_se,
            )
        )
        level_bound_db, t60_bound = bounds(string, recipe.start_s - LEAD_S, recipe.end_s - LEAD_S)
        clear = clear_partials(string, recipe)
        partials.append(
            np.stack(
                [
                    (recipe.level_db[clear] - string.level_db[clear]),
                    recipe.se_db[clear],
                    level_bound_db[clear],
                    ringing.t60_s[clear] / string.t60_s[clear] - 1.0,
                    ringing.t60_se_s[clear] / string.t60_s[clear],
                    t60_bound[clear],
                ]
            )
        )
    cents, cents_se, b, b_se = np.array(notes).reshape(-1, 4).T
    level, level_se, level_bound, t60, t60_se, t60_bound = np.concatenate([*partials, np.zeros((6, 0))], axis=1)
    return Outcome(
        missed=trials - len(notes),
        heard=heard,
        cents=cents,
        cents_se=cents_se,
        b=b,
        b_se=b_se,
        level_db=level,
        level_se_db=level_se,
        level_bound_db=level_bound,
        t60=t60,
        t60_se=t60_se,
        t60_bound=t60_bound,
    )


def rms(values: Array) -> float:
    """Root mean square of all values."""
    return float(np.sqrt(np.mean(values**2))) if values.size else 0.0


def b_limit(b: float) -> float:
    """How near B is wanted."""
    return max(B_SHARE_LIMIT * b, B_LIMIT)
