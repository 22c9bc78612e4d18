"""The room and the microphone: what stands between the instrument and the file.

The microphone stands close to the instrument and never moves, so one response holds for every take.
"""

import numpy as np
import scipy.signal
from numpy.typing import NDArray

from timbre_match.demo.draws import Draws

SAMPLE_RATE_HZ = 44_100
"""Of every recording in the workshop."""

REVERBERATION_S = 0.25
"""Time in which the room's tail falls by 60 dB: a small furnished workshop."""

TAIL_ENERGY_DB = -16.0
"""Energy of the whole tail against the direct sound: a close microphone."""

HISS_DBFS = -84.0
"""Root-mean-square level of the microphone's own white noise, dB re full scale."""

RUMBLE_DBFS = -76.0
"""Root-mean-square level of the building's low noise, which falls by 6 dB per octave above `RUMBLE_CORNER_HZ`."""

RUMBLE_CORNER_HZ = 60.0

_PREDELAY_S = 0.004
_TAIL_LENGTH = 1.2
_WORKSHOP_KEY = (1, 100)


def room_response(sample_rate_hz: int, draws: Draws) -> NDArray[np.float64]:
    """Impulse response from instrument to microphone: the direct sound, then noise that dies away exponentially.

    Parameters
    ----------
    sample_rate_hz : int
    draws : Draws
        Two rooms from streams of the same key are the same room.

    Returns
    -------
    array, shape (n,)
        The direct sound is 1 at sample 0; the tail's energy against it is `TAIL_ENERGY_DB`, and the tail falls by
        60 dB in `REVERBERATION_S` (the definition of reverberation time, ISO 3382; from memory).
    """
    since_s = np.arange(round(_TAIL_LENGTH * REVERBERATION_S * sample_rate_hz)) / sample_rate_hz
    tail = draws.normal(len(since_s)) * 10.0 ** (-3.0 * since_s / REVERBERATION_S)
    tail *= np.sqrt(10.0 ** (TAIL_ENERGY_DB / 10.0) / np.sum(tail**2))
    response = np.concatenate([np.zeros(round(_PREDELAY_S * sample_rate_hz)), tail])
    response[0] = 1.0
    return response


def workshop_room() -> NDArray[np.float64]:
    """Impulse response, at `SAMPLE_RATE_HZ`, of the room that every recording was made in; shape (n,)."""
    return room_response(SAMPLE_RATE_HZ, Draws(*_WORKSHOP_KEY))


def heard_in_room(sound: NDArray[np.float64], response: NDArray[np.float64]) -> NDArray[np.float64]:
    """Convolve `sound`, shape (n,), with the room's `response`; the tail after the last sample is left out."""
    return np.asarray(scipy.signal.oaconvolve(sound, response)[: len(sound)])


def microphone_noise(length: int, sample_rate_hz: int, draws: Draws) -> NDArray[np.float64]:
    """Hiss and rumble of a quiet workshop, shape (length,), full scale 1."""
    hiss = 10.0 ** (HISS_DBFS / 20.0) * draws.normal(length)
    keep = np.exp(-2.0 * np.pi * RUMBLE_CORNER_HZ / sample_rate_hz)
    # a one-pole low-pass fed with white noise of variance 1 - keep^2 settles at variance 1
    rumble = scipy.signal.lfilter([np.sqrt(1.0 - keep**2)], [1.0, -keep], draws.normal(length))
    return np.asarray(hiss + 10.0 ** (RUMBLE_DBFS / 20.0) * rumble)


def quantise(sound: NDArray[np.float64], draws: Draws) -> NDArray[np.int16]:
    """Round to 16 bits with triangular dither of two steps (Lipshitz, Wannamaker & Vanderkooy 1992, JAES 40:355).

    Parameters
    ----------
    sound : array, shape (n,)
        Full scale is 1; anything beyond it is clipped.
    """
    steps = sound * 32768.0 + draws.uniform(len(sound)) - draws.uniform(len(sound))
    return np.clip(np.round(steps), -32768, 32767).astype(np.int16)
