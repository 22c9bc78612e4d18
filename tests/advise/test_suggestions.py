"""Suggestions follow the evidence, in the order of what an ear would notice, and never contradict each other."""

import math
from dataclasses import replace

import librosa
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from tests.show import invented
from timbre_match.advise.suggestions import Suggestion, ear_weight, suggest
from timbre_match.advise.workshop import Practice, families, workshop_family
from timbre_match.compare.records import (
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    Region,
    StringNote,
    Strings,
    Sustain,
    SustainRegion,
    Verdict,
)
from timbre_match.show.marks import VERDICTS

PRACTICES = {
    practice.move.text: practice
    for name in (*families(), "")
    for row in workshop_family(name).rows
    for practice in row.too_strong + row.too_weak
}


def comparison(
    *regions: Region,
    harmonics: tuple[HarmonicDifference, ...] = (),
    family: str = "violin",
    curve: tuple[CurvePoint, ...] = (),
) -> Comparison:
    return replace(
        invented.comparison(notes=("A4",)), family=family, regions=regions, harmonics=harmonics, body_curve=curve
    )


def practices(suggestions: tuple[Suggestion, ...]) -> list[Practice]:
    return [PRACTICES[move.text] for one in suggestions for move in one.moves if move.text in PRACTICES]


def contradictions(suggestions: tuple[Suggestion, ...]) -> list[tuple[str, str]]:
    turned = [(one.lever, one.way) for one in practices(suggestions)]
    return [(lever, way) for lever, way in turned if way == "more" and (lever, "less") in turned]


def flat_curve(value: float) -> tuple[CurvePoint, ...]:
    return tuple(
        CurvePoint(
            freq_hz=freq_hz,
            difference_db=Interval(value=value, low=value - 1, high=value + 1),
            simultaneous_low_db=value - 2,
            simultaneous_high_db=value + 2,
        )
        for freq_hz in (100.0, 1000.0, 10000.0)
    )


# IEC 61672-1:2013, table 3: A-weighting at the exact octave frequencies, dB.
IEC_TABLE = [(-15, -39.4), (-12, -26.2), (-9, -16.1), (-6, -8.6), (-3, -3.2), (0, 0.0), (3, 1.2), (6, 1.0), (9, -1.1)]


@pytest.mark.parametrize(("tenth_decades", "a_db"), IEC_TABLE)
def test_the_ear_weight_is_the_a_weighting_as_loudness(tenth_decades: int, a_db: float) -> None:
    freq_hz = 1000.0 * 10.0 ** (0.1 * tenth_decades)
    assert math.log10(ear_weight(freq_hz)) / 0.03 == pytest.approx(a_db, abs=0.06)
    reference_db = float(np.squeeze(librosa.A_weighting(np.array([freq_hz]))))
    assert math.log10(ear_weight(freq_hz)) / 0.03 == pytest.approx(reference_db, abs=0.01)


def test_no_evidence_no_suggestion() -> None:
    assert suggest(comparison()) == ()
    alike = invented.harmonic("A4", 2, 0.1, "alike")
    unsettled = invented.harmonic("A4", 3, 4.0, "unsettled")
    assert suggest(comparison(harmonics=(alike, unsettled))) == ()


def test_the_evidence_is_a_sentence_with_region_size_interval_and_counts() -> None:
    region = Region(
        low_hz=620.0,
        high_hz=760.0,
        difference_db=Interval(value=-4.6, low=-6.0, high=-3.1),
        verdict="weaker",
        harmonics=8,
        notes=6,
    )
    (only,) = suggest(comparison(region))
    assert only.evidence.startswith(
        "620 to 760 Hz is weaker than the target by 4.6 dB (3.1 to 6.0), seen in 8 harmonics of 6 notes."
    )
    assert "higher body modes" in only.evidence
    assert only.region == region
    (single,) = suggest(comparison(replace(region, harmonics=2, notes=1)))
    assert "seen in 2 harmonics of 1 note." in single.evidence


def test_moves_are_those_of_the_row_and_the_direction() -> None:
    row = next(row for row in workshop_family("violin").rows if "A0" in row.name)
    (strong,) = suggest(comparison(invented.region(255.0, 300.0, 4.0)))
    (weak,) = suggest(comparison(invented.region(255.0, 300.0, -4.0)))
    assert strong.moves == tuple(practice.move for practice in row.too_strong)
    assert weak.moves == tuple(practice.move for practice in row.too_weak)


