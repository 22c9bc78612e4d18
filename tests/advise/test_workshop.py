"""The table of trade practice is complete, careful, and breaks with a clear message."""

from importlib.resources import files

import pytest
from hypothesis import given
from hypothesis import strategies as st

from timbre_match.advise.workshop import (
    COMMON_PRACTICE,
    Practice,
    WorkshopRow,
    families,
    read_family,
    read_moves,
    workshop_family,
)
from timbre_match.errors import SavedFileError, UnknownNameError
from timbre_match.intake.families import kind_of_family

NAMES = (*families(), "")
ROWS = [
    pytest.param(row, id=f"{name or 'general'}-{kind}-{row.low_hz:g}")
    for name in NAMES
    for kind, rows in (("level", workshop_family(name).rows), ("sustain", workshop_family(name).sustain))
    for row in rows
]
RINGING = [name for name in NAMES if workshop_family(name).sustain]


def test_the_families_of_the_design_are_there() -> None:
    assert set(families()) >= {
        "violin",
        "viola",
        "cello",
        "classical guitar",
        "steel-string guitar",
        "clarinet",
        "flute",
        "oboe",
        "trumpet",
    }


@pytest.mark.parametrize("name", NAMES)
@given(freq_hz=st.floats(20.0, 20000.0, exclude_max=True))
def test_every_audible_frequency_lies_in_exactly_one_row(name: str, freq_hz: float) -> None:
    assert sum(row.low_hz <= freq_hz < row.high_hz for row in workshop_family(name).rows) == 1


@pytest.mark.parametrize("name", RINGING)
@given(freq_hz=st.floats(20.0, 20000.0, exclude_max=True))
def test_every_audible_frequency_lies_in_exactly_one_row_of_sustain(name: str, freq_hz: float) -> None:
    assert sum(row.low_hz <= freq_hz < row.high_hz for row in workshop_family(name).sustain) == 1


def test_instruments_that_ring_have_rows_of_sustain_and_only_they() -> None:
    assert {kind_of_family(name) for name in RINGING} == {"ringing"}
    assert all(workshop_family(name).sustain for name in families() if kind_of_family(name) == "ringing")


@pytest.mark.parametrize("name", RINGING)
def test_strings_are_the_first_suspects_of_sustain(name: str) -> None:
    for row in workshop_family(name).sustain:
        levers = [practice.lever for practice in row.too_weak]
        assert levers[0] in ("string age", "unison tuning")


@pytest.mark.parametrize("row", ROWS)
def test_a_row_says_what_it_is_and_on_what_basis(row: WorkshopRow) -> None:
    assert row.name.strip()
    assert row.about.strip()
    published = any(character.isdigit() for character in row.basis) or "chapter" in row.basis
    assert row.basis == COMMON_PRACTICE or published or "from memory" in row.basis
    for practice in row.too_strong + row.too_weak:
        assert practice.move.basis == COMMON_PRACTICE


@pytest.mark.parametrize("row", ROWS)
def test_reversible_moves_come_first_in_both_directions(row: WorkshopRow) -> None:
    for practices in (row.too_strong, row.too_weak):
        order = [practice.move.reversible for practice in practices]
        assert order
        assert order[0]
        assert order == sorted(order, reverse=True)


@pytest.mark.parametrize("row", ROWS)
def test_the_directions_differ_and_neither_contradicts_itself(row: WorkshopRow) -> None:
    assert row.too_strong != row.too_weak
    turned = {(p.lever, p.way) for p in row.too_strong if p.way != "check"}
    assert turned.isdisjoint({(p.lever, p.way) for p in row.too_weak if p.way != "check"})
    for practices in (row.too_strong, row.too_weak):
        ways: dict[str, set[str]] = {}
        for practice in practices:
            ways.setdefault(practice.lever, set()).add(practice.way)
        assert not any({"more", "less"} <= found for found in ways.values())


@pytest.mark.parametrize("row", ROWS)
def test_cautions_cover_what_the_moves_do(row: WorkshopRow) -> None:
    assert "judgement" in row.cautions[-1]
    assert "licensed" in row.cautions[-1]
    assert "rules" in row.cautions[-1]
    assert any("playback level" in caution for caution in row.cautions)
    for practice in row.too_strong + row.too_weak:
        cautions = " ".join(practice.cautions)
        if not practice.move.reversible:
            assert "does not come back" in cautions
        if any(word in practice.move.text for word in ("strings of", "Fit a second bridge", "Move the soundpost")):
            assert "eyes" in cautions
        if any(word in practice.move.text.lower() for word in ("shave", "thin the", "plate work", "reaming")):
            assert "IARC Group 1" in cautions


# Woodhouse, Euphonics, section 5.3, after Bissinger, and Woodhouse 2005 for the violin. Viola, cello and guitars from
# memory (Gough; Firth 1974; Fletcher & Rossing, chapter 9): edges of the ranges that these sources give.
@pytest.mark.parametrize(
    ("family", "word", "published_hz"),
    [
        ("violin", "A0", (272.0, 260.0, 290.0)),
        ("violin", "CBR", (407.0, 380.0)),
        ("violin", "B1-", (462.0, 440.0)),
        ("violin", "B1+", (551.0, 510.0, 580.0)),
        ("violin", "bridge hill", (2300.0, 2500.0, 2000.0, 3000.0)),
        ("viola", "A0", (220.0, 235.0)),
        ("cello", "A0", (95.0, 110.0)),
        ("cello", "B1", (170.0, 200.0)),
        ("classical guitar", "air", (90.0, 110.0)),
        ("classical guitar", "top", (180.0, 220.0)),
        ("steel-string guitar", "air", (90.0, 110.0)),
        ("steel-string guitar", "top", (170.0, 210.0)),
        ("clarinet", "cutoff", (1500.0,)),
    ],
)
def test_published_resonances_lie_in_the_row_that_names_them(
    family: str, word: str, published_hz: tuple[float, ...]
) -> None:
    for freq_hz in published_hz:
        (row,) = [row for row in workshop_family(family).rows if row.low_hz <= freq_hz < row.high_hz]
        assert word in row.name


