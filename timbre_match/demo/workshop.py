"""The invented workshop: its instruments, their build stages, and the truth about them.

Two violins stand on the bench. The Heron is the fine one that came in for care; the Wren is new, and is meant to
sound like it. The Wren was recorded in the white and again when it was varnished. Names, instruments and recordings
are invented. The small guitar beside them has a page of its own, :mod:`timbre_match.demo.plucked_workshop`.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.demo.body import Body, Change, violin_body
from timbre_match.demo.bowed_string import VIOLIN_STRINGS, BowedString

FAMILY = "violin"
TAKES = 3
"""Takes at each stage."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Stage:
    """An instrument in one state of its build.

    Attributes
    ----------
    instrument, name : str
        The instrument and the maker's name for the stage.
    file_stem : str
        What the files of its takes are called.
    changes : tuple of Change
        How its body differs from the Heron's: the truth that a comparison should find.
    """

    instrument: str
    name: str
    file_stem: str
    changes: tuple[Change, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class WrittenNote:
    """A note that the player is asked for.

    Attributes
    ----------
    note : str
    string : BowedString
        The string that it is played on.
    intonation_cents : float
        How far off equal temperament this player's hand puts it, every time.
    vibrato : bool
    """

    note: str
    string: BowedString
    intonation_cents: float
    vibrato: bool = False


HERON = Stage(instrument="Heron", name="as it came in", file_stem="heron", changes=())

WREN_IN_THE_WHITE = Stage(
    instrument="Wren",
    name="in the white",
    file_stem="wren_in_the_white",
    changes=(
        Change(low_hz=580.0, high_hz=820.0, gain_db=-5.0),
        Change(low_hz=2000.0, high_hz=3000.0, gain_db=4.0),
    ),
)

WREN_VARNISHED = Stage(
    instrument="Wren",
    name="varnished",
    file_stem="wren_varnished",
    changes=(
        Change(low_hz=580.0, high_hz=820.0, gain_db=-1.5),
        Change(low_hz=2000.0, high_hz=3000.0, gain_db=4.0),
        # up to the end of hearing and beyond: the varnish damps everything above
        Change(low_hz=4000.0, high_hz=24000.0, gain_db=-4.0),
    ),
)

STAGES = (HERON, WREN_IN_THE_WHITE, WREN_VARNISHED)
"""The target first, then the stages of the new instrument in the order of the build."""

_G, _D, _A, _E = VIOLIN_STRINGS

NOTES = (
    WrittenNote(note="G3", string=_G, intonation_cents=-3.5),
    WrittenNote(note="A3", string=_G, intonation_cents=1.0),
    WrittenNote(note="B3", string=_G, intonation_cents=4.0, vibrato=True),
    WrittenNote(note="C4", string=_G, intonation_cents=-2.0),
    WrittenNote(note="D4", string=_D, intonation_cents=-2.0),
    WrittenNote(note="E4", string=_D, intonation_cents=3.0),
    WrittenNote(note="F4", string=_D, intonation_cents=-2.5),
    WrittenNote(note="F#4", string=_D, intonation_cents=5.0, vibrato=True),
    WrittenNote(note="G4", string=_D, intonation_cents=-1.0),
    WrittenNote(note="A4", string=_A, intonation_cents=0.0),
    WrittenNote(note="B4", string=_A, intonation_cents=2.5, vibrato=True),
    WrittenNote(note="C#5", string=_A, intonation_cents=4.5),
    WrittenNote(note="D5", string=_A, intonation_cents=-1.5),
    WrittenNote(note="E5", string=_E, intonation_cents=2.0),
)
"""What is played in every take, in this order."""


def file_name(stage: Stage, take: int) -> str:
    """File name of take 1, 2, ... of a stage."""
    return f"{stage.file_stem}_take_{take}.flac"


def body_of(stage: Stage) -> Body:
    """Body of the instrument at this stage: the Heron's, with the stage's changes."""
    return violin_body().with_changes(stage.changes)


def true_difference_db(stage: Stage, freq_hz: ArrayLike) -> NDArray[np.float64]:
    """Level that the instrument radiates at this stage minus the Heron's, dB, at each frequency; shape of `freq_hz`."""
    freq = np.asarray(freq_hz, dtype=np.float64)
    return np.asarray(sum((change.difference_db(freq) for change in stage.changes), np.zeros(freq.shape)))


__all__ = [
    "HERON",
    "NOTES",
    "STAGES",
    "TAKES",
    "WREN_IN_THE_WHITE",
    "WREN_VARNISHED",
    "Stage",
    "WrittenNote",
    "body_of",
    "file_name",
    "true_difference_db",
]
