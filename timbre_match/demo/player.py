"""The player: the same note twice is never the same.

Each note of each take is one stroke of the bow with its own tuning, drift, vibrato, attack and strength; and each
harmonic of it comes out a little different from last time. That scatter has the size and the structure measured on
real repeats of a bowed instrument: a tilt and a small wobble common to the take, a tilt of each note's own, and the
single harmonic's scatter with heavy tails.

Source of the figures: the double bass, the one bowed instrument among 2,900 single-note recordings of seven
instruments from the openly downloadable Philharmonia Orchestra sample collection, measured for this project.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.demo.draws import Draws

TAKE_TILT_SD_DB_PER_OCTAVE = 0.44
"""Tilt common to all notes of a take."""

NOTE_TILT_SD_DB_PER_OCTAVE = 0.45
"""Tilt of each note's own."""

TAKE_WOBBLE_SD_DB = 0.15
"""Smooth wobble common to a take. Measured: 0.00 in the median pair of takes, 0.31 in the worst tenth."""

BAND_EDGES_HZ = (125.0, 250.0, 500.0, 1000.0, 2000.0, 4000.0, 8000.0)
HARMONIC_SD_DB = (1.26, 1.98, 1.91, 2.40, 2.44, 2.33, 1.73, 1.35)
"""Robust standard deviation per take of a single harmonic, one figure for each band between `BAND_EDGES_HZ`."""

TAIL_DEGREES = 3
"""Degrees of freedom of the scatter's Student's t."""

LARGEST_SCATTER_DB = 10.0
"""Where the tails end: a note with a harmonic further out would have been played again.

Together with `TAIL_DEGREES` this makes the plain standard deviation 1.2 times the robust one in the mean over the
bands, as measured (1.01 to 1.47 from band to band)."""

_ROBUST_SD_OF_T3 = 1.2671
"""1.4826 x median absolute difference of two t3 numbers / sqrt 2, the estimator behind `HARMONIC_SD_DB`, by numerical
convolution of the density."""

_TILT_PIVOT_HZ = 1000.0
_WOBBLE_OCTAVES = (1.0, 1.6, 2.5)


@dataclass(frozen=True, kw_only=True, slots=True)
class TakeHabit:
    """What all notes of one take share: `tilt_db_per_octave`, and the `wobble_db` of each cosine and sine."""

    tilt_db_per_octave: float
    wobble_db: tuple[float, ...]

    def offsets_db(self, freq_hz: ArrayLike) -> NDArray[np.float64]:
        """Offset in dB that the take gives to a harmonic at each frequency; same shape as `freq_hz`."""
        octaves = np.log2(np.asarray(freq_hz, dtype=np.float64) / _TILT_PIVOT_HZ)
        total = self.tilt_db_per_octave * octaves
        for index, period in enumerate(_WOBBLE_OCTAVES):
            turn = 2.0 * np.pi * octaves / period
            total = total + self.wobble_db[2 * index] * np.cos(turn) + self.wobble_db[2 * index + 1] * np.sin(turn)
        return np.asarray(total)


def draw_take_habit(draws: Draws) -> TakeHabit:
    """Draw what all notes of a take will share."""
    tilt, *wobble = draws.normal(1 + 2 * len(_WOBBLE_OCTAVES))
    wobble_sd = TAKE_WOBBLE_SD_DB / np.sqrt(len(_WOBBLE_OCTAVES))
    return TakeHabit(
        tilt_db_per_octave=float(TAKE_TILT_SD_DB_PER_OCTAVE * tilt),
        wobble_db=tuple(float(wobble_sd * number) for number in wobble),
    )


