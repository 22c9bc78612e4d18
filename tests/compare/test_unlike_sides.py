"""Sides that do not match: tuned apart, other notes, one note, harmonics that one side alone lets one hear."""

import math
import re
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.compare.simulated import NOTES, base_levels, dip, profile
from tests.intake.sounds import recording_of
from timbre_match.compare import compare
from timbre_match.compare.alignment import UNHEARD_BELOW_DB
from timbre_match.compare.records import Comparison
from timbre_match.compare.target import blend
from timbre_match.intake.notes import held_notes
from timbre_match.measure.profile import Profile, Take
from timbre_match.measure.recipe import Recipe, measure_recipe
from timbre_match.units import note_to_hz

Array = NDArray[np.float64]


def body(freq_hz: Array) -> Array:
    """A body of peaks and valleys that stand at their own frequencies whatever the tuning."""
    return np.asarray(sum(dip(hz, db, 1.0)(freq_hz) for hz, db in ((450.0, 6.0), (1000.0, -6.0), (2500.0, 6.0))))


def noisy(whole: Profile, floor_db: float) -> Profile:
    """The same recipes over a noise floor, dB re each note's power: what lies below it is not heard."""

    def above(recipe: Recipe) -> Recipe:
        heard = recipe.level_db > floor_db
        return replace(
            recipe,
            heard=heard,
            floor_db=np.full(heard.size, floor_db),
            level_db=np.where(heard, recipe.level_db, np.nan),
            se_db=np.where(heard, recipe.se_db, np.nan),
            phase_rad=np.where(heard, recipe.phase_rad, np.nan),
        )

    takes = tuple(replace(take, notes=tuple(above(recipe) for recipe in take.notes)) for take in whole.takes)
    return replace(whole, takes=takes)


def named(found: Comparison, word: str) -> dict[tuple[str, int], int]:
    """What the remarks call at least so many dB stronger or weaker."""
    pattern = rf"at least (-?\d+) dB {word}: (\S+) harmonic (\d+)"
    return {(note, int(k)): int(least) for remark in found.remarks for least, note, k in re.findall(pattern, remark)}


def median_width(found: Comparison) -> float:
    return float(np.median([one.difference_db.high - one.difference_db.low for one in found.body_curve]))


@pytest.mark.parametrize("a4_hz", [415.0, 442.0])
def test_tuned_apart_without_a_body_is_no_difference(a4_hz: float) -> None:
    found = compare(profile(1, a4_hz=a4_hz), profile(2))
    assert {one.note for one in found.harmonics} == set(NOTES)
    assert found.regions == ()
    assert any(f"A4 at {a4_hz:g} Hz against 440 Hz" in remark for remark in found.remarks)
    (first,) = [one for one in found.harmonics if (one.note, one.k) == ("A4", 1)]
    assert first.freq_hz == pytest.approx(math.sqrt(a4_hz * 440.0))


def test_one_body_at_440_and_442_is_no_difference() -> None:
    assert compare(profile(1, a4_hz=442.0, change=body), profile(2, change=body)).regions == ()


def test_one_body_at_415_and_440_differs_on_the_flanks_of_its_peaks_and_no_more() -> None:
    found = compare(profile(1, a4_hz=415.0, change=body), profile(2, change=body))
    hz = np.array([point.freq_hz for point in found.body_curve])
    apart = math.sqrt(415.0 / 440.0)
    truth = body(hz * apart) - body(hz / apart)
    low = np.array([point.simultaneous_low_db for point in found.body_curve])
    high = np.array([point.simultaneous_high_db for point in found.body_curve])
    value = np.array([point.difference_db.value for point in found.body_curve])
    assert np.mean((low <= truth) & (truth <= high)) > 0.9
    assert np.max(np.abs(value)) < np.max(np.abs(truth)) + 1.0
    assert any("101 cents apart" in remark and "flanks" in remark for remark in found.remarks)


def test_a_change_is_found_in_its_place_though_tuned_apart() -> None:
    found = compare(profile(1, a4_hz=415.0, change=dip(1000.0, -6.0, 0.7)), profile(2))
    (region,) = found.regions
    assert region.verdict == "weaker"
    assert abs(math.log2(math.sqrt(region.low_hz * region.high_hz) / 1000.0)) < 1 / 6
    assert abs(region.difference_db.value + 6.0) < 1.5


def test_the_body_curve_spans_the_notes_that_both_sides_have() -> None:
    # E5 and C#5 of the one side and G3 to B3 of the other have no partner.
    low, high = NOTES[:8], NOTES[3:]
    found = compare(profile(1, notes=low), profile(2, notes=high))
    common = [note for note in low if note in high]
    hz = [note_to_hz(note) * k for note in common for k in range(1, base_levels(note).size + 1)]
    assert {one.note for one in found.harmonics} == set(common)
    assert len(found.harmonics) == len(hz)
    assert found.body_curve[0].freq_hz == pytest.approx(min(hz))
    assert found.body_curve[-1].freq_hz == pytest.approx(max(hz))
    assert "only the instrument has G3 A3 B3: left out" in found.remarks
    assert "only the target has C#5 E5: left out" in found.remarks
    assert not any("one note" in remark for remark in found.remarks)