@pytest.mark.parametrize(
    ("written", "meant"),
    [
        (" Violin ", "violin"),
        ("fiddle", "violin"),
        ("Steel_String guitar", "steel-string guitar"),
        ("CLASSICAL-GUITAR", "classical guitar"),
        ("violoncello", "cello"),
        ("", ""),
    ],
)
def test_names_are_read_generously(written: str, meant: str) -> None:
    assert workshop_family(written).name == meant


def test_an_ambiguous_name_names_both_meanings() -> None:
    with pytest.raises(UnknownNameError) as caught:
        workshop_family("guitar")
    assert "classical guitar or steel-string guitar" in str(caught.value)


def test_an_unknown_name_lists_the_known_ones() -> None:
    with pytest.raises(UnknownNameError) as caught:
        workshop_family("nose flute band")
    assert all(name in str(caught.value) for name in families())


def test_every_written_move_is_used() -> None:
    data = files("timbre_match") / "advise" / "data"
    cautions = {key: key for key in ("strings", "dust", "glue", "heat", "knife", "removed")}
    written = read_moves((data / "moves.toml").read_text(encoding="utf-8"), "moves.toml", cautions)
    found = [workshop_family(name) for name in NAMES]
    used = {p.move.text for one in found for row in one.rows + one.sustain for p in row.too_strong + row.too_weak}
    assert {practice.move.text for practice in written.values()} == used


MOVES_TEXT = """
[turn]
text = "Turn it up."
lever = "knob"
way = "more"
reversible = true
cautions = []
[unturn]
text = "Turn it down."
lever = "knob"
way = "less"
reversible = true
cautions = []
[cut]
text = "Cut it off."
lever = "end"
way = "less"
reversible = false
cautions = ["dust"]
"""
CAUTIONS = {"dust": "Dust harms.", "removed": "It does not come back."}
REGION = """
[[region]]
low_hz = {low}
high_hz = {high}
name = "all"
about = "All of it."
basis = "common practice, no source"
too_strong = {strong}
too_weak = {weak}
"""
HEAD = 'family = "kazoo"\naliases = []\nremark = "A remark."\n'


def moves() -> dict[str, Practice]:
    return read_moves(MOVES_TEXT, "moves.toml", CAUTIONS)


def region(low: object = 20, high: object = 20000, strong: str = '["unturn"]', weak: str = '["turn"]') -> str:
    return REGION.format(low=low, high=high, strong=strong, weak=weak)


def test_a_new_family_is_a_text_file() -> None:
    family = read_family(HEAD + region(high=500) + region(low=500, weak='["turn", "cut"]'), "kazoo.toml", moves())
    assert [row.low_hz for row in family.rows] == [20.0, 500.0]
    assert family.rows[1].too_weak[1].cautions == ("Dust harms.", "It does not come back.")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("family = ", ["kazoo.toml", "not TOML"]),
        ('family = "kazoo"', ["kazoo.toml", "'aliases' is missing"]),
        (HEAD + "region = 3", ["there is no region"]),
        (HEAD + "region = [3]", ["region 1", "not a table"]),
        (HEAD + region() + "extra = 1", ["region 1", "'extra' is not known"]),
        (HEAD + region(low="true"), ["region 1", "low_hz is True"]),
        (HEAD + region(low=30), ["region 1", "ends at 20 Hz"]),
        (HEAD + region(high=500) + region(low=510), ["region 2", "ends at 500 Hz"]),
        (HEAD + region(high=500) + region(low=500, high=400), ["region 2", "from 500 to 400 Hz"]),
        (HEAD + region(high=500), ["the last region ends at 500 Hz"]),
        (HEAD + region(weak='["trun"]'), ["too_weak", "'trun' is not known", "did you mean 'turn'"]),
        (HEAD + region(weak="[]"), ["too_weak", "there is no move"]),
        (HEAD + region(weak="[1]"), ["too_weak is [1]"]),
        (HEAD + region(weak='["cut", "turn"]'), ["too_weak", "cannot be taken back"]),
        (HEAD + region(weak='["turn", "unturn"]'), ["too_weak", "opposite ways"]),
        (HEAD + region(weak='["unturn"]'), ["region 1", "same move"]),
    ],
)
def test_a_broken_family_names_the_place(text: str, said: list[str]) -> None:
    with pytest.raises(SavedFileError) as caught:
        read_family(text, "kazoo.toml", moves())
    assert all(words in str(caught.value) for words in said), str(caught.value)


@pytest.mark.parametrize(
    ("before", "after", "said"),
    [
        ('way = "more"', 'way = "up"', "way is 'up'"),
        ("reversible = true", "reversible = 1", "reversible is 1"),
        ('["dust"]', '["dsut"]', "did you mean 'dust'"),
        ('text = "Turn it up."', 'text = ""', "text is ''"),
        ('lever = "knob"\n', "", "'lever' is missing"),
    ],
)
def test_a_broken_move_names_the_place(before: str, after: str, said: str) -> None:
    assert before in MOVES_TEXT
    with pytest.raises(SavedFileError, match=r"moves\.toml, move") as caught:
        read_moves(MOVES_TEXT.replace(before, after, 1), "moves.toml", CAUTIONS)
    assert said in str(caught.value)
