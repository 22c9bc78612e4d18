import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.compare.simulated import NOTES, base_levels, dip, profile, recipe, take_of
from timbre_match.compare import colour, compare
from timbre_match.compare.records import Comparison
from timbre_match.compare.target import blend
from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile, Take
from timbre_match.units import note_to_hz

TARGET = profile(100)
DIPPED = profile(7, change=dip(1000.0, -5.0, 0.7), own={("A4", 9): 12.0})


@pytest.fixture(scope="module")
def dipped() -> Comparison:
    return compare(DIPPED, TARGET)


@pytest.fixture(scope="module")
def same() -> Comparison:
    return compare(profile(8), TARGET)


def test_a_known_dip_is_found_with_its_place_and_size(dipped: Comparison) -> None:
    covering = [one for one in dipped.regions if one.low_hz <= 1000.0 <= one.high_hz]
    assert len(covering) == 1
    region = covering[0]
    assert region.verdict == "weaker"
    assert abs(math.log2(math.sqrt(region.low_hz * region.high_hz) / 1000.0)) < 1 / 6
    assert abs(region.difference_db.value + 5.0) < 1.5
    inside = [one for one in dipped.harmonics if region.low_hz <= one.freq_hz <= region.high_hz]
    assert region.harmonics == len(inside)
    assert region.notes == len({one.note for one in inside})


def test_the_simultaneous_band_keeps_to_one_side_of_zero_in_regions_and_nowhere_else(dipped: Comparison) -> None:
    for point in dipped.body_curve:
        inside = any(one.low_hz <= point.freq_hz <= one.high_hz for one in dipped.regions)
        assert inside == (point.simultaneous_low_db >= 0 or point.simultaneous_high_db <= 0)


def test_a_known_lone_harmonic_is_found(dipped: Comparison) -> None:
    (odd,) = [one for one in dipped.harmonics if (one.note, one.k) == ("A4", 9)]
    assert odd.verdict == "stronger"
    assert odd.difference_db.low < 12.0
    assert odd.difference_db.value > 6.0


@pytest.mark.parametrize("seed", range(20, 26))
def test_a_lone_harmonic_makes_no_region(seed: int) -> None:
    weak = compare(profile(seed, own={("G3", 1): -40.0}, takes=1), profile(seed + 50, takes=1))
    assert all(one.harmonics > 1 for one in weak.regions)
    assert weak.harmonics[0].difference_db.low < -35.0


def test_an_instrument_like_its_target_shows_no_region(same: Comparison) -> None:
    assert same.regions == ()
    assert not any(one.verdict in ("stronger", "weaker") for one in same.harmonics)
    assert same.colour_distance.distance_db.value < 1.0
    assert same.closeness_percent.value > 90.0


def test_intervals_surround_their_values(dipped: Comparison) -> None:
    intervals = [dipped.colour_distance.distance_db, dipped.closeness_percent]
    intervals += [one.difference_db for one in dipped.harmonics]
    intervals += [one.difference_db for one in dipped.body_curve]
    intervals += [one.difference_db for one in dipped.regions]
    assert all(one.low <= one.value <= one.high for one in intervals)
    assert all(one.simultaneous_low_db <= one.difference_db.low for one in dipped.body_curve)
    assert all(one.simultaneous_high_db >= one.difference_db.high for one in dipped.body_curve)


def test_the_same_input_gives_the_same_answer(dipped: Comparison) -> None:
    assert compare(DIPPED, TARGET) == dipped


def test_exchanging_the_sides_changes_the_sign(dipped: Comparison) -> None:
    back = compare(TARGET, DIPPED)
    there = np.array([one.difference_db.value for one in dipped.harmonics])
    again = np.array([one.difference_db.value for one in back.harmonics])
    assert again == pytest.approx(-there, abs=1e-3)


def test_the_order_of_takes_does_not_matter(dipped: Comparison) -> None:
    turned = compare(replace(DIPPED, takes=DIPPED.takes[::-1]), TARGET)
    there = [one.difference_db.value for one in dipped.harmonics]
    assert [one.difference_db.value for one in turned.harmonics] == pytest.approx(there, abs=1e-3)


