"""Which notes to play: names that exist, in order, within what each instrument has."""

import pytest

from timbre_match.advise.recording_plan import recording_plan
from timbre_match.advise.workshop import families
from timbre_match.errors import UnknownNameError
from timbre_match.units import note_to_hz, parse_notes

# Open strings, and sounding ranges of winds as the players' tutors have them (from memory).
OPEN_STRINGS = {
    "mandolin": "G3 D4 A4 E5",
    "violin": "G3 D4 A4 E5",
    "viola": "C3 G3 D4 A4",
    "cello": "C2 G2 D3 A3",
    "classical guitar": "E2 A2 D3 G3 B3 E4",
    "steel-string guitar": "E2 A2 D3 G3 B3 E4",
}
RANGES = {"clarinet": ("D3", "A#6"), "flute": ("C4", "D7"), "oboe": ("A#3", "A6"), "trumpet": ("E3", "A#5")}


@pytest.mark.parametrize("family", families())
def test_every_family_with_a_table_has_notes(family: str) -> None:
    plan = recording_plan(family)
    assert parse_notes(" ".join(plan.notes)) == plan.notes
    heights = [note_to_hz(note) for note in plan.notes]
    assert heights == sorted(set(heights))
    assert len(heights) >= 8
    assert set(OPEN_STRINGS.get(family, "").split()) <= set(plan.notes)
    low, high = RANGES.get(family, (plan.notes[0], plan.notes[-1]))
    assert note_to_hz(low) <= heights[0] < heights[-1] <= note_to_hz(high)


def test_ringing_notes_are_let_ring_and_held_ones_held() -> None:
    assert any("let it ring" in point for point in recording_plan("classical guitar").points)
    assert any("Hold each note" in point for point in recording_plan("violin").points)


def test_other_names_for_a_family() -> None:
    assert recording_plan("Violin").notes == recording_plan("violin").notes
    assert recording_plan("hurdy-gurdy").notes == ()
    with pytest.raises(UnknownNameError, match="may mean"):
        recording_plan("guitar")
