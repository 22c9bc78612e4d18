"""Harmonics in step, and partials that go their own ways."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.intake.locking import spread_of_harmonics
from timbre_match.intake.spectrum import BandLimited, Spectrum
from timbre_match.intake.warp import Clock, refine_clock

RATE = 22_050


def spread(cents_off: NDArray[np.float64], vibrato_cents: float = 0.0) -> tuple[float, int]:
    time_s = np.arange(2 * RATE) / RATE
    turns = np.cumsum(220.0 * 2.0 ** (vibrato_cents * np.sin(2.0 * np.pi * 5.0 * time_s) / 1200.0)) / RATE
    k = np.arange(1, len(cents_off) + 1)
    ratio = k * 2.0 ** (cents_off / 1200.0)
    samples = np.cos(2.0 * np.pi * np.outer(ratio, turns) + k[:, None]).sum(axis=0)
    signal = BandLimited(Spectrum(samples, RATE), 5600.0, density=3.0)
    steps = np.linspace(0.1, 1.9, 90)
    found = spread_of_harmonics(signal, refine_clock(signal, Clock(steps, np.full(90, 220.0))))
    return found.cents, found.harmonics


@pytest.mark.parametrize("vibrato_cents", [0.0, 20.0])
def test_exact_harmonics_are_in_step(vibrato_cents: float) -> None:
    cents, harmonics = spread(np.zeros(10), vibrato_cents)
    assert harmonics == 10
    assert cents < 0.1


def test_the_spread_is_that_of_the_partials() -> None:
    # Of nine partials three lie 2 cents high, three low: about the median, that is sqrt(2 / 3) of 2 cents.
    cents, harmonics = spread(np.tile([2.0, 0.0, -2.0], 3))
    assert harmonics == 9
    assert cents == pytest.approx(2.0 * np.sqrt(2.0 / 3.0), rel=0.15)


def test_too_short_a_note_tells_nothing() -> None:
    signal = BandLimited(Spectrum(np.cos(np.arange(RATE) * 0.06), RATE), 5600.0)
    assert spread_of_harmonics(signal, Clock(np.array([0.1, 0.2]), np.array([220.0, 220.0]))).harmonics == 0