@pytest.mark.parametrize("family", ["", "theremin", "guitar"])
def test_without_a_table_the_advice_is_general(family: str) -> None:
    (only,) = suggest(comparison(invented.region(255.0, 300.0, 4.0), family=family))
    general = {p.move.text for row in workshop_family("").rows for p in row.too_strong + row.too_weak}
    assert {move.text for move in only.moves} <= general
    assert only.cautions[0].startswith("General advice")


LARGER = invented.region(600.0, 900.0, -6.0)


@pytest.mark.parametrize(
    ("lesser", "why"),
    [
        (invented.region(1100.0, 1600.0, -3.0), "smaller difference, in a range where the ear is keener"),
        (invented.region(1100.0, 1200.0, -6.0), "narrower"),
        (invented.region(1100.0, 1600.0, -6.0, half=5.5), "less sure"),
        (invented.region(65.0, 130.0, -6.0), "where the ear is duller"),
    ],
)
def test_rank_goes_by_size_width_certainty_and_the_ear(lesser: Region, why: str) -> None:
    for regions in ((LARGER, lesser), (lesser, LARGER)):
        assert [one.region for one in suggest(comparison(*regions))] == [LARGER, lesser], why


def test_opposite_directions_in_one_row_replace_the_moves_by_a_plain_statement() -> None:
    both = suggest(comparison(invented.region(630.0, 700.0, 4.0), invented.region(780.0, 900.0, -4.0)))
    assert both
    for one in both:
        assert "points both ways" in one.moves[0].text
        assert "measure again" in one.moves[0].text
        assert all(PRACTICES[move.text].way == "check" and move.reversible for move in one.moves[1:])
    assert all("stronger than the target" in one.evidence for one in both)
    assert all("weaker than the target" in one.evidence for one in both)


def test_between_rows_the_better_rank_keeps_its_move_and_the_other_says_so() -> None:
    better, worse = suggest(comparison(invented.region(630.0, 950.0, -8.0), invented.region(1900.0, 2200.0, 2.0)))
    assert "soundpost distance from the bridge" in {one.lever for one in practices((better,))}
    assert "soundpost distance from the bridge" not in {one.lever for one in practices((worse,))}
    assert any("suggestion 1 turns it the other way: soundpost distance" in move.text for move in worse.moves)


def test_single_harmonics_only_where_they_stand_out_of_their_neighbours() -> None:
    lone = invented.harmonic("A4", 3, 5.0, "stronger")
    (only,) = suggest(comparison(harmonics=(lone,)))
    assert only.region is None
    assert "harmonic 3 of A4 (1320 Hz) by 5.0 dB (2.4 to 7.6)" in only.evidence
    assert len(suggest(comparison(harmonics=(lone,), curve=flat_curve(0.0)))) == 1
    assert suggest(comparison(harmonics=(lone,), curve=flat_curve(4.0))) == ()


def test_a_harmonic_inside_a_region_is_not_told_twice() -> None:
    inside = invented.harmonic("A4", 3, 5.0, "stronger")
    assert len(suggest(comparison(invented.region(1200.0, 1500.0, 5.0), harmonics=(inside,)))) == 1


def test_harmonics_of_one_row_and_direction_are_grouped_and_come_after_regions() -> None:
    harmonics = tuple(invented.harmonic(note, 3, 9.0, "stronger") for note in ("A4", "B4", "C5"))
    first, second = suggest(comparison(invented.region(255.0, 300.0, 2.0), harmonics=harmonics))
    assert first.region is not None
    assert second.region is None
    assert second.evidence.count("harmonic 3 of") == 3


def test_a_lone_harmonic_does_not_outvote_a_region() -> None:
    against = invented.harmonic("A4", 2, 5.0, "stronger")
    region = invented.region(630.0, 760.0, -4.0)
    first, second = suggest(comparison(region, harmonics=(against,)))
    assert first.moves == suggest(comparison(region))[0].moves
    assert [move.text.startswith("Play A4 again on both sides") for move in second.moves] == [True]


def test_several_harmonics_against_a_region_do_not_outvote_it_either() -> None:
    against = tuple(invented.harmonic(note, 2, 5.0, "stronger") for note in ("A4", "B4"))
    region = invented.region(630.0, 760.0, -4.0)
    first, second = suggest(comparison(region, harmonics=against))
    assert first.moves == suggest(comparison(region))[0].moves
    assert "points both ways" in second.moves[0].text


