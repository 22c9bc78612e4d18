"""The sound of the plucked instrument: its ringing strings, the attack, and a take as it is recorded."""

import numpy as np
from numpy.typing import NDArray

from timbre_match.demo.body import Body
from timbre_match.demo.draws import Draws
from timbre_match.demo.plucked_body import small_guitar_body
from timbre_match.demo.plucked_workshop import PLUCKED_STAGES, PluckedStage, Vibrations, plucks_of_take, vibrations
from timbre_match.demo.room import SAMPLE_RATE_HZ, heard_in_room, microphone_noise, quantise, workshop_room

_SEED = 2
_NOISE_KEY = 1
_MICROPHONE_GAIN_DB = -21.0
_LEAD_S = 0.5
_TAIL_S = 0.5
_PAUSE_S = (0.2, 0.3)
_RELEASE_S = 0.002
"""The string leaves the fingertip within this time."""
_DAMPING_S = 0.06
_ATTACK_LENGTH_S = 0.6
_KNOCK_S = 0.0015
_KNOCK = 0.02
_SCRAPE_S = 0.006
_SCRAPE = 0.004


def ringing_string(moved: Vibrations, length_s: float, sample_rate_hz: int = SAMPLE_RATE_HZ) -> NDArray[np.float64]:
    """Sum of Re{c exp(s t)} over the vibrations; shape (n,)."""
    time_s = np.arange(round(length_s * sample_rate_hz)) / sample_rate_hz
    total = np.zeros(len(time_s))
    # vibrations in pieces: what is still to come is a piece's first values turned and shrunk by one number
    piece = 4096
    for s, c in zip(moved.s.ravel(), moved.c.ravel(), strict=True):
        if c != 0.0:
            wave = c * np.exp(s * time_s[:piece])
            for first in range(0, len(time_s), piece):
                part = total[first : first + piece]
                part += (wave[: len(part)] * np.exp(s * time_s[first])).real
    return total


def attack(body: Body, draws: Draws, sample_rate_hz: int = SAMPLE_RATE_HZ) -> NDArray[np.float64]:
    """Noise of the pluck and knock on the body: a push and a scrape at the bridge, through the body; shape (n,)."""
    length = round(_ATTACK_LENGTH_S * sample_rate_hz)
    time_s = np.arange(length) / sample_rate_hz
    push = _KNOCK * np.sin(np.pi * np.clip(time_s / _KNOCK_S, 0.0, 1.0)) ** 2
    scrape = _SCRAPE * draws.normal(length) * np.exp(-time_s / _SCRAPE_S)
    # twice the length, so that what rings on does not come round to the beginning
    spectrum = np.fft.rfft(push + scrape, 2 * length)
    freq_hz = np.fft.rfftfreq(2 * length, 1.0 / sample_rate_hz)
    spectrum[1:] *= body.response(freq_hz[1:])
    spectrum[0] = 0.0
    return np.asarray(np.fft.irfft(spectrum)[:length])


def render_plucked_take(stage: PluckedStage, take: int) -> NDArray[np.int16]:
    """Render take 1, 2, ... of a stage at `SAMPLE_RATE_HZ`, 16 bits; the same at each call; shape (n,)."""
    draws = Draws(_SEED, _NOISE_KEY, PLUCKED_STAGES.index(stage), take)
    body = small_guitar_body().radiation
    pieces = [np.zeros(round(_LEAD_S * SAMPLE_RATE_HZ))]
    for pluck in plucks_of_take(stage, take):
        note = ringing_string(vibrations(stage, pluck), pluck.length_s)
        since_s = np.arange(len(note)) / SAMPLE_RATE_HZ
        note *= np.sin(0.5 * np.pi * np.clip(since_s / _RELEASE_S, 0.0, 1.0)) ** 2
        knock = attack(body, draws)
        note[: len(knock)] += 10.0 ** (pluck.level_db / 20.0) * knock
        note *= np.sin(0.5 * np.pi * np.clip((pluck.length_s - since_s) / _DAMPING_S, 0.0, 1.0)) ** 2
        pieces += [note, np.zeros(round(draws.between(*_PAUSE_S) * SAMPLE_RATE_HZ))]
    pieces.append(np.zeros(round(_TAIL_S * SAMPLE_RATE_HZ)))
    sound = 10.0 ** (_MICROPHONE_GAIN_DB / 20.0) * heard_in_room(np.concatenate(pieces), workshop_room())
    sound += microphone_noise(len(sound), SAMPLE_RATE_HZ, draws)
    return quantise(sound, draws)
