from dataclasses import replace

import numpy as np
import pytest

from tests.compare.simulated import base_levels, profile, recipe
from timbre_match.compare.alignment import SET_ASIDE_WEIGHT, align_takes, pair
from timbre_match.compare.repeatability import scatter_prior
from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile, Take

PRIOR = scatter_prior("violin")


def test_gains_of_notes_and_takes_drop_out() -> None:
    rng = np.random.default_rng(1)
    note = np.repeat([0, 1, 2], 12)
    octave = np.tile(np.log2(np.arange(1, 13)), 3)
    level = rng.normal(0, 1, (3, 36))
    gains = rng.normal(0, 20, (3, 3))[:, note]
    plain = align_takes(level, note, octave, PRIOR, np.ones(36))
    gained = align_takes(level + gains, note, octave, PRIOR, np.ones(36))
    assert gained.residual_db - plain.residual_db == pytest.approx(
        np.tile((gained.residual_db - plain.residual_db)[:, :1], 36), abs=1e-3
    )
    shift = gained.mean_db - plain.mean_db
    for one in range(3):
        assert np.ptp(shift[note == one]) < 1e-3
    assert gained.weight == pytest.approx(plain.weight, abs=1e-3)


def test_one_odd_level_is_set_aside_and_moves_neither_gain_nor_mean() -> None:
    rng = np.random.default_rng(2)
    note = np.zeros(20, dtype=np.int64)
    octave = np.log2(np.arange(1, 21))
    level = np.linspace(0, -40, 20) + rng.normal(0, 0.5, (4, 20))
    odd = level.copy()
    odd[2, 7] += 15.0
    plain = align_takes(level, note, octave, PRIOR, np.full(20, 0.5))
    hit = align_takes(odd, note, octave, PRIOR, np.full(20, 0.5))
    assert hit.weight[2, 7] < SET_ASIDE_WEIGHT
    assert np.sum(hit.weight < SET_ASIDE_WEIGHT) <= np.sum(plain.weight < SET_ASIDE_WEIGHT) + 1
    # A plain mean of four takes would move by 15 / 4 dB.
    assert abs(hit.mean_db[7] - plain.mean_db[7]) < 1.0
    assert np.max(np.abs(np.delete(hit.mean_db - plain.mean_db, 7))) < 0.2


def test_within_take_variance_is_recovered() -> None:
    rng = np.random.default_rng(3)
    note = np.repeat(np.arange(20), 20)
    octave = np.tile(np.log2(np.arange(1, 21)), 20)
    level = rng.normal(0, 1, 400) * 5 + 1.3 * rng.standard_t(PRIOR.tail_df, (4, 400))
    aligned = align_takes(level, note, octave, PRIOR, np.ones(400))
    # The ratio is relative to the scale that the alignment settled on; put back, it is 1.3 squared.
    assert np.average(aligned.variance_ratio, weights=aligned.df) == pytest.approx(1.0, abs=0.15)
    assert np.mean(aligned.weight) == pytest.approx(1.0, abs=0.1)


def test_a_single_take_stands_as_it_is() -> None:
    level = np.array([[0.0, -6.0, np.nan, -12.0]])
    aligned = align_takes(level, np.zeros(4, dtype=np.int64), np.arange(4.0), PRIOR, np.ones(4))
    assert aligned.mean_db[[0, 1, 3]] == pytest.approx([0.0, -6.0, -12.0])
    assert np.isnan(aligned.mean_db[2])
    assert np.all(aligned.df == 0)
    assert aligned.spread[0] == 1.0


def test_notes_of_one_side_are_named() -> None:
    paired = pair(profile(1, notes=("G3", "A4", "E5")), (profile(2, notes=("G3", "A4", "D4")),))
    assert paired.notes == ("G3", "A4")
    assert any("E5" in remark and "instrument" in remark for remark in paired.remarks)
    assert any("D4" in remark and "target" in remark for remark in paired.remarks)


def test_tuned_apart_pairs_by_name_at_the_middle_frequency() -> None:
    paired = pair(profile(1, a4_hz=415.0, notes=("A4",)), (profile(2, notes=("A4",)),))
    assert paired.freq_hz == pytest.approx(paired.k * np.sqrt(415.0 * 440.0))
    assert any("tuned apart" in remark and "415" in remark for remark in paired.remarks)


def test_a_note_played_twice_in_a_take_counts_once() -> None:
    one, two = base_levels("A4"), base_levels("A4") + np.linspace(0, 2, base_levels("A4").size)
    first, second = recipe("A4", one), recipe("A4", two)
    single = profile(1, notes=("A4",), takes=1)
    twice = replace(single, takes=(Take(recordings=(), notes=(first, second)),))
    paired = pair(twice, (single,))
    assert paired.instrument[0][0].shape == (1, one.size)
    assert paired.instrument[0][0][0] == pytest.approx((first.level_db + second.level_db) / 2)


def test_harmonics_heard_on_one_side_are_counted_not_compared() -> None:
    full, cut = profile(1, notes=("A4", "G3")), profile(2, notes=("A4", "G3"), unheard=4)
    paired = pair(full, (cut,))
    expected = sum(base_levels(note).size - 4 for note in ("A4", "G3"))
    assert paired.k.size == expected
    assert any(remark.startswith("8 harmonics") for remark in paired.remarks)


@pytest.mark.parametrize(
    ("ours", "theirs", "words"),
    [
        (profile(1, notes=("A4",)), profile(2, notes=("G3",)), "no note in common: the instrument has A4"),
        (profile(1, notes=()), profile(2, notes=("G3",)), "the instrument has none"),
        (profile(1, notes=("A4",), unheard=50), profile(2, notes=("A4",)), "heard on both sides"),
        (
            profile(1, notes=("A4",), unheard=base_levels("A4").size - 1),
            profile(2, notes=("A4",)),
            "no note has two harmonics",
        ),
    ],
)
def test_nothing_in_common_is_said_clearly(ours: Profile, theirs: Profile, words: str) -> None:
    with pytest.raises(ComparisonError, match=words) as caught:
        pair(ours, (theirs,))
    assert "what to do" in str(caught.value)
