"""Recipes of synthetic tones: near the Cramer-Rao bound, honest about their errors, and the laws that they obey."""

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from tests.intake.sounds import recording_of
from tests.measure.known_tones import (
    BIAS_LIMIT_DB,
    F0_LIMIT,
    LEVEL_LIMIT,
    SE_LIMIT,
    VIBRATO_LIMIT_DB,
    Array,
    Outcome,
    Setting,
    f0_bound_hz,
    level_bound_db,
    longest_recipe,
    rms,
    run,
)
from timbre_match.intake.notes import held_notes
from timbre_match.measure.recipe import measure_recipe

RATE_HZ = 44_100

# Bounds: Kay (1993); Nielsen, Jensen & Christensen (2017), see known_tones.py. benchmarks/accuracy.py runs 200 trials
# of many more settings. Here a few trials of each are pooled: n errors, each divided by its bound, have a sum of
# squares of ratio^2 times chi-square with n degrees of freedom. A test passes where that shows the ratio to be under
# its limit beyond doubt (one-sided, 1 %), so sampling luck cannot pass a poor estimator, and more errors make it easier
# for a good one. The errors of one trial's harmonics are independent but for their common total.
SURE = 0.01
STEADY = (
    Setting(f0_hz=30.0, sample_rate_hz=44_100, snr_db=10.0),
    Setting(f0_hz=110.0, sample_rate_hz=96_000, snr_db=30.0),
    Setting(f0_hz=440.0, sample_rate_hz=48_000, snr_db=60.0),
    Setting(f0_hz=1320.0, sample_rate_hz=44_100, snr_db=20.0),
    Setting(f0_hz=4000.0, sample_rate_hz=48_000, snr_db=10.0),
    Setting(f0_hz=4000.0, sample_rate_hz=96_000, snr_db=40.0),
)
TRIALS = 12


@pytest.fixture(scope="module")
def steady() -> dict[Setting, Outcome]:
    return {setting: run(setting, TRIALS, np.random.default_rng(31)) for setting in STEADY}


def highest_possible(ratios: Array) -> float:
    """Upper confidence limit of the true rms of errors that are given as multiples of their bounds."""
    return rms(ratios) / float(np.sqrt(stats.chi2.ppf(SURE, ratios.size) / ratios.size))


def lowest_possible(ratios: Array) -> float:
    return rms(ratios) / float(np.sqrt(stats.chi2.ppf(1.0 - SURE, ratios.size) / ratios.size))


def test_every_steady_tone_is_found(steady: dict[Setting, Outcome]) -> None:
    assert [outcome.missed for outcome in steady.values()] == [0] * len(STEADY)


def test_levels_reach_the_bound(steady: dict[Setting, Outcome]) -> None:
    pooled = [(o.level_error_db / o.level_bound_db).ravel() for o in steady.values()]
    assert highest_possible(np.concatenate(pooled)) <= LEVEL_LIMIT
    for ratios in pooled:
        # One setting alone has too few errors for proof; it must not be plainly over the limit.
        assert lowest_possible(ratios) <= LEVEL_LIMIT


def test_levels_are_not_better_than_possible(steady: dict[Setting, Outcome]) -> None:
    # Under 0.95 of the bound the bound, or the test, would be wrong.
    pooled = np.concatenate([(o.level_error_db / o.level_bound_db).ravel() for o in steady.values()])
    assert highest_possible(pooled) >= 0.95


def test_fundamental_reaches_the_bound(steady: dict[Setting, Outcome]) -> None:
    assert highest_possible(np.concatenate([o.f0_error for o in steady.values()])) <= F0_LIMIT


def test_levels_have_no_bias(steady: dict[Setting, Outcome]) -> None:
    for outcome in steady.values():
        # The mean of the trials is known to bound / sqrt(trials), 0.004 dB at 10 dB of SNR.
        assert np.abs(outcome.level_error_db.mean(axis=0)).max() < BIAS_LIMIT_DB


