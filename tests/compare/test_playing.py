from dataclasses import replace

import numpy as np
import pytest

from tests.compare.simulated import profile
from timbre_match.compare import model
from timbre_match.compare.playing import gather
from timbre_match.compare.repeatability import scatter_prior
from timbre_match.compare.target import as_target, blend
from timbre_match.errors import ControlError
from timbre_match.measure.profile import Source, Take


def test_rows_of_repeats_come_from_every_profile_with_two_takes() -> None:
    evidence = gather(profile(1, takes=3), blend("two", (profile(2, takes=1), profile(3, takes=2))))
    assert len(evidence.repeats) == 5
    # Three takes about their mean hold two independent ones, two takes hold one.
    assert sum(row.count for row in evidence.repeats) == pytest.approx(2 + 1)
    # Variance of one side's mean of three takes plus that of the mean of two members with one and two takes.
    assert evidence.differences.note_playing == pytest.approx(1 / 3 + (1 / 1 + 1 / 2) / 4)


def test_takes_a_side_is_the_harmonic_mean() -> None:
    evidence = gather(profile(1, takes=1), as_target(profile(2, takes=3)))
    assert evidence.takes == pytest.approx(2 / (1 + 1 / 3))


def test_one_take_a_side_leaves_the_prior_alone() -> None:
    evidence = gather(profile(1, takes=1), as_target(profile(2, takes=1)))
    prior = scatter_prior("violin")
    assert evidence.repeats == ()
    assert evidence.differences.scatter_variance == pytest.approx(2 * prior.scale_at(evidence.freq_hz) ** 2)
    # Mean of the square of a log-normal variable: exp(2 mu + 2 sigma^2).
    spread = 1.0 / np.diag(evidence.prior.precision)
    expected = np.exp(2 * evidence.prior.centre + 2 * spread)
    assert expected[model.TAKE_TILT] == pytest.approx(prior.take_tilt_db**2)
    assert expected[model.NOTE_TILT] == pytest.approx(prior.note_tilt_db**2)
    assert expected[model.SCATTER] == pytest.approx(1.0)


def test_family_of_the_target_speaks_where_the_instrument_names_none() -> None:
    target = replace(profile(2, takes=1), family="flute")
    evidence = gather(replace(profile(1, takes=1), family=""), as_target(target))
    assert any("(flute)" in remark for remark in evidence.remarks)


def test_gains_of_a_targets_members_drop_out() -> None:
    first, second = profile(2), profile(3)
    louder = tuple(
        Take(recordings=(), notes=tuple(replace(one, level_db=one.level_db + 20.0) for one in take.notes))
        for take in second.takes
    )
    plain = gather(profile(1), blend("two", (first, second))).differences.value_db
    shifted = gather(profile(1), blend("two", (first, replace(second, takes=louder)))).differences
    for note in range(shifted.note_playing.size):
        assert np.ptp((shifted.value_db - plain)[shifted.note == note]) < 1e-6


def test_a_note_that_one_take_skipped_is_still_compared() -> None:
    whole = profile(1, takes=3)
    takes = (whole.takes[0], *(replace(take, notes=take.notes[1:]) for take in whole.takes[1:]))
    evidence = gather(replace(whole, takes=takes), as_target(profile(2)))
    assert evidence.notes[0] == whole.takes[0].notes[0].note


def test_a_control_stands_after_the_instrument_and_outside_the_body_curve() -> None:
    now = profile(4, notes=("G3", "A4"))
    # Recorded again, and by chance played just as then: the levels are the same, the recordings are not.
    again = tuple(
        replace(take, recordings=(Source(file=f"then_{place}.wav", sha256=f"{place:064x}"),))
        for place, take in enumerate(now.takes)
    )
    control = now, replace(now, takes=again)
    plain = gather(profile(1), as_target(profile(2)))
    whole = gather(profile(1), as_target(profile(2)), control)
    count = plain.freq_hz.size
    row = whole.differences
    assert row.value_db[:count] == pytest.approx(plain.differences.value_db)
    assert row.value_db[count:] == pytest.approx(np.zeros(row.value_db.size - count), abs=1e-9)
    assert np.all(row.shared.matrix[count:, row.shared.curve_first :] == 0.0)
    assert len(whole.repeats) == len(plain.repeats) + 6


def test_levels_far_from_the_other_takes_are_listed() -> None:
    whole = profile(1, takes=3, scatter_db=0.5)
    odd = replace(
        whole.takes[1], notes=profile(1, takes=1, own={("G3", k): 25.0 for k in range(5, 30, 2)}).takes[0].notes
    )
    takes = (whole.takes[0], odd, whole.takes[2])
    (said,) = (
        remark
        for remark in gather(replace(whole, takes=takes), as_target(profile(2))).remarks
        if remark.startswith("set aside")
    )
    assert "instrument take 2: G3 harmonic 5; " in said
    listed, count = said.count(" harmonic "), int(said.partition("(")[2].split()[0])
    assert count > listed == 8
    assert said.endswith(f"; and {count - listed} more")


def test_a_control_of_two_instruments_is_refused() -> None:
    with pytest.raises(ControlError, match="two instruments"):
        gather(profile(1), as_target(profile(2)), (profile(3), profile(4)))
