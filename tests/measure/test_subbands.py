"""Bands around partials: amplitude, phase and frequency as they are, neighbours out, and the noise counted right."""

import numpy as np
import pytest

from timbre_match.measure.decay import fit_decays, search_one
from timbre_match.measure.glide import common_glide, without_glide
from timbre_match.measure.partials import noise_of_bands
from timbre_match.measure.subbands import cut_bands

RATE = 44_100


def test_a_damped_cosine_comes_out_as_it_went_in() -> None:
    time_s = np.arange(3 * RATE) / RATE
    # Begins at 0.5 s with phase 0.7, 3 Hz above the middle of its band, among neighbours at 200 Hz distance.
    from_onset = time_s - 0.5
    sound = np.zeros(len(time_s))
    for f, a, phase in ((400.0, 0.5, 2.0), (603.0, 0.1, 0.7), (800.0, 0.5, 1.0)):
        sound += np.where(
            from_onset >= 0.0, a * np.exp(-3.0 * from_onset) * np.cos(2 * np.pi * f * from_onset + phase), 0.0
        )
    bands = cut_bands(sound, RATE, 0.5, (0.6, 2.5), np.array([600.0]), 40.0)
    expected = 0.1 * np.exp(-3.0 * bands.time_s) * np.exp(1j * (2 * np.pi * 3.0 * bands.time_s + 0.7))
    # What the neighbours' beginnings leave 0.1 s after them, under 1 in 300 of the partial.
    assert np.abs(bands.y[0] - expected).max() < 3e-4
    start = search_one(bands.time_s, bands.y, 20.0, 0.1)
    fit = fit_decays(bands.time_s, bands.y, start[:, None], 20.0, 0.1)
    assert fit.s[0, 0].real == pytest.approx(-3.0, rel=2e-3)
    assert fit.s[0, 0].imag / (2 * np.pi) == pytest.approx(3.0, abs=2e-3)
    assert np.angle(fit.c[0, 0]) == pytest.approx(0.7, abs=2e-3)


def test_noise_of_a_band_is_its_density_times_the_band() -> None:
    rng = np.random.default_rng(1)
    noise = 0.01 * rng.standard_normal(20 * RATE)
    bands = cut_bands(noise, RATE, 1.0, (1.0, 19.0), np.arange(500.0, 10_000.0, 500.0), 40.0)
    # Of peak amplitudes squared a band of width w holds 4 s^2 w / rate; this one is as wide as 2 + 2 * 3/8 half-widths.
    expected = 4.0 * 0.01**2 * 2.75 * 40.0 / RATE
    assert np.mean(np.abs(bands.y) ** 2) == pytest.approx(expected, rel=0.02)
    assert np.mean(noise_of_bands(bands, 40.0)) == pytest.approx(expected, rel=0.05)


def test_a_common_glide_is_found_and_taken_out() -> None:
    rng = np.random.default_rng(2)
    time_s = np.linspace(0.05, 2.45, 301)[:300]
    freq_hz = np.linspace(200.0, 2000.0, 10)
    glide = 0.004 * np.exp(-time_s / 0.25)
    phase = np.cumsum(glide) * 0.008
    y = np.asarray(np.exp(-2.0 * time_s + 2j * np.pi * freq_hz[:, None] * phase), dtype=np.complex128)
    y += 1e-3 * (rng.standard_normal(y.shape) + 1j * rng.standard_normal(y.shape))
    found = common_glide(time_s, y, freq_hz, np.full(10, 2e-6))
    # Up to a constant, which is the partials' own.
    early = time_s < 1.0
    assert np.std((found - glide)[early]) < 0.1 * np.std(glide[early])
    straight = without_glide(time_s, y, freq_hz, found)
    turn = np.angle(straight[:, 1:] * straight[:, :-1].conj())[:, early[1:]]
    assert np.abs(turn - turn.mean(axis=1, keepdims=True)).max() < 0.05


def test_partials_that_do_nothing_together_have_no_glide() -> None:
    rng = np.random.default_rng(3)
    time_s = np.linspace(0.05, 2.45, 301)[:300]
    y = np.asarray(
        np.exp(-2.0 * time_s) + 0.01 * (rng.standard_normal((10, 300)) + 1j * rng.standard_normal((10, 300))),
        dtype=np.complex128,
    )
    assert not np.any(common_glide(time_s, y, np.linspace(200.0, 2000.0, 10), np.full(10, 2e-4)))
