"""Helmholtz motion against closed forms."""

import numpy as np
import pytest
import scipy.integrate

from timbre_match.demo.bowed_string import (
    bow_position,
    bridge_force,
    corner_rounding,
    harmonic_sum,
    node_shading,
    sawtooth_amplitude,
)


def test_ideal_force_falls_by_six_db_per_octave() -> None:
    # 1/k in dB re the first harmonic, k = 2 ... 10: Helmholtz's sawtooth (Woodhouse, Euphonics 9.1); table computed
    expected = [-6.021, -9.542, -12.041, -13.979, -15.563, -16.902, -18.062, -19.085, -20.000]
    level_db = 20.0 * np.log10(sawtooth_amplitude(np.arange(1, 11)))
    np.testing.assert_allclose(level_db[1:] - level_db[0], expected, atol=5e-4)
    octaves = 20.0 * np.log10(sawtooth_amplitude([1, 2, 4, 8, 16, 32]))
    np.testing.assert_allclose(np.diff(octaves), -6.0206, atol=1e-4)


def test_amplitude_is_that_of_a_sawtooth_between_minus_one_and_one() -> None:
    points = 2**16
    wave = 1.0 - 2.0 * np.arange(points) / points
    wave[0] = 0.0
    measured = 2.0 * np.abs(np.fft.rfft(wave)) / points
    k = np.arange(1, 41)
    # a sampled sawtooth has 2 cot(pi k / N) / N; at k = 40 that is 1.2e-6 from its limit 2 / (pi k)
    np.testing.assert_allclose(sawtooth_amplitude(k), measured[k], rtol=2e-6)


@pytest.mark.parametrize("freq_hz", [200.0, 3000.0, 9000.0])
def test_rounding_is_the_transform_of_its_pulse(freq_hz: float) -> None:
    tau = 40e-6
    integral, _ = scipy.integrate.quad(
        lambda u: np.exp(-u) * np.cos(2.0 * np.pi * freq_hz * tau * u), 0.0, 60.0, limit=400
    )
    assert corner_rounding(freq_hz, tau) == pytest.approx(integral, rel=1e-7)


def test_harmonics_with_a_node_under_the_bow_are_weak() -> None:
    # a bow at one tenth of the string leaves harmonics 10 and 20 without drive
    shading = node_shading(np.arange(1, 26), 0.1)
    assert set(np.argsort(shading)[:2] + 1) == {10, 20}
    np.testing.assert_allclose(shading[:7], 1.0, atol=1e-6)


def test_bow_takes_a_larger_share_of_a_stopped_string() -> None:
    assert bow_position(440.0, 220.0) == pytest.approx(2.0 * bow_position(220.0, 220.0), rel=1e-12)


def test_force_approaches_the_sawtooth_as_the_corner_sharpens() -> None:
    k = np.arange(1, 6)
    sharp = bridge_force(k, 220.0, open_hz=220.0, rounding_s=1e-9)
    np.testing.assert_allclose(sharp, 2.0 / (np.pi * k), rtol=1e-6)
    assert np.all(bridge_force(k, 220.0, open_hz=220.0, rounding_s=40e-6) < sharp)


def test_harmonic_sum_against_the_sum_written_out() -> None:
    rate = 44_100
    time_s = np.arange(8000) / rate
    track_hz = 300.0 + 4.0 * np.sin(2.0 * np.pi * 6.0 * time_s)
    ends = np.array([0.0, len(time_s) - 1.0])
    weights = np.array([[1.0, 0.5], [0.3j, -0.2], [0.1 - 0.1j, 0.1 + 0.4j]])
    phase = 2.0 * np.pi * np.cumsum(track_hz) / rate
    share = np.arange(len(time_s)) / ends[1]
    expected = sum(
        ((first * (1.0 - share) + last * share) * np.exp(1j * k * phase)).real
        for k, (first, last) in enumerate(weights, start=1)
    )
    np.testing.assert_allclose(harmonic_sum(track_hz, weights, ends, rate), expected, atol=1e-10)
