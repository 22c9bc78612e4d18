"""The pitch track."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.intake.pitch import HOP_S, track_pitch
from timbre_match.intake.spectrum import Spectrum

Array = NDArray[np.float64]


def sine(freq_hz: float, rate: int, length_s: float = 0.5) -> Array:
    return np.asarray(np.cos(2.0 * np.pi * freq_hz * np.arange(round(length_s * rate)) / rate))


@pytest.mark.parametrize("rate", [22_050, 44_100, 96_000])
@pytest.mark.parametrize("f0_hz", [27.5, 98.0, 440.0, 1760.0, 4186.0])
def test_track_of_a_steady_note(f0_hz: float, rate: int) -> None:
    sound = sum(sine(k * f0_hz, rate, 1.0) / k for k in range(1, 9) if k * f0_hz < 0.45 * rate)
    track = track_pitch(*Spectrum(np.asarray(0.1 * sound), rate).reduced())
    assert np.diff(track.time_s) == pytest.approx(HOP_S, rel=0.01)
    inside = (track.time_s > 0.1) & (track.time_s < 0.9)
    # Whole frames of a clean note: the octave may be left to later evidence, the pitch class not.
    octaves = np.log2(track.f0_hz[inside] / f0_hz)
    assert np.abs(octaves - np.round(octaves)).max() < 10.0 / 1200.0
    # A frame of 0.1 s holds under three cycles of the lowest notes; 0.35 is what a held note asks for.
    assert track.strength[inside].min() > (0.8 if f0_hz > 60.0 else 0.35)


def test_level_of_the_track_is_that_of_the_sound() -> None:
    # A sine of amplitude 0.1 has -23.01 dB of power re full scale squared.
    track = track_pitch(*Spectrum(0.1 * sine(440.0, 44_100, 1.0), 44_100).reduced())
    inside = (track.time_s > 0.1) & (track.time_s < 0.9)
    assert track.level_db[inside] == pytest.approx(-23.01, abs=0.05)


def test_silence_and_noise_have_no_pitch() -> None:
    assert track_pitch(np.zeros(22_050), 22_050.0).strength.max() == 0.0
    noise = track_pitch(np.random.default_rng(1).standard_normal(2 * 22_050), 22_050.0)
    assert np.median(noise.strength) < 0.35
