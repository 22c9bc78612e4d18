"""Tables say what the records say, fit a narrow window, and are safe with any name."""

import io
import re
from dataclasses import replace

import numpy as np
import pytest
from rich.cells import cell_len
from rich.console import Console, RenderableType

from tests.show import invented
from timbre_match.advise.suggestions import suggest
from timbre_match.compare.records import ColourDistance, Interval
from timbre_match.intake.notes import HeldNote
from timbre_match.intake.recording import Recording
from timbre_match.measure.profile import Session
from timbre_match.show.marks import plain, signed, signed_interval
from timbre_match.show.tables import (
    comparison_summary,
    held_notes_table,
    profile_summary,
    suggestions_list,
)

HOSTILE = [
    pytest.param("[bold red]no[/bold red] [/] [link=file:///x]y[/link] :smiley:", id="markup"),
    pytest.param("a\x1b[31mb\x07c\rd\ne\x9b2J\x00", id="control characters"),
    pytest.param("\u202egnorw\u202c \u2067abc\u2069 שלום", id="right to left"),
    pytest.param("x" * 500, id="500 characters"),
    pytest.param("日本" * 250, id="500 wide characters"),
    pytest.param("", id="empty"),
]


def printed(renderable: RenderableType, width: int = 60, *, colour: bool = False) -> str:
    page = io.StringIO()
    console = Console(
        file=page,
        width=width,
        force_terminal=colour,
        color_system="truecolor" if colour else None,
        legacy_windows=False,
    )
    console.print(renderable)
    return page.getvalue()


def flowing(renderable: RenderableType, width: int = 60) -> str:
    """The text without line breaks, as a reader takes it in."""
    return " ".join(printed(renderable, width).split())


def recording(file: str = "a.wav", warnings: tuple[str, ...] = ()) -> Recording:
    return Recording(
        file=file,
        sha256="0" * 64,
        samples=np.zeros(4),
        sample_rate_hz=48000,
        channel=2,
        channel_count=2,
        warnings=warnings,
    )


def held(note: str = "A4") -> HeldNote:
    return HeldNote(
        note=note,
        f0_hz=441.234,
        cents=4.85,
        start_s=0.51,
        end_s=2.52,
        cycles=886,
        kind="held",
        track_s=np.zeros(2),
        track_hz=np.zeros(2),
    )


def everything(name: str) -> list[RenderableType]:
    compared = invented.comparison(instrument=name, target_name=name)
    compared = replace(
        compared,
        stage=name,
        remarks=(name,),
        harmonics=tuple(replace(harmonic, note=name) for harmonic in compared.harmonics),
    )
    profile = replace(invented.profile(name, notes=("G3", "A4"), takes=2), stage=name, family=name)
    takes = tuple(
        replace(take, recordings=tuple(replace(source, file=name) for source in take.recordings))
        for take in profile.takes
    )
    return [
        held_notes_table(recording(name, (name,)), [held(name)]),
        profile_summary(replace(profile, takes=takes), (name,)),
        comparison_summary(compared),
        suggestions_list(suggest(compared)),
    ]


@pytest.mark.parametrize("name", HOSTILE)
@pytest.mark.parametrize("width", [60, 100])
def test_any_name_fits_and_steers_nothing(name: str, width: int) -> None:
    for renderable in everything(name):
        text = printed(renderable, width)
        assert all(cell_len(line) <= width for line in text.splitlines())
        assert not re.search(r"[\x00-\x09\x0b-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069]", text)


def test_markup_in_a_name_is_shown_as_it_is_written() -> None:
    name = "[red]no[/red] :smiley:"
    for renderable in everything(name)[:3]:
        assert name in flowing(renderable)


def test_held_notes() -> None:
    text = flowing(held_notes_table(recording("old viola.wav", ("Clipped at 3 places.",)), [held()]))
    assert "old viola.wav 48 kHz, channel 2 of 2" in text
    assert "A4 441.23 +4.8 0.51 2.52 886 held" in text or "A4 441.23 +4.9 0.51 2.52 886 held" in text
    assert "Clipped at 3 places." in text
    assert "No held note." in flowing(held_notes_table(recording(), []))