def test_floor_is_taken_off(steady: dict[Setting, Outcome]) -> None:
    """Where a harmonic is hardly over its floor, what the noise adds to it must be gone.

    Harmonic 2 is 40 dB under harmonic 1 and 6 dB over the floor of its 0.1 s block: raw, it would read 1 dB too high.
    """
    levels = []
    rng = np.random.default_rng(32)
    time_s = np.arange(3 * RATE_HZ) / RATE_HZ
    weak = 0.01
    # A Hann block of 44 cycles of 440 Hz has 0.1 s and an equivalent noise bandwidth of 1.5 bins (Harris 1978).
    noise = np.sqrt(0.5 * weak**2 / 10.0**0.6 * 0.1 * RATE_HZ / 2.0 / 1.5)
    for _ in range(24):
        tone = np.cos(2.0 * np.pi * 440.0 * time_s) + weak * np.cos(
            2.0 * np.pi * 880.0 * time_s + rng.uniform(0.0, 6.28)
        )
        recipe = longest_recipe(recording_of(0.3 * (tone + noise * rng.standard_normal(len(time_s))), RATE_HZ))
        assert recipe.heard[1]
        levels.append(recipe.level_db[1] - recipe.level_db[0])
    # 24 trials of 0.45 dB each: the mean is known to 0.09 dB.
    assert np.mean(levels) == pytest.approx(-40.0, abs=0.3)


def test_standard_errors_are_honest(steady: dict[Setting, Outcome]) -> None:
    # Errors divided by their own standard errors scatter by 1; limits as above, and the mean costs one degree per row.
    pooled = []
    for outcome in steady.values():
        centred = outcome.level_error_db - outcome.level_error_db.mean(axis=0)
        pooled.append((centred * np.sqrt(TRIALS / (TRIALS - 1)) / outcome.se_db).ravel())
    scatter_in_se = np.concatenate(pooled)
    assert 1.0 / highest_possible(scatter_in_se) >= 1.0 - SE_LIMIT
    assert 1.0 / lowest_possible(scatter_in_se) <= 1.0 + SE_LIMIT


@pytest.mark.parametrize(
    ("f0_hz", "rate_hz", "snr_db"),
    [(30.0, 44_100, 30.0), (110.0, 48_000, 10.0), (440.0, 96_000, 60.0), (1320.0, 44_100, 20.0)],
)
def test_vibrato_and_drift(f0_hz: float, rate_hz: int, snr_db: float) -> None:
    setting = Setting(
        f0_hz=f0_hz, sample_rate_hz=rate_hz, snr_db=snr_db, length_s=2.0, vibrato_cents=30.0, drift_cents=20.0
    )
    outcome = run(setting, 3, np.random.default_rng(33))
    assert outcome.missed == 0
    assert np.abs(outcome.level_error_db).max() <= VIBRATO_LIMIT_DB


def test_the_bounds_are_those_of_the_fisher_matrix() -> None:
    """The closed forms against the inverse of the numerically summed Fisher information."""
    setting = Setting(f0_hz=440.0, sample_rate_hz=44_100, snr_db=20.0, length_s=0.1)
    count, sigma = 5, np.sqrt(0.5) * 10.0**-1.0
    n = np.arange(4410)
    k = np.arange(1, count + 1)
    turns = 2.0 * np.pi * 440.0 / 44_100 * np.outer(k, n) + k[:, None]
    # Parameters: the fundamental in rad per sample, five amplitudes, five phases; all amplitudes are 1.
    slopes = np.vstack([-(k[:, None] * n * np.sin(turns)).sum(axis=0), np.cos(turns), -np.sin(turns)])
    bound = np.linalg.inv(slopes @ slopes.T / sigma**2)
    closed_hz = np.sqrt(24.0 * sigma**2 / (4410 * (4410**2 - 1) * np.sum(k**2))) * 44_100 / (2.0 * np.pi)
    assert np.sqrt(bound[0, 0]) * 44_100 / (2.0 * np.pi) == pytest.approx(closed_hz, rel=2e-3)
    # The benchmark's own functions, for the same five harmonics at a rate where there are no more.
    five = replace(setting, f0_hz=3600.0)
    assert five.harmonics == count
    assert f0_bound_hz(five) == pytest.approx(closed_hz, rel=1e-9)
    share = np.full((count, count), -1.0 / count) + np.eye(count)
    levels = 20.0 / np.log(10.0) * share
    assert level_bound_db(five) == pytest.approx(
        np.sqrt((levels @ bound[1 : count + 1, 1 : count + 1] @ levels.T)[0, 0]), rel=5e-3
    )


def played(time_s: Array, f0_hz: float = 220.0) -> Array:
    tone = np.zeros(len(time_s))
    for k in range(1, 13):
        tone += np.cos(2.0 * np.pi * k * f0_hz * time_s + k * k) / k
    return np.asarray(0.2 * tone)


@pytest.fixture(scope="module")
def noisy() -> Array:
    time_s = np.arange(RATE_HZ) / RATE_HZ
    return np.asarray(played(time_s) + 1e-3 * np.random.default_rng(34).standard_normal(len(time_s)))


