"""Ringing notes against strings with known partials, and against the Cramer-Rao bound."""

import dataclasses

import numpy as np
import pytest

from tests.intake.sounds import recording_of
from tests.measure.known_strings import (
    BOUND_LIMIT,
    CENTS_LIMIT,
    LEVEL_LIMIT_DB,
    NAMED_LIMIT,
    POSSIBLE,
    RATE,
    SE_LIMIT,
    SURE,
    T60_LIMIT,
    Array,
    Outcome,
    Setting,
    b_limit,
    clear_partials,
    damped,
    draw_coupled,
    draw_string,
    measured,
    ringing_note,
    rms,
    run,
)
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import held_notes
from timbre_match.measure.dtfs import synthesise
from timbre_match.measure.recipe import measure_recipe
from timbre_match.measure.records import RINGING_ARRAYS, Recipe, Ringing

TRIALS = 8
SETTINGS = (
    Setting(f0_hz=82.0, b=3e-5, t60_s=6.0, snr_db=40.0),
    Setting(f0_hz=110.0, b=0.0, t60_s=4.0, snr_db=20.0),
    Setting(f0_hz=330.0, b=1e-3, t60_s=2.0, snr_db=40.0),
    Setting(f0_hz=1000.0, b=1e-4, t60_s=1.0, snr_db=60.0),
)


@pytest.fixture(scope="module")
def outcomes() -> dict[Setting, Outcome]:
    return {setting: run(setting, TRIALS, np.random.default_rng(7)) for setting in SETTINGS}


@pytest.fixture(params=SETTINGS, ids=lambda setting: f"{setting.f0_hz:.0f} Hz B {setting.b:g}")
def outcome(request: pytest.FixtureRequest, outcomes: dict[Setting, Outcome]) -> tuple[Setting, Outcome]:
    return request.param, outcomes[request.param]


def test_every_string_is_found_and_rings(outcome: tuple[Setting, Outcome]) -> None:
    _, found = outcome
    assert found.missed == 0
    assert found.level_db.size > 4 * TRIALS


def test_f0_and_inharmonicity(outcome: tuple[Setting, Outcome]) -> None:
    setting, found = outcome
    assert np.all(np.abs(found.cents) <= CENTS_LIMIT)
    assert np.all(np.abs(found.b) <= np.maximum(b_limit(setting.b), SURE * found.b_se))


def test_levels_and_decay_times_where_the_bound_lets_them_be_known(outcome: tuple[Setting, Outcome]) -> None:
    _, found = outcome
    known = found.level_bound_db <= POSSIBLE * LEVEL_LIMIT_DB
    assert np.quantile(np.abs(found.level_db[known]), 0.95) < LEVEL_LIMIT_DB
    known = found.t60_bound <= POSSIBLE * T60_LIMIT
    assert np.quantile(np.abs(found.t60[known]), 0.95) < T60_LIMIT


def test_errors_are_near_the_bound_and_standard_errors_honest(outcomes: dict[Setting, Outcome]) -> None:
    # Pooled over the settings: some hundred partials, so that chance moves these ratios by a few per cent.
    pooled = list(outcomes.values())
    level = np.concatenate([found.level_db / found.level_bound_db for found in pooled])
    level_se = np.concatenate([found.level_se_db / found.level_bound_db for found in pooled])
    t60 = np.concatenate([found.t60 / found.t60_bound for found in pooled])
    t60_se = np.concatenate([found.t60_se / found.t60_bound for found in pooled])
    assert level.size > 300
    assert rms(level) < BOUND_LIMIT
    assert rms(t60) < BOUND_LIMIT
    assert abs(rms(level_se) / rms(level) - 1.0) < SE_LIMIT
    assert abs(rms(t60_se) / rms(t60) - 1.0) < SE_LIMIT


def test_shapes_of_decay_are_told_apart() -> None:
    rng = np.random.default_rng(9)
    named: dict[str, list[bool]] = {"plain": [], "two-stage": [], "beating": []}
    for _ in range(14):
        string = draw_coupled(rng)
        found = measured(string)
        assert found is not None
        recipe, ringing = found
        for index in clear_partials(string, recipe):
            true, shape = string.kinds[index], ringing.decay[index]
            named[true].append(shape == true)
            if true != "plain" and shape == "plain":
                assert ringing.t60_se_s[index] > 0.02 * ringing.t60_s[index]
    for kind, right in named.items():
        assert len(right) > 20
        assert np.mean(right) >= NAMED_LIMIT, kind


