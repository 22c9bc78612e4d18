"""Notes of stiff strings with known partials, measured: errors against the truth and the Cramer-Rao bound.

Every trial draws a string of its own: an exact pitch, up to 20 partials on f_k = k f0 sqrt(1 + B k^2) (Fletcher 1964),
levels that fall with frequency with some scatter, times to fall 60 dB that fall with frequency, phases, and fresh white
noise. The measurement is told nothing of this. The bound is that of damped exponentials in white noise (Yao & Pandit
1995, IEEE Trans. Signal Process. 43:878): with g(t) = A exp(-a t) in noise of variance s^2, a cosine's Fisher
information of (ln A, a), and equally of (phase, frequency), is 1/2 rate / s^2 times the integral of g^2 (1, t; t, t^2).
`benchmarks/ringing.py` prints a table.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tests.intake.sounds import recording_of
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import held_notes
from timbre_match.measure.recipe import measure_recipe
from timbre_match.measure.records import Recipe

Array = NDArray[np.float64]

MOST_PARTIALS = 20
LEAD_S = 0.3
PEAK = 0.3
DB_PER_NEPER = 20.0 / np.log(10.0)
LN_1000 = np.log(1000.0)


@dataclass(frozen=True, kw_only=True, slots=True)
class Setting:
    """What strings to draw: f0, B, T60 of the lowest partial, and the power of all partials at the onset over noise."""

    f0_hz: float
    b: float
    t60_s: float
    snr_db: float
    sample_rate_hz: int = 44_100

    @property
    def length_s(self) -> float:
        return min(8.0, 0.8 * self.t60_s + 0.3)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class String:
    """A drawn note: the truth, and the sound."""

    f0_hz: float
    b: float
    onset_s: float
    freq_hz: Array
    amplitude: Array
    t60_s: Array
    noise: float
    samples: Array = field(repr=False)
    sample_rate_hz: int

    @property
    def level_db(self) -> Array:
        power = self.amplitude**2
        return np.asarray(10.0 * np.log10(power / power.sum()))

    def bounds(self, begin_s: float, end_s: float) -> tuple[Array, Array, Array]:
        """Bounds of the standard deviations of ln A, of ln T60, and of the frequency in Hz, for t from begin to end."""
        t = np.arange(begin_s, end_s, 1e-3)
        a = LN_1000 / self.t60_s
        square = self.amplitude[:, None] ** 2 * np.exp(-2.0 * a[:, None] * t)
        scale = 0.5 * self.sample_rate_hz / self.noise**2 * 1e-3
        zero, one, two = (scale * (square * t**power).sum(axis=1) for power in (0, 1, 2))
        determinant = zero * two - one**2
        rate_sd = np.sqrt(zero / determinant)
        return np.sqrt(two / determinant), rate_sd / a, rate_sd / (2.0 * np.pi)


def draw_string(setting: Setting, rng: np.random.Generator) -> String:
    """One string, noise and all."""
    rate = setting.sample_rate_hz
    f0_hz = setting.f0_hz * 2.0 ** (rng.uniform(-40.0, 40.0) / 1200.0)
    k = np.arange(1, MOST_PARTIALS + 1)
    freq_hz = k * f0_hz * np.sqrt(1.0 + setting.b * k**2)
    k = k[freq_hz < 0.4 * rate]
    freq_hz = freq_hz[: len(k)]
    amplitude = 10.0 ** ((-9.0 * np.log2(k) + rng.uniform(-5.0, 5.0, len(k))) / 20.0)
    t60_s = np.clip(setting.t60_s * k**-0.5 * rng.uniform(0.7, 1.3, len(k)), 0.3, 20.0)
    tones = damped_tones(freq_hz, amplitude, LN_1000 / t60_s, rng, setting.length_s, rate)
    return mixed(tones, f0_hz, setting, freq_hz, amplitude, t60_s, rng)


def damped_tones(
    freq_hz: Array, amplitude: Array, rate_per_s: Array, rng: np.random.Generator, length_s: float, rate: int
) -> Array:
    """A sum of damped cosines with phases of their own."""
    time_s = np.arange(round(length_s * rate)) / rate
    phase = rng.uniform(0.0, 2.0 * np.pi, len(freq_hz))
    return np.asarray(
        sum(
            a * np.exp(-r * time_s) * np.cos(2.0 * np.pi * f * time_s + p)
            for f, a, r, p in zip(freq_hz, amplitude, rate_per_s, phase, strict=True)
        )
    )


def mixed(
    tones: Array,
    f0_hz: float,
    setting: Setting,
    freq_hz: Array,
    amplitude: Array,
    t60_s: Array,
    rng: np.random.Generator,
) -> String:
    """A note after a little silence, in noise."""
    rate = setting.sample_rate_hz
    gain = PEAK / np.abs(tones).max()
    noise = gain * float(np.sqrt(0.5 * np.sum(amplitude**2))) * 10.0 ** (-setting.snr_db / 20.0)
    samples = np.concatenate([np.zeros(round(LEAD_S * rate)), gain * tones])
    samples += noise * rng.standard_normal(len(samples))
    return String(
        f0_hz=f0_hz,
        b=setting.b,
        onset_s=round(LEAD_S * rate) / rate,
        freq_hz=freq_hz,
        amplitude=gain * amplitude,
        t60_s=t60_s,
        noise=noise,
        samples=samples,
        sample_rate_hz=rate,
    )


def measured(string: String) -> Recipe | None:
    """The recipe of the longest note in it, if one is found that rings and is the right one."""
    recording = recording_of(string.samples, string.sample_rate_hz)
    try:
        note = max(held_notes(recording), key=lambda found: found.end_s - found.start_s)
    except NoHeldNoteError:
        return None
    if note.kind != "ringing" or abs(np.log2(note.f0_hz / string.freq_hz[0])) > 0.1:
        return None
    return measure_recipe(recording, note)
