"""Held notes: where in a recording a note is steady, and how steady."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

NoteKind = Literal["held", "ringing"]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class HeldNote:
    """A stretch of a recording in which one note is held or rings.

    Attributes
    ----------
    note : str
        Nearest equal-tempered note, e.g. ``"A4"``.
    f0_hz, cents : float
        Mean fundamental in Hz and its deviation from `note` in cents.
    start_s, end_s : float
        The steady stretch, seconds from the start of the recording.
    cycles : int
        Whole cycles of the fundamental between `start_s` and `end_s`.
    kind : {"held", "ringing"}
    track_s, track_hz : float64 arrays, shape (n,)
        The fundamental over time: times in seconds and frequencies in Hz; read-only.
    """

    note: str
    f0_hz: float
    cents: float
    start_s: float
    end_s: float
    cycles: int
    kind: NoteKind
    track_s: NDArray[np.float64]
    track_hz: NDArray[np.float64]
