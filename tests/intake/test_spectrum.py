"""Another rate for a recording, and reading it between its samples."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from timbre_match.intake.spectrum import BandLimited, Spectrum, points_per_cycle

Array = NDArray[np.float64]
RATE = 44_100
# Of two seconds, and so of several blocks; a good way from the ends: what lies beyond them is not known.
INSIDE_S = np.random.default_rng(1).uniform(0.1, 1.9, 20_000)


def sine(freq_hz: float, time_s: Array) -> Array:
    return np.asarray(np.cos(2.0 * np.pi * freq_hz * time_s + 0.7))


def two_seconds(freq_hz: float, rate: int) -> Array:
    """A sine without an offset."""
    samples = sine(freq_hz, np.arange(2 * rate) / rate)
    return np.asarray(samples - samples.mean())


@pytest.mark.parametrize(
    ("edge_of_rate", "density", "part_of_rate", "error_db"),
    # The images of a component f stand 120 lg((2 density edge - f) / f) dB under it (a quintic spline: sinc^6),
    # and 6 dB for a pair of them: 101 dB at half the edge, 72 dB at 0.8 of it; 98 dB there for a density of 3.
    [
        (0.5, 2.0, 0.02, -110.0),
        (0.5, 2.0, 0.1, -110.0),
        (0.5, 2.0, 0.25, -95.0),
        (0.5, 2.0, 0.4, -65.0),
        (0.25, 2.0, 0.02, -110.0),
        (0.25, 2.0, 0.125, -95.0),
        (0.25, 2.0, 0.2, -65.0),
        (0.25, 3.0, 0.125, -110.0),
        (0.25, 3.0, 0.2, -90.0),
    ],
)
@pytest.mark.parametrize("rate", [RATE, 192_000])
def test_sine_between_samples(
    edge_of_rate: float, density: float, part_of_rate: float, error_db: float, rate: int
) -> None:
    freq_hz = part_of_rate * rate
    signal = BandLimited(Spectrum(two_seconds(freq_hz, rate), rate), edge_of_rate * rate, density=density)
    error = signal.at(INSIDE_S) - sine(freq_hz, INSIDE_S)
    # What was taken out as an offset, 2e-5 where the sine does not end on a whole cycle, is no error.
    assert 20.0 * np.log10(np.abs(error - error.mean()).max()) < error_db


@pytest.mark.parametrize("length_s", [0.06, 0.3, 0.69, 0.7, 1.4, 5.0])
def test_nothing_happens_where_blocks_meet(length_s: float) -> None:
    noise = np.random.default_rng(2).standard_normal(round(length_s * RATE))
    noise -= noise.mean()
    # Weakened towards half the rate, where there is no room for a fade and the spline's images stand highest.
    band = np.convolve(noise, [0.25, 0.5, 0.25], mode="same")
    band -= band.mean()
    read = BandLimited(Spectrum(band, RATE), RATE / 2).at(np.arange(len(band)) / RATE)
    assert np.abs(read - band)[200:-200].max() < 5e-3


def test_what_cannot_be_read_is_faded_out() -> None:
    signal = BandLimited(Spectrum(two_seconds(0.4 * RATE, RATE), RATE), 0.38 * RATE)
    assert np.abs(signal.at(INSIDE_S)).max() < 1e-3


@pytest.mark.parametrize("rate", [22_050, 32_000, 44_100, 48_000, 88_200, 96_000, 192_000])
def test_reduced_rate_rejects_what_would_come_back_mirrored(rate: int) -> None:
    for freq_hz in np.arange(6000.0, rate / 2, rate / 23):
        low, low_rate = Spectrum(two_seconds(freq_hz, rate), rate).reduced()
        assert 13_700.0 <= low_rate < 15_000.0
        assert 20.0 * np.log10(np.abs(low[len(low) // 10 : -len(low) // 10]).max()) < -75.0, freq_hz


@pytest.mark.parametrize("rate", [22_050, 44_100, 44_056, 96_000, 192_000])
@pytest.mark.parametrize("freq_hz", [30.0, 440.0, 4500.0, 5000.0])
def test_reduced_rate_keeps_level_and_time(rate: int, freq_hz: float) -> None:
    low, low_rate = Spectrum(two_seconds(freq_hz, rate), rate).reduced()
    assert len(low) == np.ceil(2 * low_rate)
    time_s = np.arange(len(low)) / low_rate
    inside = (time_s > 0.1) & (time_s < 1.9)
    assert low[inside] == pytest.approx(sine(freq_hz, time_s[inside]), abs=1e-4)


@given(st.floats(27.0, 4200.0), st.floats(5_000.0, 96_000.0))
def test_points_per_cycle_lose_no_harmonic(f0_hz: float, highest_hz: float) -> None:
    points = points_per_cycle(f0_hz, highest_hz)
    assert points * f0_hz >= 2.0 * highest_hz
    assert points <= 2.8 * highest_hz / f0_hz + 9