@pytest.mark.parametrize("takes", [1, 3])
def test_one_note_answers_widely_and_says_why(takes: int) -> None:
    one = compare(profile(1, notes=("D4",), takes=takes), profile(2, notes=NOTES, takes=takes))
    many = compare(profile(1, takes=takes), profile(2, takes=takes))
    assert {harmonic.note for harmonic in one.harmonics} == {"D4"}
    assert all(math.isfinite(point.simultaneous_low_db) for point in one.body_curve)
    assert one.regions == ()
    assert median_width(one) > 1.5 * median_width(many)
    assert any(remark.startswith("one note in common (D4)") for remark in one.remarks)
    assert not any(remark.startswith("one note") for remark in many.remarks)


def test_harmonics_of_either_side_alone_are_counted() -> None:
    full, cut = profile(1), profile(2, unheard=2)
    words = "harmonics heard in the {}'s takes but not"
    assert any(r.startswith(f"{2 * len(NOTES)} " + words.format("instrument")) for r in compare(full, cut).remarks)
    assert any(r.startswith(f"{2 * len(NOTES)} " + words.format("target")) for r in compare(cut, full).remarks)
    same = compare(full, profile(3))
    assert not any("too seldom" in remark for remark in same.remarks)


def test_a_harmonic_that_the_other_side_must_have_weaker_is_named() -> None:
    strong = profile(1, own={("G3", 30): 36.0})
    weak = noisy(profile(2), -36.0)
    there, back = compare(strong, weak), compare(weak, strong)
    assert set(named(there, "stronger")) == {("G3", 30)}
    assert 6 <= named(there, "stronger")["G3", 30] <= 36
    assert named(there, "weaker") == {}
    assert named(back, "weaker") == named(there, "stronger")
    assert named(back, "stronger") == {}


def test_a_named_harmonic_is_told_in_plain_words() -> None:
    strong, weak = profile(1, own={("G3", 30): 36.0}), noisy(profile(2), -36.0)
    end = r" left out\. What is not heard is weaker than the noise there: with the notes of both sides brought to the "
    end += r"same level, the instrument is at least \d+ dB {}: G3 harmonic 30$"
    for found, word in ((compare(strong, weak), "stronger"), (compare(weak, strong), "weaker")):
        assert sum(bool(re.search(end.format(word), remark)) for remark in found.remarks) == 1


def test_what_noise_alone_hides_is_counted_and_not_named() -> None:
    found = compare(profile(1), noisy(profile(2), -36.0))
    assert any("too seldom" in remark for remark in found.remarks)
    assert named(found, "stronger") == {}


def test_at_least_is_no_more_than_the_truth() -> None:
    rng = np.random.default_rng(9)
    for seed in range(4):
        own = {(note, k): float(rng.uniform(0.0, 40.0)) for note in NOTES for k in rng.integers(10, 20, 2).tolist()}
        found = compare(profile(seed, own=own), noisy(profile(seed + 50), -30.0))
        stronger = named(found, "stronger")
        assert stronger
        assert all(least <= own.get(key, 0.0) for key, least in stronger.items())


def test_a_harmonic_beyond_what_the_other_side_measured_is_not_judged() -> None:
    def short(recipe: Recipe) -> Recipe:
        return replace(
            recipe,
            **{
                name: getattr(recipe, name)[:10]
                for name in ("k", "freq_hz", "level_db", "se_db", "floor_db", "heard", "phase_rad")
            },
        )

    whole = profile(2)
    ended = replace(whole, takes=tuple(Take(recordings=(), notes=tuple(map(short, t.notes))) for t in whole.takes))
    found = compare(profile(1, own={("G3", 30): 40.0}), ended)
    assert any("too seldom" in remark for remark in found.remarks)
    assert named(found, "stronger") == {}


def test_one_member_of_a_blend_that_hears_a_harmonic_is_enough() -> None:
    quiet, loud = noisy(profile(2), -36.0), profile(3)
    found = compare(profile(1), blend("pair", (quiet, loud)))
    assert not any("too seldom" in remark for remark in found.remarks)


@pytest.mark.parametrize("duration_s", [0.3, 1.0])
@pytest.mark.parametrize("f0_hz", [110.0, 440.0])
def test_what_a_measurement_does_not_hear_lies_under_its_ceiling(f0_hz: float, duration_s: float) -> None:
    # Harmonics of known level that sink into white noise, through the measurement itself.
    rate_hz = 44_100
    unheard = 0
    for seed in range(4):
        rng = np.random.default_rng(seed)
        time_s = np.arange(round(duration_s * rate_hz)) / rate_hz
        k = np.arange(1, 37)
        power = 10.0 ** (-0.2 * (k - 1))
        partials = np.sqrt(power) * np.cos(2.0 * np.pi * f0_hz * np.outer(time_s, k) + rng.uniform(0.0, 6.0, k.size))
        tone = np.pad(np.sum(partials, axis=1), rate_hz // 4)
        recording = recording_of(0.1 * tone + 3e-3 * rng.standard_normal(tone.size), rate_hz)
        recipe = measure_recipe(recording, held_notes(recording)[0])
        assert recipe.f0_hz == pytest.approx(f0_hz, rel=0.01)
        lost = np.flatnonzero(~recipe.heard[: k.size])
        truth_db = 10.0 * np.log10(power / np.sum(power))
        assert np.all(truth_db[lost] < recipe.floor_db[lost] + UNHEARD_BELOW_DB)
        unheard += lost.size
    assert unheard > 0
