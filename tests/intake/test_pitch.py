"""The pitch track, and the lower rate that it runs at."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.intake.pitch import HOP_S, USABLE_BAND, reduce_rate, track_pitch

Array = NDArray[np.float64]


def sine(freq_hz: float, rate: int, length_s: float = 0.5) -> Array:
    return np.asarray(np.cos(2.0 * np.pi * freq_hz * np.arange(round(length_s * rate)) / rate))


@pytest.mark.parametrize("rate", [44_100, 48_000, 88_200, 96_000, 192_000])
def test_reduced_rate_rejects_what_would_come_back_mirrored(rate: int) -> None:
    _, low_rate = reduce_rate(np.zeros(1000), rate)
    assert 14_000 <= low_rate < 28_000
    usable_hz = USABLE_BAND * low_rate
    window = np.hanning(round(0.3 * low_rate))
    for freq_hz in np.arange(low_rate - usable_hz, rate / 2, rate / 97):
        image_hz = abs(freq_hz - low_rate * round(freq_hz / low_rate))
        if image_hz > usable_hz:
            continue
        low, _ = reduce_rate(sine(freq_hz, rate), rate)
        middle = low[len(low) // 5 :][: len(window)] * window
        # Amplitude of whatever is left, from a Hann window's coherent gain of one half.
        amplitude = 2.0 * np.abs(np.fft.rfft(middle)).max() / window.sum()
        assert 20.0 * np.log10(amplitude) < -75.0, freq_hz


@pytest.mark.parametrize("rate", [22_050, 44_100, 96_000, 192_000])
@pytest.mark.parametrize("freq_hz", [30.0, 440.0, 4500.0])
def test_reduced_rate_keeps_level_and_time(rate: int, freq_hz: float) -> None:
    sound = sine(freq_hz, rate)
    low, low_rate = reduce_rate(sound, rate)
    factor = round(rate / low_rate)
    assert len(low) == -(-len(sound) // factor)
    inside = slice(len(low) // 4, 3 * len(low) // 4)
    # Index i is the input's index i q; the pass band is flat to 0.01 dB.
    assert low[inside] == pytest.approx(sound[::factor][inside], abs=1.2e-3)


@pytest.mark.parametrize("rate", [22_050, 44_100, 96_000])
@pytest.mark.parametrize("f0_hz", [27.5, 98.0, 440.0, 1760.0, 4186.0])
def test_track_of_a_steady_note(f0_hz: float, rate: int) -> None:
    sound = sum(sine(k * f0_hz, rate, 1.0) / k for k in range(1, 9) if k * f0_hz < 0.45 * rate)
    track = track_pitch(*reduce_rate(np.asarray(0.1 * sound), rate))
    assert np.diff(track.time_s) == pytest.approx(HOP_S, rel=0.01)
    inside = (track.time_s > 0.1) & (track.time_s < 0.9)
    # Whole frames of a clean note: the octave may be left to later evidence, the pitch class not.
    octaves = np.log2(track.f0_hz[inside] / f0_hz)
    assert np.abs(octaves - np.round(octaves)).max() < 10.0 / 1200.0
    # A frame of 0.1 s holds under three cycles of the lowest notes; 0.35 is what a held note asks for.
    assert track.strength[inside].min() > (0.8 if f0_hz > 60.0 else 0.35)


def test_level_of_the_track_is_that_of_the_sound() -> None:
    # A sine of amplitude 0.1 has -23.01 dB of power re full scale squared.
    track = track_pitch(*reduce_rate(0.1 * sine(440.0, 44_100, 1.0), 44_100))
    inside = (track.time_s > 0.1) & (track.time_s < 0.9)
    assert track.level_db[inside] == pytest.approx(-23.01, abs=0.05)


def test_silence_and_noise_have_no_pitch() -> None:
    assert track_pitch(np.zeros(22_050), 22_050.0).strength.max() == 0.0
    noise = track_pitch(np.random.default_rng(1).standard_normal(2 * 22_050), 22_050.0)
    assert np.median(noise.strength) < 0.35
