"""Tones of harmonics with a known make-up, measured: errors against the Cramer-Rao bound.

Every trial draws a tone of up to 20 harmonics of one strength, with phases and an exact pitch of its own, in fresh
white noise; the measurement is told nothing of this. The bounds are those of the whole recording (Kay 1993,
*Fundamentals of Statistical Signal Processing: Estimation Theory*; harmonics in white noise: Nielsen, Jensen &
Christensen 2017, Signal Processing 135:188). `benchmarks/accuracy.py` prints a table of them.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tests.intake.sounds import recording_of
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import held_notes
from timbre_match.intake.recording import Recording
from timbre_match.measure.recipe import Recipe, measure_recipe

Array = NDArray[np.float64]

MOST_HARMONICS = 20
HIGHEST_OF_RATE = 0.45
SPREAD_CENTS = 50.0
AMPLITUDE = 0.04
DB_PER_NEPER = 20.0 / np.log(10.0)

LEVEL_LIMIT, F0_LIMIT, BIAS_LIMIT_DB, SE_LIMIT, VIBRATO_LIMIT_DB = 1.25, 1.5, 0.02, 0.2, 0.3


@dataclass(frozen=True, kw_only=True, slots=True)
class Setting:
    """What tones to draw: nominal fundamental, rate, ratio of each harmonic's power to the noise's, length, vibrato."""

    f0_hz: float
    sample_rate_hz: int
    snr_db: float
    length_s: float = 1.0
    vibrato_cents: float = 0.0
    drift_cents: float = 0.0

    @property
    def harmonics(self) -> int:
        """How many harmonics the tones have, whatever pitch is drawn."""
        highest_hz = self.f0_hz * 2.0 ** ((SPREAD_CENTS + self.vibrato_cents + self.drift_cents) / 1200.0)
        return min(MOST_HARMONICS, int(HIGHEST_OF_RATE * self.sample_rate_hz / highest_hz))


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Outcome:
    """Errors of the trials in which the right note was found.

    Attributes
    ----------
    level_error_db, se_db : arrays, shape (found, harmonics)
    f0_error : array, shape (found,)
        Error of the fundamental as a multiple of its bound.
    level_bound_db : float
    missed : int
        Trials with another note, or with a harmonic that was not heard.
    """

    level_error_db: Array
    se_db: Array
    f0_error: Array
    level_bound_db: float
    missed: int


def longest_recipe(recording: Recording) -> Recipe:
    """The recipe of the longest held note."""
    return measure_recipe(recording, max(held_notes(recording), key=lambda note: note.end_s - note.start_s))


def level_bound_db(setting: Setting) -> float:
    """Cramer-Rao bound of a level's standard deviation, dB, where every harmonic has the same share of the total.

    A harmonic's own level is bound by b = 8.686 / sqrt(N A^2 / (2 sigma^2)); its share s of the total power by
    b^2 (1 - 2 s) + sum over j of s_j^2 b_j^2, since the total errs with it.
    """
    samples = round(setting.length_s * setting.sample_rate_hz)
    own = DB_PER_NEPER / np.sqrt(samples * 10.0 ** (setting.snr_db / 10.0))
    return float(own * np.sqrt(1.0 - 1.0 / setting.harmonics))


def f0_bound_hz(setting: Setting) -> float:
    """Cramer-Rao bound of the fundamental's standard deviation, Hz: 24 sigma^2 / (N (N^2 - 1) sum A_k^2 k^2)."""
    samples = round(setting.length_s * setting.sample_rate_hz)
    k = np.arange(1, setting.harmonics + 1)
    information = 2.0 * 10.0 ** (setting.snr_db / 10.0) * np.sum(k**2)
    variance = 24.0 / (samples * (samples**2 - 1.0) * information)
    return float(np.sqrt(variance) * setting.sample_rate_hz / (2.0 * np.pi))


def draw_tone(setting: Setting, rng: np.random.Generator) -> tuple[Array, float]:
    """One noisy tone, and its true fundamental in Hz."""
    time_s = np.arange(round(setting.length_s * setting.sample_rate_hz)) / setting.sample_rate_hz
    f0_hz = setting.f0_hz * 2.0 ** (rng.uniform(-SPREAD_CENTS, SPREAD_CENTS) / 1200.0)
    cents = setting.vibrato_cents * np.sin(2.0 * np.pi * (6.0 * time_s + rng.uniform()))
    cents += setting.drift_cents * (time_s / setting.length_s - 0.5)
    turns = np.cumsum(f0_hz * 2.0 ** (cents / 1200.0)) / setting.sample_rate_hz
    tone = np.zeros(len(time_s))
    for k in range(1, setting.harmonics + 1):
        tone += np.cos(2.0 * np.pi * (k * turns + rng.uniform()))
    noise = np.sqrt(0.5) * 10.0 ** (-setting.snr_db / 20.0)
    return AMPLITUDE * (tone + noise * rng.standard_normal(len(time_s))), f0_hz


def run(setting: Setting, trials: int, rng: np.random.Generator) -> Outcome:
    """Draw and measure tones."""
    count = setting.harmonics
    truth_db = -10.0 * np.log10(count)
    levels, errors, pitches = [], [], []
    for _ in range(trials):
        samples, f0_hz = draw_tone(setting, rng)
        try:
            recipe = longest_recipe(recording_of(samples, setting.sample_rate_hz))
        except NoHeldNoteError:
            continue
        if abs(recipe.f0_hz / f0_hz - 1.0) > 0.02 or len(recipe.k) < count or not recipe.heard[:count].all():
            continue
        levels.append(recipe.level_db[:count] - truth_db)
        errors.append(recipe.se_db[:count])
        pitches.append((recipe.f0_hz - f0_hz) / f0_bound_hz(setting))
    return Outcome(
        level_error_db=np.array(levels).reshape(-1, count),
        se_db=np.array(errors).reshape(-1, count),
        f0_error=np.array(pitches),
        level_bound_db=level_bound_db(setting),
        missed=trials - len(levels),
    )


def rms(values: Array) -> float:
    """Root mean square of all values."""
    return float(np.sqrt(np.mean(values**2)))
