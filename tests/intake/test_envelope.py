"""Level over time: what is steady, what rings, where a note begins anew."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.intake.envelope import (
    falls_from_the_start,
    is_ringing,
    level_envelope,
    rises_again_db,
    steady_stretch,
)

RATE = 22_050
Array = NDArray[np.float64]


def sounding(level_db: Array) -> Array:
    """A 440 Hz sine whose power follows a level, dB re full scale squared, and a floor at -80 dB."""
    time_s = np.arange(len(level_db)) / RATE
    noise = 1e-4 * np.random.default_rng(1).standard_normal(len(level_db))
    return np.asarray(np.sqrt(2.0) * 10.0 ** (level_db / 20.0) * np.cos(2.0 * np.pi * 440.0 * time_s) + noise)


def held(length_s: float = 2.0, lead_s: float = 0.5) -> Array:
    quiet = np.full(round(lead_s * RATE), -120.0)
    return np.concatenate([quiet, np.full(round(length_s * RATE), -20.0), quiet])


def test_level_and_floor_are_powers() -> None:
    envelope = level_envelope(sounding(held()), RATE)
    assert envelope.step_s == pytest.approx(0.005, rel=0.01)
    middle = envelope.level_db[round(1.5 / envelope.step_s)]
    # 25 ms hold eleven cycles of 440 Hz and a little.
    assert middle == pytest.approx(-20.0, abs=0.2)
    assert envelope.floor_db == pytest.approx(-80.0, abs=1.0)
    assert envelope.renewals_s == ()


@pytest.mark.parametrize("gain_db", [-30.0, 6.0])
def test_gain_moves_levels_only(gain_db: float) -> None:
    sound = sounding(held())
    one, other = level_envelope(sound, RATE), level_envelope(sound * 10.0 ** (gain_db / 20.0), RATE)
    # The running mean carries rounding of the loud part into the quiet one.
    assert other.level_db == pytest.approx(one.level_db + gain_db, abs=1e-6)
    assert steady_stretch(one, 0.5, 2.5, ringing=False) == steady_stretch(other, 0.5, 2.5, ringing=False)


def test_steady_stretch_leaves_attack_and_release_out() -> None:
    start_s, stop_s = steady_stretch(level_envelope(sounding(held()), RATE), 0.4, 2.6, ringing=False)
    assert 0.5 < start_s < 0.65
    assert 2.35 < stop_s < 2.5


def test_steady_stretch_reaches_to_the_edges_of_a_cut_recording() -> None:
    start_s, stop_s = steady_stretch(level_envelope(sounding(held(lead_s=0.0)), RATE), 0.0, 2.0, ringing=False)
    assert start_s < 0.01
    assert stop_s > 1.98


@pytest.mark.parametrize("t60_s", [0.6, 2.0, 6.0])
def test_a_free_decay_rings(t60_s: float) -> None:
    time_s = np.arange(round(min(3.0, t60_s) * RATE)) / RATE
    level_db = np.concatenate([np.full(RATE // 2, -120.0), -10.0 - 60.0 * time_s / t60_s])
    envelope = level_envelope(sounding(level_db), RATE)
    end_s = len(level_db) / RATE
    assert is_ringing(envelope, 0.45, end_s)
    start_s, stop_s = steady_stretch(envelope, 0.45, end_s, ringing=True)
    assert 0.5 < start_s < 0.6
    # Down to 40 dB under the peak, or as far as the recording goes.
    assert stop_s == pytest.approx(min(0.5 + t60_s * 40.0 / 60.0, end_s), abs=0.05)


def test_a_held_note_does_not_ring() -> None:
    assert not is_ringing(level_envelope(sounding(held()), RATE), 0.45, 2.6)
    # Nor does one with a quick release at the end of a recording, or a crescendo.
    swelling = held()
    swelling[RATE // 2 : -RATE // 2] += np.linspace(-15.0, 0.0, len(swelling) - RATE // 2 * 2 - RATE % 2)
    assert not is_ringing(level_envelope(sounding(swelling), RATE), 0.45, 2.6)


def test_bow_change_and_second_pluck_begin_a_note_anew() -> None:
    changed = held()
    changed[round(1.48 * RATE) : round(1.52 * RATE)] = -70.0
    assert level_envelope(sounding(changed), RATE).renewals_s == pytest.approx((1.5,), abs=0.02)
    again = held()
    again[: round(1.5 * RATE)] -= 14.0
    assert level_envelope(sounding(again), RATE).renewals_s == pytest.approx((1.5,), abs=0.03)


def test_vibrato_of_the_level_renews_nothing() -> None:
    # A violin's level moves by up to 10 dB with its vibrato.
    moving = held()
    moving += 5.0 * np.sin(2.0 * np.pi * 6.0 * np.arange(len(moving)) / RATE)
    assert level_envelope(sounding(moving), RATE).renewals_s == ()


def fading(t60_s: float, length_s: float, fade_s: float) -> Array:
    """A free decay whose recording someone has faded out, in a straight line to nothing."""
    time_s = np.arange(round(length_s * RATE)) / RATE
    ramp = np.minimum(1.0, (length_s - time_s) / fade_s) if fade_s else np.ones(len(time_s))
    return np.concatenate([sounding(np.full(RATE // 2, -120.0)), sounding(-10.0 - 60.0 * time_s / t60_s) * ramp])


@pytest.mark.parametrize("fade_s", [0.15, 0.5, 1.0])
def test_a_fade_out_is_seen_and_ends_the_stretch(fade_s: float) -> None:
    envelope = level_envelope(fading(12.0, 4.0, fade_s), RATE)
    assert 4.5 - envelope.fade_s == pytest.approx(fade_s, rel=0.3)
    _, stop_s = steady_stretch(envelope, 0.45, 4.5, ringing=True)
    assert stop_s == pytest.approx(envelope.fade_s, abs=0.02)


def test_a_decay_that_is_cut_or_reaches_the_floor_is_no_fade_out() -> None:
    assert level_envelope(fading(12.0, 4.0, 0.0), RATE).fade_s == np.inf
    assert level_envelope(fading(1.0, 4.0, 0.0), RATE).fade_s == np.inf


def test_a_note_that_beats_falls_from_the_start_and_grows_again() -> None:
    time_s = np.arange(4 * RATE) / RATE
    beats_db = 6.0 * np.cos(2.0 * np.pi * 0.8 * time_s)
    envelope = level_envelope(sounding(-20.0 - 60.0 * time_s / 10.0 + beats_db), RATE)
    assert falls_from_the_start(envelope, 0.0, 4.0)
    # Between two extremes 0.625 s apart the decay takes 3.75 of the 12 dB; smoothing takes little.
    assert rises_again_db(envelope, 0.0, 4.0) == pytest.approx(12.0 - 3.75, abs=1.0)
    steady = level_envelope(sounding(-20.0 - 60.0 * time_s / 10.0), RATE)
    assert rises_again_db(steady, 0.0, 4.0) < 0.5


def test_a_held_note_does_not_fall_from_the_start() -> None:
    assert not falls_from_the_start(level_envelope(sounding(held()), RATE), 0.45, 2.4)