def test_one_take_a_side_answers_widely_and_says_why() -> None:
    change = dip(1000.0, -5.0, 0.7)
    one = compare(profile(7, change=change, takes=1), profile(100, takes=1))
    three = compare(profile(7, change=change, takes=3), profile(100, takes=3))

    def width(comparison: Comparison) -> float:
        return float(np.median([h.difference_db.high - h.difference_db.low for h in comparison.harmonics]))

    assert one.repeatability.source == "prior"
    assert three.repeatability.source == "both"
    assert (three.repeatability.takes, three.repeatability.target_takes) == (3, 3)
    assert width(one) > 1.3 * width(three)
    assert any("one take a side" in remark for remark in one.remarks)
    assert one.colour_distance.own_db is None


def test_levels_set_aside_are_listed() -> None:
    plain = profile(9)
    spoilt = list(plain.takes[1].notes)
    level = spoilt[3].level_db.copy()
    level[5] += 15.0
    spoilt[3] = replace(spoilt[3], level_db=level)
    takes = (plain.takes[0], Take(recordings=(), notes=tuple(spoilt)), plain.takes[2])
    found = compare(replace(plain, takes=takes), TARGET)
    assert any("instrument take 2: D4 harmonic 6" in remark for remark in found.remarks)


def test_one_note_is_enough() -> None:
    found = compare(profile(1, notes=("G3",)), profile(2, notes=("G3",)))
    assert {one.note for one in found.harmonics} == {"G3"}
    assert len(found.body_curve) > 10


def test_two_harmonics_are_enough() -> None:
    count = 19 - 2
    found = compare(profile(1, notes=("A4",), unheard=count - 1), profile(2, notes=("A4",), unheard=count - 1))
    assert all(math.isfinite(one.difference_db.value) for one in found.harmonics)


def test_a_blend_lies_between_its_members() -> None:
    members = (profile(1, change=dip(1000.0, 6.0, 1.0)), profile(2, change=dip(1000.0, -6.0, 1.0)))
    found = compare(profile(3), blend("pair", members))
    near = [abs(one.difference_db.value) for one in found.body_curve if 800 < one.freq_hz < 1250]
    assert max(near) < 1.5
    assert found.repeatability.target_takes == 6
    assert found.target == "pair"


def test_members_of_a_blend_need_not_share_all_notes() -> None:
    target = blend("mixed", (profile(1, notes=NOTES[:6]), profile(2, notes=NOTES[4:])))
    found = compare(profile(3), target)
    assert {one.note for one in found.harmonics} == set(NOTES)


def test_unsettled_harmonics_say_how_many_takes_settle_them() -> None:
    found = compare(profile(1, takes=1), profile(2, takes=1))
    unsettled = [one for one in found.harmonics if one.verdict == "unsettled"]
    assert unsettled
    assert all(one.takes_needed is None or one.takes_needed > 1 for one in unsettled)
    assert all(one.takes_needed is None for one in found.harmonics if one.verdict != "unsettled")
    assert any("unsettled" in remark and "takes a side" in remark for remark in found.remarks)