@pytest.mark.parametrize("gain_db", [-40.0, -6.0, 6.0])
def test_gain_changes_no_relative_level(noisy: Array, gain_db: float) -> None:
    before = longest_recipe(recording_of(noisy, RATE_HZ))
    after = longest_recipe(recording_of(noisy * 10.0 ** (gain_db / 20.0), RATE_HZ))
    assert (after.heard == before.heard).all()
    # The pitch track reckons in single precision and picks the clock's first guess; that may leave its trace.
    assert after.level_db[after.heard] == pytest.approx(before.level_db[before.heard], abs=1e-4)
    assert after.floor_db == pytest.approx(before.floor_db, abs=0.01)
    assert after.f0_hz == pytest.approx(before.f0_hz, rel=1e-8)


@pytest.mark.parametrize("shift_s", [0.25, 1.0, 3.1])
def test_time_shift_changes_only_where_the_note_is(shift_s: float) -> None:
    silence = np.zeros(2 * RATE_HZ)
    shift = round(shift_s * RATE_HZ)
    time_s = np.arange(RATE_HZ) / RATE_HZ
    sound = played(time_s) * np.clip(np.minimum(time_s, 1.0 - time_s) / 0.03, 0.0, 1.0)
    before = longest_recipe(recording_of(np.concatenate([silence, sound, silence]), RATE_HZ))
    after = longest_recipe(recording_of(np.concatenate([np.zeros(shift), silence, sound, silence]), RATE_HZ))
    # The envelope is read every 5 ms and the pitch every 20 ms, so the stretch may fall a step off.
    assert after.start_s - before.start_s == pytest.approx(shift_s, abs=0.021)
    assert after.end_s - before.end_s == pytest.approx(shift_s, abs=0.021)
    assert after.f0_hz == pytest.approx(before.f0_hz, rel=1e-6)
    assert after.level_db[:12] == pytest.approx(before.level_db[:12], abs=0.01)
    off = np.angle(np.exp(1j * (after.phase_rad[:12] - before.phase_rad[:12])))
    assert np.abs(off).max() < 0.01


def test_levels_are_shares_of_the_total(noisy: Array) -> None:
    recipe = longest_recipe(recording_of(noisy, RATE_HZ))
    assert np.sum(10.0 ** (recipe.level_db[recipe.heard] / 10.0)) == pytest.approx(1.0, abs=1e-12)
    assert np.isnan(recipe.level_db[~recipe.heard]).all()
    assert np.isnan(recipe.se_db[~recipe.heard]).all()
    assert recipe.freq_hz == pytest.approx(recipe.k * recipe.f0_hz)


def test_nothing_is_heard_where_nothing_was_played() -> None:
    """Noise alone passes for a harmonic once in 10,000: over some 20 notes of 80 empty harmonics, almost never."""
    rng = np.random.default_rng(35)
    time_s = np.arange(RATE_HZ) / RATE_HZ
    heard = 0
    for _ in range(20):
        recipe = longest_recipe(recording_of(played(time_s) + 0.003 * rng.standard_normal(len(time_s)), RATE_HZ))
        assert recipe.heard[:12].all()
        heard += int(recipe.heard[12:].sum())
        assert len(recipe.k) > 90
    # Poisson with mean 0.17: more than 2 has a chance of 1e-3.
    assert heard <= 2


def test_a_sympathetic_string_is_no_part_of_the_floor() -> None:
    """A line between harmonics 3 and 4, nearly as strong as they are and 50 dB over the floor of a block.

    The floor is the median over the gaps on both sides, of which one is clean: so it comes to lie between the largest
    clean bin and the smallest of the others, which a Hann line's skirts (-50 dB from 5 bins on, Harris 1978) about
    double. A mean would rise by more than 30 dB.
    """
    rng = np.random.default_rng(36)
    time_s = np.arange(2 * RATE_HZ) / RATE_HZ
    clean = played(time_s) + 1e-3 * rng.standard_normal(len(time_s))
    beside = clean + 0.05 * np.cos(2.0 * np.pi * 765.0 * time_s)
    note = max(held_notes(recording_of(clean, RATE_HZ)), key=lambda n: n.end_s - n.start_s)
    a, b = (measure_recipe(recording_of(x, RATE_HZ), note) for x in (clean, beside))
    assert np.abs(b.floor_db - a.floor_db).max() < 6.0
    assert b.level_db[:12] == pytest.approx(a.level_db[:12], abs=0.02)
