"""The held note resampled to whole cycles of N points each."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.intake.notes import HeldNote
from timbre_match.intake.recording import Recording
from timbre_match.intake.spectrum import BandLimited, points_per_cycle
from timbre_match.intake.warp import Clock


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Cycles:
    """Whole cycles of a held note.

    Attributes
    ----------
    samples : float64 array, shape (cycles, points)
        One period a row, `points` values at equal steps of the fundamental's phase; full scale is 1; read-only.
    start_s : float64 array, shape (cycles,)
        When each cycle begins, seconds from the start of the recording; read-only.
    highest_hz : float
        Up to where harmonics can be measured: the Nyquist frequency, or a codec's low-pass.
    """

    samples: NDArray[np.float64]
    start_s: NDArray[np.float64]
    highest_hz: float

    def __post_init__(self) -> None:
        for name in ("samples", "start_s"):
            array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)


def cut_cycles(recording: Recording, note: HeldNote) -> Cycles:
    """Resample a held note, band-limited, to whole cycles of equally many points.

    Parameters
    ----------
    recording : Recording
    note : HeldNote
        Found in that recording.

    Returns
    -------
    Cycles
        As many whole cycles as fit between `note.start_s` and `note.end_s`.
    """
    rate = recording.sample_rate_hz
    edge_hz = rate / 2 if recording.low_pass_hz is None else min(rate / 2, recording.low_pass_hz)
    signal = BandLimited(recording.spectrum, edge_hz, between_s=(note.start_s, note.end_s))
    clock = Clock(note.track_s, note.track_hz)
    instants = clock.instants_s(points_per_cycle(float(note.track_hz.min()), edge_hz))
    # The Nyquist frequency needs room for vibrato; at the edge of a codec's band the level falls before it is gone.
    highest_hz = 0.98 * rate / 2 * note.f0_hz / max(note.f0_hz, float(note.track_hz.max()))
    if recording.low_pass_hz is not None:
        highest_hz = min(highest_hz, 0.97 * recording.low_pass_hz)
    samples = signal.at(instants).astype(np.float64)
    return Cycles(samples=samples, start_s=instants[:, 0], highest_hz=highest_hz)
