"""Tones with a known make-up, and the faults that are put into them."""

import functools
from collections.abc import Callable
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray
from scipy.fft import irfft, next_fast_len, rfft

from timbre_match.intake.recording import Recording

Array = NDArray[np.float64]

RATE = 44_100


@functools.cache
def played_note(f0_hz: float = 440.0, *, rate: int = RATE, held_s: float = 2.0, gap_s: float = 1.2) -> Array:
    """A held note of 20 harmonics (1/k) with 60 ms attack and release, silence about it, and a floor of white noise.

    The floor is 75 dB below full scale, the note's peak at about -6 dB.
    """
    rng = np.random.default_rng(7)
    length = round((held_s + 2 * gap_s) * rate)
    time = np.arange(length) / rate
    note = np.zeros(length)
    for k in range(1, 21):
        if k * f0_hz < 0.45 * rate:
            note += np.cos(2 * np.pi * k * f0_hz * time + k * k) / k
    rise = np.clip((time - gap_s) / 0.06, 0.0, 1.0) * np.clip((gap_s + held_s - time) / 0.06, 0.0, 1.0)
    note *= np.sin(0.5 * np.pi * rise) ** 2
    return np.asarray(0.5 * note / np.abs(note).max() + 10 ** (-75 / 20) * rng.standard_normal(length))


@functools.cache
def plucked_note(f0_hz: float = 196.0, *, t60_s: float = 3.0, length_s: float = 5.0) -> Array:
    """A note that falls by 60 dB in `t60_s` from the start, higher harmonics sooner."""
    rng = np.random.default_rng(8)
    time = np.arange(round(length_s * RATE)) / RATE
    note = np.zeros(len(time))
    for k in range(1, 21):
        note += np.cos(2 * np.pi * k * f0_hz * time + k * k) / k * 10 ** (-3 * time / (t60_s / k**0.3))
    return np.asarray(0.5 * note / np.abs(note).max() + 10 ** (-75 / 20) * rng.standard_normal(len(time)))


def clip(x: Array) -> Array:
    return np.clip(x, -0.35, 0.35)


def hum(mains_hz: float, level: float = 0.004) -> Callable[[Array], Array]:
    def add(x: Array) -> Array:
        time = np.arange(len(x)) / RATE
        return np.asarray(x + level * sum(np.cos(2 * np.pi * m * mains_hz * time + m) / m for m in (1, 2, 3, 5)))

    return add


def quieten(x: Array) -> Array:
    return 0.01 * x


def noise(x: Array) -> Array:
    rng = np.random.default_rng(9)
    return np.asarray(x + 0.02 * rng.standard_normal(len(x)))


def reverberate(x: Array) -> Array:
    """Convolve with noise that decays by 60 dB in 2 s, the usual statistical model of a room (Schroeder 1962)."""
    rng = np.random.default_rng(10)
    time = np.arange(3 * RATE) / RATE
    response = rng.standard_normal(len(time)) * 10 ** (-3 * time / 2.0)
    size = next_fast_len(len(x) + len(response))
    wet = irfft(rfft(x, size) * rfft(response, size), size)[: len(x) + len(response) - 1]
    return np.asarray(0.5 * wet / np.abs(wet).max())


def offset(x: Array) -> Array:
    return x + 0.03


def low_pass(x: Array, edge_hz: float = 11_000.0) -> Array:
    """Leave nothing above the edge: a codec sets the finest bands of its own transform to zero."""
    return band(x, 0.0, edge_hz)


def band(x: Array, low_hz: float, high_hz: float) -> Array:
    """Leave what lies between two frequencies and nothing else."""
    size = next_fast_len(len(x))
    spectrum = rfft(x, size)
    frequency_hz = np.arange(len(spectrum)) * RATE / size
    spectrum[(frequency_hz < low_hz) | (frequency_hz > high_hz)] = 0.0
    return np.asarray(irfft(spectrum, size)[: len(x)])


def write(path: Path, samples: Array, rate: int = RATE, **options: str) -> Path:
    soundfile.write(path, samples, rate, **options)
    return path


def recording_of(samples: Array, sample_rate_hz: int) -> Recording:
    """Samples as a recording with no file behind it."""
    return Recording(
        file="tone", sha256="", samples=samples, sample_rate_hz=sample_rate_hz, channel=1, channel_count=1, warnings=()
    )
