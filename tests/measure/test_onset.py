"""Where a plucked note begins."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.intake.notes import HeldNote
from timbre_match.measure.onset import onset_of

RATE = 44_100


def note(start_s: float) -> HeldNote:
    return HeldNote(
        note="A3",
        f0_hz=220.0,
        cents=0.0,
        start_s=start_s,
        end_s=start_s + 2.0,
        cycles=440,
        kind="ringing",
        track_s=np.array([start_s, start_s + 2.0]),
        track_hz=np.array([220.0, 220.0]),
    )


def pluck(at_s: float, length_s: float = 3.0, rise_s: float = 0.0) -> NDArray[np.float64]:
    from_onset = np.arange(round(length_s * RATE)) / RATE - at_s
    rise = np.clip(from_onset / rise_s, 0.0, 1.0) if rise_s else (from_onset >= 0.0).astype(np.float64)
    return np.asarray(rise * np.exp(-2.0 * np.maximum(from_onset, 0.0)) * np.cos(2 * np.pi * 220.0 * from_onset))


@pytest.mark.parametrize("noise", [1e-5, 1e-3, 1e-2])
@pytest.mark.parametrize("at_s", [0.05, 0.5])
def test_onset_after_silence(at_s: float, noise: float) -> None:
    sound = pluck(at_s) + noise * np.random.default_rng(1).standard_normal(3 * RATE)
    assert onset_of(sound, RATE, note(at_s + 0.08)) == pytest.approx(at_s, abs=0.0015)


def test_a_slow_rise_begins_twenty_decibels_under_its_top() -> None:
    # A straight rise over 40 ms is at a tenth of its top after 4 ms.
    assert onset_of(pluck(0.5, rise_s=0.04), RATE, note(0.6)) == pytest.approx(0.504, abs=0.002)


def test_a_recording_that_begins_with_the_pluck() -> None:
    assert onset_of(pluck(0.0), RATE, note(0.05)) == pytest.approx(0.0, abs=0.001)


def test_onset_over_an_earlier_note() -> None:
    # The earlier one still sounds 11 dB under the new one.
    earlier = 0.28 * np.cos(2 * np.pi * 330.0 * np.arange(3 * RATE) / RATE)
    assert onset_of(pluck(0.5) + earlier, RATE, note(0.58)) == pytest.approx(0.5, abs=0.004)
