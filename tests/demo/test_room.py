"""The room and the microphone against their definitions."""

import numpy as np
import pytest

from timbre_match.demo.draws import Draws
from timbre_match.demo.room import (
    HISS_DBFS,
    REVERBERATION_S,
    RUMBLE_CORNER_HZ,
    RUMBLE_DBFS,
    TAIL_ENERGY_DB,
    heard_in_room,
    microphone_noise,
    quantise,
    room_response,
)

RATE = 44_100


def test_tail_decays_as_its_reverberation_time_says() -> None:
    # backward integration, Schroeder 1965 (JASA 37:409), line fitted from -5 to -35 dB as ISO 3382 does (from memory)
    response = room_response(RATE, Draws(7))
    tail = response[1:]
    decay_db = 10.0 * np.log10(np.cumsum(tail[::-1] ** 2)[::-1] / np.sum(tail**2))
    fit = (decay_db < -5.0) & (decay_db > -35.0)
    slope, _ = np.polyfit(np.arange(len(tail))[fit] / RATE, decay_db[fit], 1)
    assert -60.0 / slope == pytest.approx(REVERBERATION_S, rel=0.05)
    assert 10.0 * np.log10(np.sum(tail**2) / response[0] ** 2) == pytest.approx(TAIL_ENERGY_DB, abs=1e-9)


def test_room_is_heard_by_plain_convolution() -> None:
    sound = Draws(8).normal(300)
    response = room_response(RATE, Draws(7))
    np.testing.assert_allclose(heard_in_room(sound, response), np.convolve(sound, response)[:300], atol=1e-12)


@pytest.mark.parametrize(("low_hz", "high_hz"), [(20.0, 60.0), (60.0, 120.0), (400.0, 600.0), (6000.0, 12_000.0)])
def test_noise_has_its_stated_spectrum(low_hz: float, high_hz: float) -> None:
    length = 2**20
    noise = microphone_noise(length, RATE, Draws(9))
    freq_hz = np.fft.rfftfreq(length, 1.0 / RATE)
    band = (freq_hz > low_hz) & (freq_hz < high_hz)
    density = 2.0 * np.abs(np.fft.rfft(noise)[band]) ** 2 / (length * RATE)
    # white noise spread over half the rate, and white noise behind an RC low-pass, whose noise bandwidth is pi f_c / 2
    hiss = 10.0 ** (HISS_DBFS / 10.0) / (RATE / 2.0)
    low_pass = 1.0 / (1.0 + (freq_hz[band] / RUMBLE_CORNER_HZ) ** 2)
    rumble = 10.0 ** (RUMBLE_DBFS / 10.0) / (np.pi * RUMBLE_CORNER_HZ / 2.0) * low_pass
    # a mean over n bins has the relative standard error 1 / sqrt(n); four of them, and 0.5 % for the sampled low-pass
    allowed = 4.0 / np.sqrt(np.count_nonzero(band)) + 0.005
    assert np.mean(density / (hiss + rumble)) == pytest.approx(1.0, abs=allowed)


@pytest.mark.parametrize("steps", [0.0, 0.3, -7.45])
def test_triangular_dither_leaves_no_bias_and_a_constant_error(steps: float) -> None:
    # Lipshitz, Wannamaker & Vanderkooy 1992: mean error 0, error power step^2 / 4, whatever the input
    count = 200_000
    error = quantise(np.full(count, steps / 32768.0), Draws(10)) - steps
    assert np.mean(error) == pytest.approx(0.0, abs=4 * 0.5 / np.sqrt(count))
    assert np.mean(error**2) == pytest.approx(0.25, rel=0.02)


def test_beyond_full_scale_is_clipped_not_wrapped() -> None:
    np.testing.assert_array_equal(quantise(np.array([1.5, -1.5]), Draws(11)), [32767, -32768])