def measured_sound(tone: Array) -> tuple[Recipe, Ringing]:
    """The longest note of a sound that begins after half a second of faint noise."""
    samples = np.concatenate([np.zeros(RATE // 2), tone])
    samples += 1e-5 * np.random.default_rng(10).standard_normal(len(samples))
    recording = recording_of(samples, RATE)
    note = max(held_notes(recording), key=lambda found: found.end_s - found.start_s)
    recipe = measure_recipe(recording, note)
    assert recipe.ringing is not None
    return recipe, recipe.ringing


def string_of(*parts: tuple[float, float, float], length_s: float = 4.0) -> Array:
    """Damped cosines (frequency, amplitude, T60) that begin at their crests."""
    time_s = np.arange(round(length_s * RATE)) / RATE
    return np.asarray(sum(damped(time_s, f, a, t60, 0.0) for f, a, t60 in parts))


def test_both_stages_of_a_decay() -> None:
    recipe, ringing = measured_sound(
        string_of((220.0, 0.2, 0.8), (220.0, 0.05, 4.0), (440.0, 0.1, 2.0), (660.0, 0.05, 2.0))
    )
    assert ringing.decay[:3] == ("two-stage", "plain", "plain")
    assert ringing.early_t60_s[0] == pytest.approx(0.8, rel=0.03)
    assert ringing.late_t60_s[0] == pytest.approx(4.0, rel=0.03)
    assert ringing.late_db[0] == pytest.approx(20.0 * np.log10(0.05 / 0.25), abs=0.3)
    assert recipe.level_db[0] - recipe.level_db[1] == pytest.approx(20.0 * np.log10(0.25 / 0.1), abs=0.1)
    # Energy still to come, with A = (4, 1) and rates a = ln 1000 / (0.8, 4): it falls by 20 dB in the time that solves
    # sum_ij A_i A_j exp(-(a_i + a_j) t) / (a_i + a_j) = 0.01 of its value at 0. Solved here by bisection.
    rate = np.log(1000.0) / np.array([0.8, 4.0])
    weight = np.outer([4.0, 1.0], [4.0, 1.0]) / np.add.outer(rate, rate)
    low, high = 0.0, 10.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        left = np.sum(weight * np.exp(-np.add.outer(rate, rate) * middle)) / weight.sum()
        low, high = (middle, high) if left > 0.01 else (low, middle)
    assert ringing.t60_s[0] == pytest.approx(3.0 * low, rel=0.03)


def test_beats_and_their_depth() -> None:
    # Two components, one 6 dB under the other: the level swings by 20 lg(1.5 / 0.5) = 9.54 dB.
    _, ringing = measured_sound(string_of((220.0, 0.2, 3.0), (221.5, 0.1, 3.0), (440.0, 0.1, 2.0), (660.0, 0.05, 2.0)))
    assert ringing.decay[:3] == ("beating", "plain", "plain")
    assert ringing.beat_hz[0] == pytest.approx(1.5, abs=0.01)
    assert ringing.beat_depth_db[0] == pytest.approx(9.54, abs=0.5)


def test_partials_off_the_law_do_not_bend_it() -> None:
    # Two partials of fifteen that the body has pulled away by 8 cents.
    k = np.arange(1, 16)
    freq_hz = k * 196.0 * np.sqrt(1.0 + 8e-5 * k**2)
    freq_hz[[1, 4]] *= 2.0 ** (np.array([-8.0, 8.0]) / 1200.0)
    parts = [(float(f), 0.2 / number, 3.0) for number, f in zip(k, freq_hz, strict=True)]
    recipe, ringing = measured_sound(string_of(*parts))
    assert ringing.inharmonicity_b == pytest.approx(8e-5, rel=0.01)
    assert 1200.0 * np.log2(recipe.f0_hz / 196.0) == pytest.approx(0.0, abs=0.05)
    # The partials themselves are reported where they are.
    assert recipe.freq_hz[:15] == pytest.approx(freq_hz, rel=1e-5)


def test_a_glide_that_all_partials_share_is_no_second_component() -> None:
    # Ten cents down within the first half second, as after a strong pluck.
    time_s = np.arange(4 * RATE) / RATE
    turns = np.cumsum(196.0 * 2.0 ** (10.0 * np.exp(-time_s / 0.2) / 1200.0)) / RATE
    tone = sum(
        0.2 / k * np.exp(-np.log(1000.0) / 3.0 * time_s) * np.cos(2.0 * np.pi * k * turns + k**2) for k in range(1, 13)
    )
    recipe, ringing = measured_sound(np.asarray(tone))
    assert set(ringing.decay[:12]) == {"plain"}
    assert ringing.t60_s[:12] == pytest.approx(np.full(12, 3.0), rel=0.03)
    assert recipe.level_db[:12] - recipe.level_db[0] == pytest.approx(-20.0 * np.log10(np.arange(1, 13)), abs=0.2)


def test_gain_changes_nothing_but_the_floor_of_16_bits() -> None:
    string = draw_string(SETTINGS[0], np.random.default_rng(14))
    note = ringing_note(string)
    assert note is not None
    loud = measure_recipe(string.recording, note)
    soft = measure_recipe(recording_of(0.01 * string.samples, RATE), note)
    assert loud.ringing is not None
    assert soft.ringing is not None
    assert soft.level_db == pytest.approx(loud.level_db, abs=1e-3, nan_ok=True)
    assert soft.ringing.t60_s == pytest.approx(loud.ringing.t60_s, rel=1e-3, nan_ok=True)
    assert soft.ringing.inharmonicity_b == pytest.approx(loud.ringing.inharmonicity_b, abs=1e-9)


def test_shares_add_up_and_one_period_holds_the_onset() -> None:
    string = draw_string(SETTINGS[1], np.random.default_rng(15))
    found = measured(string)
    assert found is not None
    recipe, _ = found
    share = 10.0 ** (recipe.level_db[recipe.heard] / 10.0)
    assert share.sum() == pytest.approx(1.0)
    assert recipe.phase_rad[0] == pytest.approx(0.0)
    # The period that the DTFS makes of the recipe has the power of the shares (Parseval), half on either side of k = 0.
    points = 256
    coefficients = np.zeros(points, dtype=np.complex128)
    k = recipe.k[recipe.heard]
    coefficients[k] = np.sqrt(share / 2.0) * np.exp(1j * recipe.phase_rad[recipe.heard])
    coefficients[points - k] = np.conj(coefficients[k])
    period = synthesise(coefficients)
    assert np.abs(period.imag).max() < 1e-12
    assert np.mean(period.real**2) == pytest.approx(1.0)


def test_phases_are_those_of_the_onset() -> None:
    # All cosines begin at their crest, so that every phase relative to the fundamental's is zero.
    recipe, ringing = measured_sound(string_of(*((k * 200.0, 0.2 / k, 3.0) for k in range(1, 9)), length_s=3.0))
    assert recipe.phase_rad[:8] == pytest.approx(np.zeros(8), abs=0.05)
    assert ringing.onset_s == pytest.approx(0.5, abs=1e-3)


def test_noise_alone_is_no_note() -> None:
    string = draw_string(SETTINGS[0], np.random.default_rng(17))
    note = ringing_note(string)
    assert note is not None
    noise = recording_of(0.1 * np.random.default_rng(18).standard_normal(len(string.samples)), RATE)
    with pytest.raises(NoHeldNoteError, match="stands out of the noise"):
        measure_recipe(noise, note)


def test_kind_decides_the_path() -> None:
    string = draw_string(SETTINGS[0], np.random.default_rng(19))
    note = ringing_note(string)
    assert note is not None
    assert measure_recipe(string.recording, note).ringing is not None
    assert measure_recipe(string.recording, dataclasses.replace(note, kind="held")).ringing is None


def test_decays_and_partials_must_be_as_many() -> None:
    string = draw_string(SETTINGS[0], np.random.default_rng(20))
    found = measured(string)
    assert found is not None
    recipe, ringing = found
    with pytest.raises(ValueError, match="t60_s has shape"):
        dataclasses.replace(ringing, decay=ringing.decay[:-1])
    with pytest.raises(ValueError, match="level_db has shape"):
        dataclasses.replace(recipe, level_db=recipe.level_db[:-1])
    one = {name: getattr(ringing, name)[:1] for name in RINGING_ARRAYS}
    with pytest.raises(ValueError, match="ringing tells of 1 partials"):
        dataclasses.replace(
            recipe,
            ringing=Ringing(
                onset_s=0.0, f0_se_hz=0.0, inharmonicity_b=0.0, inharmonicity_se=0.0, decay=("plain",), **one
            ),
        )