def test_profile_summary_counts_what_is_in_the_profile() -> None:
    profile = invented.profile(notes=("G3", "A4"), takes=2)
    text = flowing(profile_summary(profile, ("Mains hum at 50 Hz.",)))
    for take in profile.takes:
        for recipe in take.notes:
            heard = f"{int(recipe.heard.sum())} of {recipe.k.size}"
            assert f"{recipe.note} {recipe.f0_hz:.2f} +1.5 {recipe.cycles} {heard} 0.12" in text
    assert "2 takes" in text
    assert "Mains hum at 50 Hz." in text
    assert "Recorded:" not in text


def test_profile_summary_says_when_and_where_if_that_was_noted() -> None:
    noted = replace(invented.profile(), session=Session(date="2026-03-01", microphone="a [red] one"))
    assert "Recorded: 2026-03-01, a [red] one." in flowing(profile_summary(noted))


def test_the_comparison_begins_with_the_verdict_in_words() -> None:
    compared = invented.comparison()
    text = flowing(comparison_summary(compared))
    words = (
        "Colour distance 3.4 dB (2.9 to 3.9) between the averages of the takes; single takes of yours lie 0.8 dB "
        "apart. All differences are relative: zero is the level on which most of what is heard agrees. Where much of "
        "the range differs, what the zero is becomes unsure, and the intervals say so."
    )
    assert text.index(words) < text.index("▼")
    assert "Harmonics that differ, the largest first (each leans on its neighbours in frequency)" in text
    assert "Closeness 62 % (55 to 70): that share of the loudness lies within 3 dB of the target." in text
    assert "▼ 590 Hz 810 Hz −4.6 (−6.0 to −3.2) 8 6" in text
    assert "▲ 2250 Hz 3020 Hz +3.7 (+2.3 to +5.1) 8 6" in text
    assert compared.remarks[0] in text
    for note in ("G3", "B5"):
        mine = [harmonic.verdict for harmonic in compared.harmonics if harmonic.note == note]
        counts = [mine.count(verdict) or "·" for verdict in ("stronger", "weaker", "alike", "unsettled")]
        assert " ".join(map(str, [note, *counts])) in text


def test_unknown_own_distance_is_said_and_not_shown_as_a_number() -> None:
    distance = ColourDistance(distance_db=Interval(value=3.4, low=0.1, high=7.0), own_db=None)
    text = flowing(comparison_summary(replace(invented.comparison(), colour_distance=distance)))
    assert "is not known yet" in text
    assert "None" not in text


def test_a_comparison_without_differences_says_so() -> None:
    alike = tuple(invented.harmonic("A4", k, 0.1, "alike") for k in (1, 2, 3))
    compared = replace(invented.comparison(), regions=(), harmonics=alike)
    text = flowing(comparison_summary(compared))
    assert "No stretch of frequency is known to differ." in text
    assert "No single harmonic is known to differ." in text


def test_suggestions_say_each_move_once_and_end_with_the_makers_judgement() -> None:
    given = suggest(invented.comparison())
    text = flowing(suggestions_list(given))
    assert given[0].evidence in text
    for move in {move.text for one in given for move in one.moves}:
        assert text.count(move) == 1
    assert text.endswith(given[0].cautions[-1])
    assert "nothing to suggest" in flowing(suggestions_list(()))


def test_a_step_without_a_way_back_is_marked() -> None:
    compared = replace(invented.comparison(), regions=(invented.region(250.0, 300.0, -4.0),), harmonics=())
    assert "- No way back: Last resort" in flowing(suggestions_list(suggest(compared)))


def test_verdicts_keep_their_shape_in_colour_and_without() -> None:
    compared = invented.comparison()
    plainly = printed(comparison_summary(compared))
    coloured = printed(comparison_summary(compared), colour=True)
    assert "\x1b[" not in plainly
    assert "\x1b[" in coloured
    for sign in "▲▼=?":
        assert sign in plainly
        assert plainly.count(sign) == coloured.count(sign)


def test_numbers_in_words() -> None:
    assert (signed(-0.04), signed(0.04), signed(-4.64), signed(3.0)) == ("0.0", "0.0", "−4.6", "+3.0")
    assert signed_interval(Interval(value=-1.0, low=-2.5, high=0.5)) == "−1.0 (−2.5 to +0.5)"
    assert plain(" a\n\tb\u202ec ") == "a b c"
    assert plain("x" * 500, 10) == "x" * 9 + "…"
