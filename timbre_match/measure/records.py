"""What is measured of one note: its recipe and, where it rings, how its partials lie and die away."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from timbre_match.intake.notes import NoteKind

DecayShape = Literal["plain", "two-stage", "beating", "unclear"]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Ringing:
    """How the partials of a ringing note lie and die away.

    All arrays have the shape of the recipe's `k` and are read-only; what does not apply to a partial is NaN.

    Attributes
    ----------
    onset_s : float
        When the note begins, seconds from the start of the recording; the recipe's levels and phases are those at this
        moment.
    f0_se_hz : float
        Standard error of the recipe's fundamental. Both are those of a string without stiffness; its first partial
        sounds at f0 sqrt(1 + B).
    inharmonicity_b, inharmonicity_se : float
        B in f_k = k f0 sqrt(1 + B k^2), 0 or more, and its standard error; the error is NaN where a single partial
        is heard, which says nothing of B.
    decay : tuple of {"plain", "two-stage", "beating", "unclear", None}
        The shape of each partial's decay; None where it is not heard.
    t60_s, t60_se_s : float64 arrays
        Time in which the partial falls by 60 dB, and its standard error, seconds: three times the time in which the
        energy that is still to come falls by 20 dB (Schroeder 1965, J. Acoust. Soc. Am. 37:409), which of a plain
        decay is the time itself.
    early_t60_s, late_t60_s, late_db : float64 arrays
        Of a two-stage decay: the times of both stages, and the level of the late one at the onset relative to the
        whole partial.
    beat_hz, beat_depth_db : float64 arrays
        Of a beating partial: the frequency of its beats, and how far the level would swing at the onset, between its
        components in step and against each other.
    """

    onset_s: float
    f0_se_hz: float
    inharmonicity_b: float
    inharmonicity_se: float
    decay: tuple[DecayShape | None, ...]
    t60_s: NDArray[np.float64]
    t60_se_s: NDArray[np.float64]
    early_t60_s: NDArray[np.float64]
    late_t60_s: NDArray[np.float64]
    late_db: NDArray[np.float64]
    beat_hz: NDArray[np.float64]
    beat_depth_db: NDArray[np.float64]

    def __post_init__(self) -> None:
        for name in RINGING_ARRAYS:
            array = np.array(getattr(self, name), dtype=np.float64)
            if array.shape != (len(self.decay),):
                raise ValueError(f"{name} has shape {array.shape}, but decay tells of {len(self.decay)} partials")
            array.setflags(write=False)
            object.__setattr__(self, name, array)


RINGING_ARRAYS = ("t60_s", "t60_se_s", "early_t60_s", "late_t60_s", "late_db", "beat_hz", "beat_depth_db")


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Recipe:
    """The harmonics of one held or ringing note.

    All arrays have shape (n_harmonics,) and are read-only; harmonic k stands at index k - 1.

    Attributes
    ----------
    note : str
        Nearest equal-tempered note, e.g. ``"A4"``.
    f0_hz, cents : float
        Fundamental in Hz (mean over the note) and its deviation from `note` in cents.
    start_s, end_s : float
        The measured stretch of the recording, seconds.
    cycles, points_per_cycle : int
        Number of whole cycles measured, and points N per cycle after resampling.
    kind : {"held", "ringing"}
    k : int64 array
        Harmonic numbers 1, 2, ...
    freq_hz : float64 array
        k times the fundamental, Hz. Of a ringing note where the partial itself lies; if it is not heard, where a stiff
        string has it.
    level_db : float64 array
        10 log10 of the harmonic's share of the note's total harmonic power, of a ringing note at its onset; NaN where
        not heard.
    se_db : float64 array
        Standard error of `level_db` within this note, dB; NaN where not heard.
    floor_db : float64 array
        Level of the noise that falls into the harmonic's own analysis band, on the scale of `level_db`.
    heard : bool array
        Whether the harmonic stands out of its floor.
    phase_rad : float64 array
        Phase of c_k relative to a time origin that makes the fundamental's phase zero; NaN where not heard.
    ringing : Ringing or None
        Of a ringing note: decay and inharmonicity.
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
    ringing: Ringing | None = None

    def __post_init__(self) -> None:
        for name, kind in _ARRAYS.items():
            array: NDArray[np.generic] = np.array(getattr(self, name), dtype=kind)
            if array.shape != np.shape(self.k):
                raise ValueError(f"{name} has shape {array.shape}, but k has shape {np.shape(self.k)}")
            array.setflags(write=False)
            object.__setattr__(self, name, array)
        if self.ringing is not None and len(self.ringing.decay) != len(self.k):
            raise ValueError(f"ringing tells of {len(self.ringing.decay)} partials, but k of {len(self.k)}")


_ARRAYS: dict[str, type] = {
    "k": np.int64,
    "freq_hz": np.float64,
    "level_db": np.float64,
    "se_db": np.float64,
    "floor_db": np.float64,
    "heard": np.bool_,
    "phase_rad": np.float64,
}
