"""A note on its own clock: the laws of clocks, and how well a clock is refined."""

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from timbre_match.intake.spectrum import BandLimited, Spectrum
from timbre_match.intake.warp import Clock, refine_clock

Array = NDArray[np.float64]
RATE = 44_100


def steady_clock(f0_hz: float, start_s: float = 0.0, length_s: float = 1.0) -> Clock:
    time_s = np.linspace(start_s, start_s + length_s, 51)
    return Clock(time_s, np.full(51, f0_hz))


@given(st.floats(27.0, 4200.0), st.floats(0.0, 100.0), st.floats(0.1, 3.0))
def test_steady_clock_has_equal_steps(f0_hz: float, start_s: float, length_s: float) -> None:
    clock = steady_clock(f0_hz, start_s, length_s)
    assert clock.turns == pytest.approx(f0_hz * length_s, rel=1e-12)
    assert clock.cycles in (int(clock.turns), int(clock.turns + 1e-9))
    instants = clock.instants_s(8)
    assert instants.shape == (clock.cycles, 8)
    expected = start_s + np.arange(clock.cycles * 8) / (8 * f0_hz)
    # In parts of a cycle.
    assert np.abs(instants.ravel() - expected).max(initial=0.0) * f0_hz < 1e-9


@given(st.floats(30.0, 2000.0), st.floats(0.0, 50.0), st.floats(-40.0, 40.0), st.integers(8, 64))
def test_instants_and_phase_are_inverse(f0_hz: float, vibrato_cents: float, drift_cents: float, points: int) -> None:
    time_s = np.linspace(2.0, 3.0, 101)
    cents = vibrato_cents * np.sin(2.0 * np.pi * 6.0 * time_s) + drift_cents * (time_s - 2.5)
    clock = Clock(time_s, f0_hz * 2.0 ** (cents / 1200.0))
    instants = clock.instants_s(points).ravel()
    assert (np.diff(instants) > 0.0).all()
    # To half a microsecond: even a harmonic at 20 kHz loses no more than 0.02 dB.
    assert np.abs(clock.phase_at(instants) - np.arange(len(instants)) / points).max() / f0_hz < 5e-7


@given(st.floats(30.0, 4000.0), st.floats(-0.06, 0.06))
def test_correction_scales_the_fundamental(f0_hz: float, relative: float) -> None:
    clock = steady_clock(f0_hz).corrected(np.array([0.2, 0.8]), np.array([relative, relative]))
    assert clock.f0_hz == pytest.approx(f0_hz * (1.0 + relative), rel=1e-12)
    assert clock.turns == pytest.approx(f0_hz * (1.0 + relative), rel=1e-12)


def noisy_note(pitch: Callable[[Array], Array], snr_db: float, seed: int) -> BandLimited:
    rng = np.random.default_rng(seed)
    time_s = np.arange(RATE) / RATE
    turns = np.cumsum(pitch(time_s)) / RATE
    note = sum(np.cos(2.0 * np.pi * (k * turns + rng.uniform())) / k for k in range(1, 9))
    noise = np.sqrt(0.5) * 10.0 ** (-snr_db / 20.0)
    return BandLimited(Spectrum(np.asarray(note + noise * rng.standard_normal(RATE)), RATE), RATE / 2)


def lost_db(clock: Clock, true_turns: Callable[[Array], Array], k: int) -> float:
    """What harmonic k loses, dB, in blocks of 0.1 s read on this clock: the phase that still moves inside them."""
    time_s = np.linspace(clock.time_s[0], clock.time_s[-1], 9001)[:9000]
    off = (clock.phase_at(time_s) - true_turns(time_s)).reshape(9, 1000)
    coherence = np.abs(np.exp(2j * np.pi * k * off).mean(axis=1)) ** 2
    return float(-10.0 * np.log10(coherence.mean()))


@pytest.mark.parametrize("f0_hz", [110.0, 440.0, 1760.0])
def test_refined_clock_of_a_steady_note(f0_hz: float) -> None:
    # 30 cents of jitter in the first guess, as a frame-by-frame track has it; noise 20 dB under the fundamental.
    rng = np.random.default_rng(3)
    time_s = np.linspace(0.05, 0.95, 46)
    for seed in range(3):
        guess = Clock(time_s, f0_hz * 2.0 ** (rng.normal(0.0, 30.0, 46) / 1200.0))
        clock = refine_clock(noisy_note(lambda t: np.full(len(t), f0_hz), 20.0, seed), guess)
        assert lost_db(guess, lambda t: f0_hz * t, 8) > 0.1
        # The bias that a level may have.
        assert lost_db(clock, lambda t: f0_hz * t, 8) < 0.02


@pytest.mark.parametrize("f0_hz", [110.0, 440.0, 1760.0])
def test_refined_clock_follows_vibrato(f0_hz: float) -> None:
    def pitch(time_s: Array) -> Array:
        return np.asarray(f0_hz * 2.0 ** (30.0 * np.sin(2.0 * np.pi * 6.0 * time_s) / 1200.0))

    fine_s = np.arange(RATE) / RATE
    turns = np.cumsum(pitch(fine_s)) / RATE
    time_s = np.linspace(0.05, 0.95, 46)
    clock = refine_clock(noisy_note(pitch, 30.0, 4), Clock(time_s, np.full(46, f0_hz)))
    # A tenth of what harmonics 1 to 20 of a real vibrato may be off.
    assert lost_db(clock, lambda t: np.interp(t, fine_s, turns), 8) < 0.03
