"""The octave is found from a clock that starts a half, a third, twice or three times off."""

import numpy as np
import pytest

from timbre_match.intake.octave import settle_octave
from timbre_match.intake.spectrum import BandLimited, Spectrum
from timbre_match.intake.warp import Clock

RATE = 22_050


@pytest.mark.parametrize("factor", [1.0, 2.0, 0.5, 3.0, 1.0 / 3.0])
@pytest.mark.parametrize("f0_hz", [82.4, 196.0, 523.3, 1046.5])
def test_wrong_candidate_is_moved_to_the_fundamental(f0_hz: float, factor: float) -> None:
    time_s = np.arange(RATE) / RATE
    sound = sum(np.cos(2.0 * np.pi * k * f0_hz * time_s + k * k) / k for k in range(1, 13) if k * f0_hz < 0.35 * RATE)
    noise = 1e-3 * np.random.default_rng(1).standard_normal(RATE)
    candidate = Clock(np.linspace(0.05, 0.95, 46), np.full(46, f0_hz * factor))
    clock = settle_octave(BandLimited(Spectrum(np.asarray(sound + noise), RATE), 0.38 * RATE), candidate)
    assert float(np.median(clock.f0_hz)) == pytest.approx(f0_hz, rel=1e-3)
    assert (clock.time_s[0], clock.time_s[-1]) == (0.05, 0.95)


@pytest.mark.parametrize("below_db", [20.0, 25.0])
def test_weak_odd_harmonics_keep_the_octave(below_db: float) -> None:
    time_s = np.arange(RATE) / RATE
    sound = sum(
        (10.0 ** (-below_db / 20.0) if k % 2 else 2.0 / k) * np.cos(2.0 * np.pi * k * 65.4 * time_s + k * k)
        for k in range(1, 17)
    )
    for factor in (1.0, 2.0):
        candidate = Clock(np.linspace(0.05, 0.95, 46), np.full(46, 65.4 * factor))
        clock = settle_octave(BandLimited(Spectrum(np.asarray(sound), RATE), 0.38 * RATE), candidate)
        assert float(np.median(clock.f0_hz)) == pytest.approx(65.4, rel=1e-3)