def draw_note_offsets_db(freq_hz: NDArray[np.float64], draws: Draws) -> NDArray[np.float64]:
    """Draw the offset in dB of each harmonic of one note: the note's own tilt and the single harmonics' scatter.

    Parameters
    ----------
    freq_hz : array, shape (K,)
        Frequencies of the harmonics.
    draws : Draws

    Returns
    -------
    array, shape (K,)
    """
    tilt = NOTE_TILT_SD_DB_PER_OCTAVE * float(draws.normal(1)[0])
    sd_db = np.array(HARMONIC_SD_DB)[np.searchsorted(BAND_EDGES_HZ, freq_hz, side="right")]
    scatter = sd_db / _ROBUST_SD_OF_T3 * draws.student_t(len(freq_hz), TAIL_DEGREES)
    scatter = np.clip(scatter, -LARGEST_SCATTER_DB, LARGEST_SCATTER_DB)
    return np.asarray(tilt * np.log2(freq_hz / _TILT_PIVOT_HZ) + scatter)


@dataclass(frozen=True, kw_only=True, slots=True)
class Stroke:
    """One note as it was bowed in one take.

    Attributes
    ----------
    f0_hz : float
        Mean fundamental, a few cents off equal temperament.
    length_s, attack_s, release_s : float
        Whole note with its attack and release.
    drift_cents, bend_cents : float
        Straight and bowed part of the slow drift from one end of the note to the other.
    vibrato_cents, vibrato_hz, vibrato_turn : float
        Half width, rate and starting phase (0 to 1); the width is 0 where the note is played without.
    level_db : float
        How much louder than usual.
    swell_db, swell_hz, swell_turn : float
        Slow unevenness of the bow.
    """

    f0_hz: float
    length_s: float
    attack_s: float
    release_s: float
    drift_cents: float
    bend_cents: float
    vibrato_cents: float
    vibrato_hz: float
    vibrato_turn: float
    level_db: float
    swell_db: float
    swell_hz: float
    swell_turn: float

    def track_hz(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Fundamental in Hz at each time since the note's beginning, shape (n,)."""
        along = 2.0 * time_s / self.length_s - 1.0
        drift = 0.5 * self.drift_cents * along + self.bend_cents * (along**2 - 1.0 / 3.0)
        # the hand begins to swing once the note stands
        width = self.vibrato_cents * np.clip((time_s - 0.15) / 0.25, 0.0, 1.0)
        vibrato = width * np.sin(2.0 * np.pi * (self.vibrato_hz * time_s + self.vibrato_turn))
        return np.asarray(self.f0_hz * 2.0 ** ((drift + vibrato) / 1200.0))

    def envelope(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Bow strength at each time since the note's beginning, shape (n,): 0 at both ends, about 1 between."""
        rise = np.sin(0.5 * np.pi * np.clip(time_s / self.attack_s, 0.0, 1.0)) ** 2
        fall = np.sin(0.5 * np.pi * np.clip((self.length_s - time_s) / self.release_s, 0.0, 1.0)) ** 2
        swell_db = self.swell_db * np.sin(2.0 * np.pi * (self.swell_hz * time_s + self.swell_turn))
        return np.asarray(rise * fall * 10.0 ** ((self.level_db + swell_db) / 20.0))


def draw_stroke(written_hz: float, *, vibrato: bool, draws: Draws) -> Stroke:
    """Draw one bow stroke on a note written at `written_hz`, with or without vibrato."""
    tuning, drift, bend, level = draws.normal(4)
    return Stroke(
        f0_hz=written_hz * 2.0 ** (1.5 * float(tuning) / 1200.0),
        length_s=draws.between(1.25, 1.5),
        attack_s=draws.between(0.04, 0.08),
        release_s=draws.between(0.06, 0.11),
        drift_cents=3.0 * float(drift),
        bend_cents=1.5 * float(bend),
        vibrato_cents=draws.between(8.0, 12.0) if vibrato else 0.0,
        vibrato_hz=draws.between(5.2, 5.9),
        vibrato_turn=draws.between(0.0, 1.0),
        level_db=1.0 * float(level),
        swell_db=draws.between(0.1, 0.5),
        swell_hz=draws.between(0.6, 1.6),
        swell_turn=draws.between(0.0, 1.0),
    )
