"""When a plucked or struck note begins."""

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from timbre_match.intake.notes import HeldNote

ONSET_SE_S = 0.00014
"""How well the onset of a sudden note is known: it is read to half a millisecond (uniform: 0.5 ms / sqrt(12))."""
_FRAME_S = 0.0005
_SMOOTH = 2
_BEFORE_S, _AFTER_S = 0.25, 0.05
_UNDER_DB = 20.0
_RISE_DB = 6.0
_QUIET_S = 0.004


def onset_of(samples: NDArray[np.float64], sample_rate_hz: float, note: HeldNote) -> float:
    """The onset of a ringing note, seconds from the start of the recording.

    Going back from the loudest moment of the attack (power over 1 ms), the last time before which the sound stays for
    4 ms more than 20 dB under that moment. Where an earlier note still sounds that loud, 6 dB above its level counts
    instead.

    Parameters
    ----------
    samples : array, shape (n,)
    sample_rate_hz : float
    note : HeldNote
        Its start is the end of its attack.
    """
    hop = max(1, round(_FRAME_S * sample_rate_hz))
    first = max(0, round((note.start_s - _BEFORE_S) * sample_rate_hz))
    last = min(len(samples), round((note.start_s + _AFTER_S) * sample_rate_hz))
    count = (last - first) // hop
    if count < 4:
        return note.start_s
    power = np.square(samples[first : first + count * hop]).reshape(count, hop).mean(axis=1)
    level_db = 10.0 * np.log10(scipy.ndimage.uniform_filter1d(power, _SMOOTH, mode="nearest") + 1e-20)
    peak = int(level_db.argmax())
    before_db = float(np.percentile(level_db[: peak + 1], 10)) + _RISE_DB
    threshold_db = max(level_db[peak] - _UNDER_DB, min(before_db, level_db[peak] - _RISE_DB))
    quiet = max(1, round(_QUIET_S * sample_rate_hz / hop))
    loud = level_db[: peak + 1] >= threshold_db
    # The start of the last run of loud frames that no long enough silence breaks.
    place = np.flatnonzero(loud)
    gaps = np.flatnonzero(np.diff(place) > quiet)
    start = int(place[gaps[-1] + 1]) if len(gaps) else int(place[0])
    return (first + start * hop) / sample_rate_hz
