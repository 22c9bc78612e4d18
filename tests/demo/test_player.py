"""The player's scatter against the figures measured on real repeats."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.demo.draws import Draws
from timbre_match.demo.player import Stroke, draw_note_offsets_db, draw_stroke, draw_take_habit

# Double bass, from the repeatability data measured for this project on the Philharmonia Orchestra sample collection:
# a frequency inside each band, robust sd per take, plain root-mean-square per take.
BANDS = [
    (90.0, 1.26, 1.67),
    (180.0, 1.98, 2.56),
    (350.0, 1.91, 2.80),
    (700.0, 2.40, 2.93),
    (1400.0, 2.44, 2.80),
    (2800.0, 2.33, 2.44),
    (5600.0, 1.73, 1.96),
    (11000.0, 1.35, 1.36),
]
TAKE_TILT_SD = 0.44
NOTE_TILT_SD = 0.45
TILT_SD = 0.62
WOBBLE_SD_MEDIAN, WOBBLE_SD_WORST_TENTH = 0.00, 0.31


def _differences_db(freq_hz: float) -> NDArray[np.float64]:
    draws = Draws(21, round(freq_hz))
    # many harmonics at one frequency: the note's tilt is one number, and the median takes it out
    notes = [draw_note_offsets_db(np.full(1000, freq_hz), draws) for _ in range(60)]
    centred = np.array([note - np.median(note) for note in notes])
    return np.asarray((centred[::2] - centred[1::2]).ravel())


def _robust_sd(difference_db: NDArray[np.float64]) -> float:
    return float(1.4826 * np.median(np.abs(difference_db)) / np.sqrt(2.0))


@pytest.mark.parametrize(("freq_hz", "robust_db"), [(freq_hz, robust_db) for freq_hz, robust_db, _ in BANDS])
def test_single_harmonics_scatter_as_measured(freq_hz: float, robust_db: float) -> None:
    # relative standard error of this estimator 1.17 / sqrt(30,000) = 0.7 %
    assert _robust_sd(_differences_db(freq_hz)) == pytest.approx(robust_db, rel=0.03)


def test_tails_are_as_heavy_as_measured() -> None:
    ratios = []
    for freq_hz, _, _ in BANDS:
        difference_db = _differences_db(freq_hz)
        ratios.append(np.sqrt(np.mean(difference_db**2) / 2.0) / _robust_sd(difference_db))
    measured = np.array([rms_db / robust_db for _, robust_db, rms_db in BANDS])
    # 1.20 in the mean; the measured bands scatter about it by 0.15, so their mean is known to about 0.05
    assert np.mean(ratios) == pytest.approx(measured.mean(), abs=measured.std(ddof=1) / np.sqrt(len(measured)))


def test_tilts_of_takes_and_notes_as_measured() -> None:
    takes, notes = 600, 8
    freq_hz = 260.0 * np.arange(1.0, 25.0)
    octaves = np.log2(freq_hz)
    design = np.column_stack([np.ones_like(octaves), octaves])
    fit = np.linalg.pinv(design)
    leave = np.eye(len(freq_hz)) - design @ fit
    slopes = np.empty((takes, notes))
    residual_power = np.zeros(len(freq_hz))
    for take in range(takes):
        draws = Draws(22, take)
        habit = draw_take_habit(draws)
        for note in range(notes):
            offsets_db = habit.offsets_db(freq_hz) + draw_note_offsets_db(freq_hz, draws)
            slopes[take, note] = fit[1] @ offsets_db
            residual_power += (leave @ offsets_db) ** 2
    # what the single harmonics add to a fitted slope: their variances from the residuals, var(e) = (I - H)^2 sigma^2
    harmonic_variance = np.linalg.solve(leave**2, residual_power / (takes * notes))
    from_harmonics = float(fit[1] ** 2 @ harmonic_variance)
    within = float(slopes.var(axis=1, ddof=1).mean())
    between = float(slopes.mean(axis=1).var(ddof=1)) - within / notes
    # standard errors: about 3 % of each of the two standard deviations; four of them
    assert np.sqrt(within - from_harmonics) == pytest.approx(NOTE_TILT_SD, rel=0.12)
    assert np.sqrt(between) == pytest.approx(TAKE_TILT_SD, rel=0.12)
    # and the two together are the tilt that the same data show between takes of one note
    assert np.sqrt(within - from_harmonics + between) == pytest.approx(TILT_SD, rel=0.1)


def test_wobble_is_small_smooth_and_the_same_size_everywhere() -> None:
    freq_hz = np.geomspace(200.0, 10_000.0, 300)
    octaves = np.log2(freq_hz / 1000.0)
    wobbles = []
    for take in range(3000):
        habit = draw_take_habit(Draws(23, take))
        wobbles.append(habit.offsets_db(freq_hz) - habit.tilt_db_per_octave * octaves)
    sd_db = np.std(wobbles, axis=0)
    assert np.all(sd_db > WOBBLE_SD_MEDIAN)
    assert np.all(sd_db < WOBBLE_SD_WORST_TENTH)
    # relative standard error 1.3 %
    np.testing.assert_allclose(sd_db, sd_db.mean(), rtol=0.06)
    # smooth: neighbours a semitone apart move together
    step = int(np.searchsorted(freq_hz, freq_hz[0] * 2.0 ** (1 / 12)))
    assert np.corrcoef(np.ravel([w[:-step] for w in wobbles]), np.ravel([w[step:] for w in wobbles]))[0, 1] > 0.9


def _stroke(vibrato_cents: float) -> Stroke:
    return Stroke(
        f0_hz=440.0,
        length_s=1.4,
        attack_s=0.06,
        release_s=0.08,
        drift_cents=6.0,
        bend_cents=0.0,
        vibrato_cents=vibrato_cents,
        vibrato_hz=5.5,
        vibrato_turn=0.0,
        level_db=0.0,
        swell_db=0.0,
        swell_hz=1.0,
        swell_turn=0.0,
    )


def test_stroke_drifts_swings_and_begins_and_ends_in_silence() -> None:
    time_s = np.linspace(0.0, 1.4, 14_001)
    straight = 1200.0 * np.log2(_stroke(0.0).track_hz(time_s) / 440.0)
    assert straight[-1] - straight[0] == pytest.approx(6.0, abs=1e-9)
    assert straight.mean() == pytest.approx(0.0, abs=1e-9)
    swing = 1200.0 * np.log2(_stroke(10.0).track_hz(time_s) / 440.0) - straight
    settled = swing[time_s > 0.5]
    assert settled.max() == pytest.approx(10.0, abs=0.01)
    assert settled.min() == pytest.approx(-10.0, abs=0.01)
    envelope = _stroke(0.0).envelope(time_s)
    np.testing.assert_allclose(envelope[[0, -1]], 0.0, atol=1e-12)
    np.testing.assert_allclose(envelope[(time_s > 0.06) & (time_s < 1.32)], 1.0, atol=1e-12)


def test_drawn_strokes_are_playable() -> None:
    draws = Draws(24)
    strokes = [draw_stroke(300.0, vibrato=bool(index % 2), draws=draws) for index in range(400)]
    assert all(1.2 <= stroke.length_s <= 1.5 and 0.04 <= stroke.attack_s <= 0.08 for stroke in strokes)
    assert {stroke.vibrato_cents > 0.0 for stroke in strokes[::2]} == {False}
    assert all(5.0 <= stroke.vibrato_cents <= 15.0 for stroke in strokes[1::2])
    cents = 1200.0 * np.log2(np.array([stroke.f0_hz for stroke in strokes]) / 300.0)
    # a trained player repeats a note within a few cents (common practice, no source)
    assert 0.5 < cents.std() < 5.0
