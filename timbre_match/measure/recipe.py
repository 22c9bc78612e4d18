"""Levels, phases and their uncertainty for the harmonics of one held note."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.intake.notes import NoteKind


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Recipe:
    """The harmonics of one held note.

    All arrays have shape (n_harmonics,) and are read-only; harmonic k stands at index k - 1.

    Attributes
    ----------
    note : str
        Nearest equal-tempered note, e.g. ``"A4"``.
    f0_hz, cents : float
        Fundamental in Hz (mean over the held note) and its deviation from `note` in cents.
    start_s, end_s : float
        The measured stretch of the recording, seconds.
    cycles, points_per_cycle : int
        Number of whole cycles measured, and points N per cycle after resampling.
    kind : {"held", "ringing"}
    k : int64 array
        Harmonic numbers 1, 2, ...
    freq_hz : float64 array
        k times the fundamental, Hz.
    level_db : float64 array
        10 log10 of the harmonic's share of the note's total harmonic power; NaN where not heard.
    se_db : float64 array
        Standard error of `level_db` within this held note, dB; NaN where not heard.
    floor_db : float64 array
        Level of the noise that falls into the harmonic's own analysis band, on the scale of `level_db`.
    heard : bool array
        Whether the harmonic stands out of its floor.
    phase_rad : float64 array
        Phase of c_k relative to a time origin that makes the fundamental's phase zero; NaN where not heard.
    """

    note: str
    f0_hz: float
    cents: float
    start_s: float
    end_s: float
    cycles: int
    points_per_cycle: int
    kind: NoteKind
    k: NDArray[np.int64]
    freq_hz: NDArray[np.float64]
    level_db: NDArray[np.float64]
    se_db: NDArray[np.float64]
    floor_db: NDArray[np.float64]
    heard: NDArray[np.bool_]
    phase_rad: NDArray[np.float64]

    def __post_init__(self) -> None:
        for name, kind in _ARRAYS.items():
            array: NDArray[np.generic] = np.array(getattr(self, name), dtype=kind)
            if array.shape != np.shape(self.k):
                raise ValueError(f"{name} has shape {array.shape}, but k has shape {np.shape(self.k)}")
            array.setflags(write=False)
            object.__setattr__(self, name, array)


_ARRAYS: dict[str, type] = {
    "k": np.int64,
    "freq_hz": np.float64,
    "level_db": np.float64,
    "se_db": np.float64,
    "floor_db": np.float64,
    "heard": np.bool_,
    "phase_rad": np.float64,
}
