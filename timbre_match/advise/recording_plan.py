"""Which notes to play for a session, and how: common practice, no source, where none is named.

Takes are counted as the README's figures suggest: with three, an overtone that differs by what makers work for can be
told from the player's hand.
"""

from dataclasses import dataclass
from typing import Final

from timbre_match.advise.workshop import COMMON_PRACTICE, workshop_family
from timbre_match.errors import UnknownNameError
from timbre_match.intake.families import kind_of_family

TAKES: Final = 3

_NOTES: Final = {
    "violin": "G3 A3 B3 D4 E4 F#4 A4 B4 C#5 E5 F#5 A5",
    "viola": "C3 D3 E3 G3 A3 B3 D4 E4 F#4 A4 B4 D5",
    "cello": "C2 D2 E2 G2 A2 B2 D3 E3 F#3 A3 B3 D4",
    "classical guitar": "E2 G2 A2 C3 D3 F3 G3 A3 B3 D4 E4 A4",
    "steel-string guitar": "E2 G2 A2 C3 D3 F3 G3 A3 B3 D4 E4 A4",
    "mandolin": "G3 A3 C4 D4 E4 G4 A4 B4 D5 E5 G5 A5",
    "harp": "C2 G2 C3 E3 G3 C4 E4 G4 C5 E5 G5 C6",
    "piano": "A1 E2 A2 C3 E3 A3 C4 E4 A4 C5 E5 A5",
    "clarinet": "D3 F3 G3 A#3 C4 D4 F4 G4 A4 C5 D5 F5",
    "flute": "C4 D4 E4 G4 A4 C5 D5 E5 G5 A5 C6 E6",
    "oboe": "C4 D4 E4 F4 G4 A4 C5 D5 E5 G5 A5 C6",
    "trumpet": "F3 A#3 C4 D4 F4 G4 A#4 C5 D5 F5 G5 A#5",
}
"""Twelve notes as they sound, not as written for transposing instruments; open strings or low notes among them."""

_TRANSPOSING: Final = frozenset({"clarinet", "trumpet"})
_BOWED: Final = frozenset({"violin", "viola", "cello"})


@dataclass(frozen=True, kw_only=True, slots=True)
class RecordingPlan:
    """What to play for a session.

    Attributes
    ----------
    family : str
        The family as it was found; empty for general advice.
    notes : tuple of str
        Notes to play in each take, lowest first; empty where the family has no list of its own.
    takes : int
        How many runs through them.
    points : tuple of str
        How to play and record them, each a plain sentence.
    basis : str
        Where the advice comes from.
    """

    family: str
    notes: tuple[str, ...]
    takes: int
    points: tuple[str, ...]
    basis: str = COMMON_PRACTICE


def recording_plan(family: str) -> RecordingPlan:
    """Say which notes of a family to play, and how; for a family without a list, how to choose them.

    Raises
    ------
    UnknownNameError
        If several families might be meant.
    """
    name = family
    try:
        name = workshop_family(family).name
    except UnknownNameError as error:
        if "may mean" in error.what:
            raise
    notes = tuple(_NOTES.get(name, "").split())
    return RecordingPlan(family=name, notes=notes, takes=TAKES, points=tuple(_points(name, known=bool(notes))))


def _points(family: str, *, known: bool) -> list[str]:
    points = []
    if not known:
        points.append(
            "Choose eight notes or more, spread over the whole range, the open strings or lowest notes among them; "
            "play the same ones in every session."
        )
    if family in _TRANSPOSING:
        points.append("The notes are named as they sound, not as they are written for the player.")
    if family in _BOWED:
        points.append("The open strings are among them; stop the others in low positions, always on the same string.")
    if kind_of_family(family) == "ringing":
        points.append(
            "Pluck or strike each note at the same place and with the same strength, and let it ring until it can no "
            "longer be heard; damp the other strings."
        )
    else:
        points.append(
            "Hold each note for two to three seconds, steadily and without vibrato; half a second of silence between "
            "notes."
        )
    return [
        *points,
        f"Play {TAKES} takes: a take is one run through all notes, recorded in one go. Put the instrument down between "
        "takes, so that each has a hand of its own.",
        "Play everything at the same dynamic, a firm mezzo forte: a louder note has stronger upper overtones by "
        "itself.",
        "Stand the microphone where it stood last time: mark it on the floor, and measure to the instrument (0.5 to "
        "1 m). Note room, microphone and distance with the session.",
        "The same player, bow, plectrum or reed, strings and tuning as last time; note what has changed.",
        "Record a control in the same session, before or after: an instrument that does not change, the same notes, as "
        "many takes. What it seems to have changed since last time is microphone, room and player, and is taken out.",
        "Note temperature and relative humidity: wood and reeds follow the seasons.",
        "WAV or FLAC at 44.1 or 48 kHz, peaks below full scale; no effects, no automatic level.",
    ]