@pytest.mark.parametrize(
    "lone",
    [
        comparison(harmonics=(invented.harmonic("A4", 3, 12.0, "stronger", 0.5),)),
        comparison(replace(invented.region(1200.0, 1400.0, -9.0), harmonics=1, notes=1)),
    ],
)
@pytest.mark.parametrize("family", [*families(), ""])
def test_a_single_harmonic_asks_for_its_note_again_and_for_nothing_else(lone: Comparison, family: str) -> None:
    (only,) = suggest(replace(lone, family=family))
    assert "This is one harmonic of one note" in only.evidence
    (move,) = only.moves
    assert move.reversible
    assert move.basis == "follows from the measurement"
    assert "again on both sides" in move.text
    assert practices((only,)) == []


@pytest.mark.parametrize("family", [*families(), ""])
def test_a_single_take_on_either_side_leaves_out_what_cannot_be_undone(family: str) -> None:
    said = 0
    for row in workshop_family(family).rows:
        for size in (-8.0, 8.0):
            whole = comparison(invented.region(row.low_hz, row.high_hz, size), family=family)
            irreversible = [move for one in suggest(whole) for move in one.moves if not move.reversible]
            for takes, target_takes in ((1, 3), (3, 1), (1, 1)):
                scatter = replace(whole.repeatability, takes=takes, target_takes=target_takes)
                moves = [move for one in suggest(replace(whole, repeatability=scatter)) for move in one.moves]
                assert all(move.reversible for move in moves)
                assert any("rests on a single take" in move.text for move in moves) == bool(irreversible)
            said += len(irreversible)
    assert said > 0 or family in ("", "flute", "harp", "trumpet")


def test_no_more_than_the_five_best() -> None:
    edges = (250.0, 330.0, 460.0, 640.0, 1100.0, 1700.0, 2600.0, 4200.0, 7000.0)
    signs = (1, -1, 1, -1, 1, -1, 1, -1, 1)
    regions = [invented.region(low, 1.08 * low, sign * 6.0) for low, sign in zip(edges, signs, strict=True)]
    suggestions = suggest(comparison(*regions))
    assert len(suggestions) == 5
    alone = {one.region: one for region in regions for one in suggest(comparison(region))}
    assert suggestions[0].moves == alone[suggestions[0].region].moves


def test_a_finding_whose_moves_a_better_rank_has_named_is_left_out() -> None:
    better, same_row = invented.region(640.0, 760.0, -6.0), invented.region(850.0, 950.0, -4.0)
    (only,) = suggest(comparison(same_row, better))
    assert only.region == better
    assert [one.region for one in suggest(comparison(same_row))] == [same_row]


SIZES = st.floats(0.5, 15.0)


@st.composite
def any_comparison(draw: st.DrawFn) -> Comparison:
    regions = []
    for _ in range(draw(st.integers(0, 6))):
        low_hz = draw(st.floats(25.0, 12000.0))
        sign = draw(st.sampled_from((-1.0, 1.0)))
        half = draw(st.floats(0.1, 8.0))
        regions.append(invented.region(low_hz, low_hz * draw(st.floats(1.0, 3.0)), sign * draw(SIZES), half))
    harmonics = []
    for _ in range(draw(st.integers(0, 8))):
        value = draw(SIZES) * draw(st.sampled_from((-1.0, 1.0)))
        note = draw(st.sampled_from(("C2", "G3", "A4", "E6")))
        differs: Verdict = "stronger" if value > 0 else "weaker"
        verdict = draw(st.sampled_from((differs, VERDICTS[2], VERDICTS[3])))
        harmonics.append(invented.harmonic(note, draw(st.integers(1, 12)), value, verdict, 0.4))
    family = draw(st.sampled_from((*families(), "", "bagpipe")))
    curve = draw(st.sampled_from(((), flat_curve(0.5))))
    return comparison(*regions, harmonics=tuple(harmonics), family=family, curve=curve)


@given(any_comparison())
@settings(max_examples=200, deadline=None)
def test_laws_of_every_list_of_suggestions(given_comparison: Comparison) -> None:
    suggestions = suggest(given_comparison)
    assert suggest(given_comparison) == suggestions
    assert contradictions(suggestions) == []
    assert [one.rank for one in suggestions] == list(range(1, len(suggestions) + 1))
    assert len(suggestions) <= 5
    assert bool(suggestions) >= bool(given_comparison.regions)
    told: set[str] = set()
    for one in suggestions:
        assert not told.issuperset(move.text for move in one.moves)
        told.update(move.text for move in one.moves)
    without = [one.region is None for one in suggestions]
    assert without == sorted(without)
    for one in suggestions:
        assert one.moves
        order = [move.reversible for move in one.moves]
        assert order == sorted(order, reverse=True)
        assert all(move.basis for move in one.moves)
        assert "judgement" in one.cautions[-1]
        if not all(order):
            assert any("does not come back" in caution for caution in one.cautions)


