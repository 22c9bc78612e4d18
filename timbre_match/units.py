"""Hz, cents, decibels and note names.

Conventions used everywhere in the package: frequencies in Hz, times in seconds, levels in dB, intervals in cents,
phases in radians. A note name is a letter, an optional ``#`` or ``b``, and an octave number, with A4 the note that
``a4_hz`` tunes (440 Hz by ISO 16:1975 unless said otherwise).
"""

import math
import re

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.errors import UnknownNameError

STANDARD_A4_HZ = 440.0
"""ISO 16:1975."""

_SEMITONE_OF_LETTER = {"C": 0, "D": 2, "E": 4, "F": 5, "G": 7, "A": 9, "B": 11}
_NAMES = ("C", "C#", "D", "D#", "E", "F", "F#", "G", "G#", "A", "A#", "B")
_NOTE_PATTERN = re.compile(r"([A-Ga-g])([#♯b♭]?)(-?\d{1,2})")
_A4_NUMBER = 69


def cents_between(frequency_hz: float, reference_hz: float) -> float:
    """Interval from `reference_hz` up to `frequency_hz` in cents: 1200 log2(f / f_ref)."""
    return 1200.0 * math.log2(frequency_hz / reference_hz)


def note_number(name: str) -> int:
    """Semitone number of a note name, with A4 = 69 (the MIDI convention).

    Raises
    ------
    UnknownNameError
        If `name` is not a note name such as ``G3``, ``F#4`` or ``Bb2``.
    """
    match = _NOTE_PATTERN.fullmatch(name.strip())
    if match is None:
        raise UnknownNameError(
            f"{name!r} is not a note name",
            cause="a note is a letter A to G, an optional # or b, and an octave number",
            remedy='write it like "G3", "F#4" or "Bb2"',
        )
    letter, accidental, octave = match.groups()
    shift = {"": 0, "#": 1, "♯": 1, "b": -1, "♭": -1}[accidental]
    return 12 * (int(octave) + 1) + _SEMITONE_OF_LETTER[letter.upper()] + shift


def note_name(number: int) -> str:
    """Name of semitone `number` (A4 = 69), spelled with sharps."""
    return f"{_NAMES[number % 12]}{number // 12 - 1}"


def note_to_hz(name: str, a4_hz: float = STANDARD_A4_HZ) -> float:
    """Equal-tempered frequency in Hz of a note name: f = a4 2^((m - 69) / 12)."""
    return float(a4_hz * 2.0 ** ((note_number(name) - _A4_NUMBER) / 12.0))


def nearest_note(frequency_hz: float, a4_hz: float = STANDARD_A4_HZ) -> tuple[str, float]:
    """Nearest equal-tempered note of `frequency_hz` and the deviation from it in cents, in (-50, 50]."""
    semitones = _A4_NUMBER + 12.0 * math.log2(frequency_hz / a4_hz)
    number = math.ceil(semitones - 0.5)
    return note_name(number), 100.0 * (semitones - number)


def parse_notes(text: str) -> tuple[str, ...]:
    """Note names from a list such as ``"G3 D4, A4"``, each spelled as :func:`note_name` spells it.

    Raises
    ------
    UnknownNameError
        If the list is empty or holds something that is no note name.
    """
    names = [word for word in re.split(r"[\s,;]+", text) if word]
    if not names:
        raise UnknownNameError("no note names given", remedy='write them like "G3 D4 A4"')
    return tuple(note_name(note_number(name)) for name in names)


def power_to_db(power: ArrayLike) -> NDArray[np.float64]:
    """10 log10 of a power ratio; zero gives -inf without a warning."""
    with np.errstate(divide="ignore"):
        return np.asarray(10.0 * np.log10(np.asarray(power, dtype=np.float64)))


def db_to_power(level_db: ArrayLike) -> NDArray[np.float64]:
    """Power ratio of a level in dB: 10^(L / 10)."""
    return np.asarray(10.0 ** (np.asarray(level_db, dtype=np.float64) / 10.0))
