"""Hz, cents, decibels and note names against ISO 16 and arithmetic done elsewhere."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from timbre_match import units
from timbre_match.errors import UnknownNameError

# ISO 16:1975 sets A4 = 440 Hz; f = 440 * 2^((m - 69) / 12) computed elsewhere, to four decimals.
EQUAL_TEMPERED_HZ = {
    **{"C2": 65.4064, "E2": 82.4069, "G2": 97.9989, "A2": 110.0, "C3": 130.8128, "D3": 146.8324, "G3": 195.9977},
    **{"A3": 220.0, "B3": 246.9417, "D4": 293.6648, "E4": 329.6276, "A4": 440.0, "E5": 659.2551},
}


@pytest.mark.parametrize(("name", "freq_hz"), EQUAL_TEMPERED_HZ.items())
def test_equal_tempered_frequencies(name: str, freq_hz: float) -> None:
    assert units.note_to_hz(name) == pytest.approx(freq_hz, abs=1e-4)


@pytest.mark.parametrize(
    ("pure_hz", "note", "cents"),
    # Open strings tuned in pure fifths (3/2) from A4 = 440 Hz, and from A3 = 220 Hz for the cello's C.
    [(660.0, "E5", 1.955), (293.3333333, "D4", -1.955), (195.5555556, "G3", -3.910), (65.1851852, "C2", -5.865)],
)
def test_pure_fifths_from_equal_temperament(pure_hz: float, note: str, cents: float) -> None:
    name, deviation = units.nearest_note(pure_hz)
    assert name == note
    assert deviation == pytest.approx(cents, abs=1e-3)


@pytest.mark.parametrize(
    ("k", "cents"), [(3, 1.955), (5, -13.686), (7, -31.174), (9, 3.910), (11, -48.682), (13, 40.528)]
)
def test_harmonics_from_equal_temperament(k: int, cents: float) -> None:
    # 1200 log2(k) less the nearest hundred, computed elsewhere (9: twice the third's).
    assert units.nearest_note(110.0 * k)[1] == pytest.approx(cents, abs=1e-3)


@pytest.mark.parametrize(("a4_hz", "cents"), [(442.0, 7.851), (415.0, -101.27)])
def test_tunings_in_cents(a4_hz: float, cents: float) -> None:
    assert units.cents_between(a4_hz, 440.0) == pytest.approx(cents, abs=5e-3)
    assert units.nearest_note(a4_hz, a4_hz) == ("A4", 0.0)
    assert units.note_to_hz("A4", a4_hz) == a4_hz


@given(st.integers(0, 127))
def test_names_and_numbers_are_inverse(number: int) -> None:
    assert units.note_number(units.note_name(number)) == number


@given(st.integers(12, 120), st.floats(-49.9, 49.9), st.floats(400.0, 460.0))
def test_nearest_note_gives_back_note_and_deviation(number: int, cents: float, a4_hz: float) -> None:
    freq_hz = a4_hz * 2.0 ** ((number - 69) / 12.0 + cents / 1200.0)
    note, deviation = units.nearest_note(freq_hz, a4_hz)
    assert units.note_number(note) == number
    assert deviation == pytest.approx(cents, abs=1e-6)


@given(st.floats(20.0, 20_000.0))
def test_deviation_is_at_most_a_quarter_tone(freq_hz: float) -> None:
    assert -50.0 <= units.nearest_note(freq_hz)[1] <= 50.0 + 1e-9


@pytest.mark.parametrize(
    ("name", "number"),
    [("A4", 69), ("C4", 60), ("C-1", 0), ("f#3", 54), ("Gb3", 54), ("B♭2", 46), ("A♯2", 46), (" E2 ", 40), ("Cb4", 59)],
)
def test_spellings(name: str, number: int) -> None:
    assert units.note_number(name) == number


@pytest.mark.parametrize("name", ["", "H2", "A", "4", "A#", "A##4", "A4x", "A 4", "A4.5"])
def test_what_is_no_note_says_how_to_write_one(name: str) -> None:
    with pytest.raises(UnknownNameError) as caught:
        units.note_number(name)
    assert repr(name) in str(caught.value)
    assert '"F#4"' in caught.value.remedy


def test_lists_of_notes() -> None:
    assert units.parse_notes("G3 D4,A4;  Bb2\tdb5") == ("G3", "D4", "A4", "A#2", "C#5")
    for empty in ("", "  ", ",;"):
        with pytest.raises(UnknownNameError, match="no note names"):
            units.parse_notes(empty)
    with pytest.raises(UnknownNameError, match="'X9'"):
        units.parse_notes("G3 X9")


def test_decibels_of_a_sawtooth() -> None:
    # Amplitudes 1/k in dB re the first: 20 log10 k, computed elsewhere.
    expected = [-6.021, -9.542, -12.041, -13.979, -15.563, -16.902, -18.062, -19.085, -20.000]
    assert units.power_to_db([1.0 / k**2 for k in range(2, 11)]) == pytest.approx(expected, abs=5e-4)
    assert units.power_to_db(0.0) == -math.inf


@given(st.floats(-300.0, 300.0))
def test_decibels_and_power_are_inverse(level_db: float) -> None:
    assert units.power_to_db(units.db_to_power(level_db)) == pytest.approx(level_db, abs=1e-9)