@given(any_comparison(), st.floats(1.1, 4.0))
@settings(max_examples=100, deadline=None)
def test_a_region_that_grows_never_falls_in_rank(given_comparison: Comparison, factor: float) -> None:
    assume(bool(given_comparison.regions))
    region = given_comparison.regions[0]
    d = region.difference_db
    grown = replace(region, difference_db=Interval(value=d.value * factor, low=d.low * factor, high=d.high * factor))
    before = next((one.rank for one in suggest(given_comparison) if one.region is region), None)
    assume(before is not None)
    assert before is not None
    after_comparison = replace(given_comparison, regions=(grown, *given_comparison.regions[1:]))
    after = next(one.rank for one in suggest(after_comparison) if one.region is grown)
    assert after <= before


def sustained(ratio: Interval, *, family: str = "classical guitar", strings: Strings | None = None) -> Comparison:
    """A comparison whose only differing stretch is one of sustain, from 180 to 220 Hz."""
    longer = ratio.value > 1.0
    region = SustainRegion(
        low_hz=180.0,
        high_hz=220.0,
        ratio=ratio,
        verdict="longer" if longer else "shorter",
        harmonics=8,
        notes=5,
    )
    sustain = Sustain(source="both", harmonics=(), notes=(), curve=(), regions=(region,), apart=())
    return replace(comparison(family=family), sustain=sustain, strings=strings)


SHORTER = Interval(value=0.5, low=0.4, high=0.62)
LONGER = Interval(value=2.0, low=1.6, high=2.5)
OTHER_STRINGS = Strings(
    notes=(
        StringNote(
            note="E4", b=6e-5, target_b=4e-5, ratio=Interval(value=1.5, low=1.3, high=1.7), p=1e-6, differs=True
        ),
    ),
    dull_from_hz=None,
)


def test_sustain_is_advised_on_from_its_own_rows() -> None:
    row = next(row for row in workshop_family("classical guitar").sustain if row.low_hz <= 200.0 < row.high_hz)
    (short,) = suggest(sustained(SHORTER))
    (long,) = suggest(sustained(LONGER))
    assert short.moves == tuple(practice.move for practice in row.too_weak)
    assert long.moves == tuple(practice.move for practice in row.too_strong)
    assert short.evidence.startswith(
        "Partials between 180 and 220 Hz die 50 % (38 to 60) sooner, seen in 8 partials of 5 notes."
    )
    assert "ring 100 % (60 to 150) longer" in long.evidence


def test_what_nobody_hears_of_sustain_is_no_suggestion() -> None:
    assert suggest(sustained(Interval(value=0.85, low=0.8, high=0.9))) == ()
    assert suggest(sustained(Interval(value=1.2, low=1.1, high=1.3))) == ()
    empty = Sustain(source="both", harmonics=(), notes=(), curve=(), regions=(), apart=())
    assert suggest(replace(comparison(), sustain=empty)) == ()


def test_suspect_strings_come_first_and_hold_back_what_cannot_be_undone() -> None:
    first, second = suggest(sustained(LONGER, strings=OTHER_STRINGS))
    assert (first.rank, second.rank) == (1, 2)
    assert "first suspects" in first.evidence
    assert "1.50 times the target's" in first.evidence
    assert all(move.reversible for one in (first, second) for move in one.moves)
    assert any("strings are suspect" in move.text for move in second.moves)
    assert any("eyes" in caution for caution in first.cautions)
    assert any(not move.reversible for one in suggest(sustained(LONGER)) for move in one.moves)
    dull = Strings(notes=(), dull_from_hz=2500.0)
    assert "above 2500 Hz" in suggest(sustained(LONGER, strings=dull))[0].evidence
    assert suggest(replace(comparison(), strings=Strings(notes=(), dull_from_hz=None))) == ()


@pytest.mark.parametrize("family", ["", "guitar", "violin"])
def test_sustain_without_rows_of_its_own_gets_reversible_or_general_advice(family: str) -> None:
    (only,) = suggest(sustained(SHORTER, family=family))
    assert only.moves
    assert only.cautions