def test_a_control_takes_the_session_out() -> None:
    def room(freq_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        return dip(2500.0, 6.0, 0.8)(freq_hz)

    def both(freq_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        return dip(1000.0, -5.0, 0.7)(freq_hz) + room(freq_hz)

    instrument = profile(10, change=both)
    now = replace(profile(70, change=room, notes=NOTES[::2]), instrument="control")
    then = replace(profile(90, notes=NOTES[::2]), instrument="control")
    plain = compare(instrument, TARGET)
    controlled = compare(instrument, TARGET, control_now=now, control_then=then)
    assert {one.verdict for one in plain.regions} == {"weaker", "stronger"}
    assert [one.verdict for one in controlled.regions] == ["weaker"]
    assert any("control" in remark for remark in controlled.remarks)

    def width(found: Comparison) -> float:
        return float(np.mean([one.difference_db.high - one.difference_db.low for one in found.body_curve]))

    assert width(controlled) > width(plain)


def test_half_a_control_is_refused() -> None:
    with pytest.raises(ValueError, match="two profiles"):
        compare(TARGET, TARGET, control_now=TARGET)


def test_a_blend_says_whether_the_instrument_is_one_of_the_family() -> None:
    family = blend("family", tuple(profile(seed, change=dip(1000.0, 8.0 * seed - 12.0, 1.0)) for seed in (1, 2)))
    inside = compare(profile(5), family)
    outside = compare(profile(6, change=lambda freq_hz: 8.0 * np.sin(5.0 * np.log2(freq_hz))), family)
    assert any(remark.startswith("inside the family") for remark in inside.remarks)
    assert any(remark.startswith("outside the family") for remark in outside.remarks)
    assert not any("the family" in remark for remark in compare(profile(5), TARGET).remarks)


def heavy(seed: int, *, takes: int, own_db: float) -> tuple[Profile, Profile, float]:
    """An instrument and its target with Student t scatter as in the tables, and their true colour distance in dB."""
    rng = np.random.default_rng(seed)
    notes, freqs, base, change = NOTES[::2], [], [], []
    for note in notes:
        base.append(base_levels(note))
        freqs.append(note_to_hz(note) * np.arange(1, base[-1].size + 1))
        change.append(own_db * rng.standard_normal(base[-1].size))

    def side(factor: float) -> Profile:
        made = []
        for take in range(takes):
            tilt = rng.normal(0, 0.3)
            levels = [
                level + factor * gap + tilt * np.log2(freq / 1000.0) + 1.5 * rng.standard_t(3.0, level.size)
                for level, gap, freq in zip(base, change, freqs, strict=True)
            ]
            recipes = tuple(recipe(note, level) for note, level in zip(notes, levels, strict=True))
            made.append(take_of(recipes, file=f"{seed}_{factor}_{take}.wav"))
        return replace(profile(seed), family="oboe", takes=tuple(made))

    index = np.repeat(np.arange(len(notes)), [level.size for level in base])
    bands = colour.all_bands(index, np.concatenate(freqs), np.concatenate(base), np.concatenate(change)[None])
    return side(1.0), side(0.0), float(colour.colour_distance(bands)[0])


def test_colour_distance_is_neither_shrunk_nor_swollen_by_the_scatter() -> None:
    # Truth and scatter are the test's own. The distance of the shrunk differences is too small by 9 % here, and its
    # intervals hold in five of the eight; by chance six or fewer of eight 95 % intervals hold in one of 17 such tests.
    found, truth, held = [], [], 0
    for seed in range(8):
        instrument, target, true_db = heavy(seed, takes=5, own_db=2.5)
        value = compare(instrument, target).colour_distance.distance_db
        found.append(value.value)
        truth.append(true_db)
        held += value.low <= true_db <= value.high
    assert np.mean(found) == pytest.approx(np.mean(truth), rel=0.06)
    assert held >= 7


def test_colour_distance_of_an_instrument_to_itself_reaches_down_to_nothing() -> None:
    # The draws as they are lie half a decibel and more above zero.
    found = [compare(*heavy(seed, takes=3, own_db=0.0)[:2]) for seed in range(4)]
    distances = [one.colour_distance.distance_db for one in found]
    assert np.median([one.low for one in distances]) < 0.05
    own = np.array([one.colour_distance.own_db for one in found], dtype=np.float64)
    assert np.mean([one.value for one in distances]) < 0.3 * np.mean(own)
    assert all(one.closeness_percent.high == pytest.approx(100.0, abs=0.1) for one in found)


def test_a_margin_below_zero_is_refused() -> None:
    with pytest.raises(ValueError, match="margin"):
        compare(TARGET, TARGET, margin_db=0.0)


def test_nothing_in_common_is_an_error() -> None:
    with pytest.raises(ComparisonError, match="no note in common"):
        compare(profile(1, notes=("G3",)), profile(2, notes=("A4",)))
