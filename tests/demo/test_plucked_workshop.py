"""The Finch's truth: what is said of its partials is what its vibrations do at the microphone."""

import numpy as np
import pytest
import scipy.signal

from timbre_match.demo.plucked_string import partial_hz
from timbre_match.demo.plucked_workshop import (
    FINCH_AFTER_THE_WINTER,
    FINCH_STRUNG_UP,
    PLUCKED_NOTES,
    PLUCKED_STAGES,
    PLUCKED_TAKES,
    meant_pluck,
    plucked_file_name,
    plucks_of_take,
    true_partials,
    true_sustain_factor,
    vibrations,
)
from timbre_match.demo.plucking import WrittenPluck
from timbre_match.demo.room import SAMPLE_RATE_HZ, workshop_room
from timbre_match.demo.workshop import STAGES, TAKES, file_name
from timbre_match.units import note_number

RATE = SAMPLE_RATE_HZ
SETTLED = int(0.4 * RATE)
"""The room's response lasts 0.3 s; after that a vibration only goes on."""


def test_truth_is_what_arrives_at_the_microphone() -> None:
    # each vibration is sent through the room sample by sample and carried back to the pluck from when the room has
    # settled; level and decay are then read off the sum of a partial's vibrations
    pluck = plucks_of_take(FINCH_STRUNG_UP, 1)[0]
    truth = true_partials(FINCH_STRUNG_UP, pluck)
    moved = vibrations(FINCH_STRUNG_UP, pluck)
    time_s = np.arange(12 * RATE) / RATE
    level_db, t60_s = [], []
    chosen = np.array([1, 2, 3, 5, 9, 20]) - 1
    assert 0 < truth.both_ways[chosen].sum() < len(chosen)
    for index in chosen:
        total = np.zeros(len(time_s), dtype=np.complex128)
        for s, c in zip(moved.s[index], moved.c[index], strict=True):
            heard = scipy.signal.oaconvolve(c * np.exp(s * time_s[: SETTLED + 1]), workshop_room())[SETTLED]
            total += heard * np.exp(s * (time_s - time_s[SETTLED]))
        level_db.append(20.0 * np.log10(np.abs(total[0])))
        to_come = np.cumsum(np.abs(total[::-1]) ** 2)[::-1]
        t60_s.append(3.0 * np.searchsorted(-to_come, -0.01 * to_come[0]) / RATE)
    np.testing.assert_allclose(truth.t60_s[chosen], t60_s, rtol=2e-3)
    np.testing.assert_allclose(np.diff(truth.level_db[chosen]), np.diff(level_db), atol=1e-3)
    assert np.nansum(10.0 ** (truth.level_db / 10.0)) == pytest.approx(1.0)


@pytest.mark.parametrize("written", PLUCKED_NOTES, ids=lambda written: written.note)
def test_partials_lie_where_the_strings_stiffness_puts_them(written: WrittenPluck) -> None:
    truth = true_partials(FINCH_STRUNG_UP, meant_pluck(written))
    np.testing.assert_allclose(truth.freq_hz, partial_hz(truth.k, truth.f0_hz, truth.inharmonicity_b), rtol=1e-12)
    assert set(truth.k[truth.both_ways]) == set(written.string.both_ways)


@pytest.mark.parametrize("written", PLUCKED_NOTES, ids=lambda written: written.note)
def test_winter_changed_the_sustain_and_nothing_else(written: WrittenPluck) -> None:
    before, after = (true_partials(stage, meant_pluck(written)) for stage in PLUCKED_STAGES)
    plain = ~before.both_ways & np.isfinite(after.t60_s)
    factor = true_sustain_factor(FINCH_AFTER_THE_WINTER, before.freq_hz)
    np.testing.assert_allclose((after.t60_s / before.t60_s)[plain], factor[plain], rtol=1e-9)
    np.testing.assert_array_equal(after.freq_hz, before.freq_hz)
    moved_before, moved_after = (vibrations(stage, meant_pluck(written)) for stage in PLUCKED_STAGES)
    np.testing.assert_array_equal(moved_after.c, moved_before.c)


def test_sustain_is_halved_in_one_stretch_and_kept_elsewhere() -> None:
    assert true_sustain_factor(FINCH_AFTER_THE_WINTER, [380.0, 550.0, 800.0]) == pytest.approx([0.5, 0.5, 0.5])
    assert true_sustain_factor(FINCH_AFTER_THE_WINTER, [100.0, 338.0, 900.0, 4000.0]) == pytest.approx(np.ones(4))
    assert true_sustain_factor(FINCH_STRUNG_UP, [100.0, 550.0, 4000.0]) == pytest.approx(np.ones(3))
    # enough partials of enough notes lie in it for three takes to show
    (change,) = FINCH_AFTER_THE_WINTER.changes
    counts = []
    for written in PLUCKED_NOTES:
        freq_hz = true_partials(FINCH_STRUNG_UP, meant_pluck(written)).freq_hz
        counts.append(np.sum((change.low_hz <= freq_hz) & (freq_hz <= change.high_hz)))
    assert np.sum(counts) >= 12
    assert np.all(np.array(counts) > 0)


def test_takes_differ_in_the_hand_alone_and_are_the_same_each_time() -> None:
    one, again, other = (plucks_of_take(FINCH_STRUNG_UP, take) for take in (1, 1, 2))
    for first, second, third in zip(one, again, other, strict=True):
        assert (first.f0_hz, first.position, first.level_db) == (second.f0_hz, second.position, second.level_db)
        np.testing.assert_array_equal(first.offsets_db, second.offsets_db)
        assert first.string is third.string
        assert first.position != third.position
        # a careful hand: within a few millimetres and a few cents
        assert abs(first.position - third.position) * 540.0 < 10.0
        assert abs(1200.0 * np.log2(first.f0_hz / third.f0_hz)) < 8.0
    with pytest.raises(ValueError, match="read-only"):
        one[0].offsets_db[0] = 1.0


def test_every_take_of_the_workshop_has_a_name_of_its_own() -> None:
    names = [plucked_file_name(stage, take) for stage in PLUCKED_STAGES for take in range(1, PLUCKED_TAKES + 1)]
    names += [file_name(stage, take) for stage in STAGES for take in range(1, TAKES + 1)]
    assert len(set(names)) == len(names) == 15


def test_notes_go_up_in_the_strings_order() -> None:
    numbers = [note_number(written.note) for written in PLUCKED_NOTES]
    assert numbers == sorted(set(numbers))
    assert all(abs(written.tuning_cents) <= 6.0 for written in PLUCKED_NOTES)
