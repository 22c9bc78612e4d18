"""The octave of a note, decided from evidence over the whole held note.

On the clock of a candidate fundamental, the spectrum of blocks of many cycles has the candidate's harmonics at whole
multiples and everything else between them. If the true fundamental is a half or a third of the candidate, lines stand
at the halves or thirds; if it is twice or three times as high, most of the candidate's own harmonics are missing. Both
questions are the same: do the lines that a lower fundamental would add stand out of the floor around them, and are they
more than a trace?
"""

import math

import numpy as np
import scipy.fft
import scipy.signal
from numpy.typing import NDArray

from timbre_match.intake.pitch import HIGHEST_HZ, LOWEST_HZ
from timbre_match.intake.spectrum import BandLimited, points_per_cycle
from timbre_match.intake.warp import Clock, refine_clock

_BLOCK = 12
"""Cycles per block: halves, thirds and quarters of the fundamental fall on whole bins."""
_HARMONICS = 10
_LONGEST_S = 1.0
# On 357 real notes of 18 instruments: at the true fundamental the lines between the harmonics hold less than -35 dB of
# the harmonics' power wherever three or more stand out; at twice the true fundamental the missing ones hold more than
# -25 dB in all but one. Lines of a register below the sounding one (overblown reeds) reach -35 dB.
# No instrument leaves two thirds of its harmonics that far down, but a string a fifth or a twelfth lower may ring.
_TRACE_DB = {2: -30.0, 3: -22.0}
_TRACE_OF_ONE_DB = -20.0
_OF_FEW_DB = -5.0
_STANDS_OUT_DB = 10.0
_CLEARLY_DB = 12.0


def settle_octave(signal: BandLimited, clock: Clock) -> Clock:
    """Move a clock to the fundamental that the evidence is for.

    Parameters
    ----------
    signal : BandLimited
    clock : Clock
        At the fundamental, or at a half, third, twice or three times of it.

    Returns
    -------
    Clock
        Refined, at the fundamental, over the times of the one given.
    """
    for _ in range(3):
        clock = refine_clock(signal, clock, roughly=True)
        factor = _better_factor(signal, clock)
        if factor == 1.0:
            return clock
        clock = Clock(clock.time_s, clock.f0_hz * factor)
    return refine_clock(signal, clock, roughly=True)


def _better_factor(signal: BandLimited, clock: Clock) -> float:
    """What to multiply the candidate by: 1, or 2, 3, 1/2, 1/3."""
    f0_hz = float(np.median(clock.f0_hz))
    spectrum, cycles = _block_spectrum(signal, clock)
    if spectrum is None:
        return 1.0
    spectrum = spectrum[: int(signal.highest_hz / f0_hz * cycles)]
    for divisor in (2, 3):
        step = cycles // divisor
        if f0_hz / divisor > LOWEST_HZ and _stands(spectrum, step, divisor):
            return 1.0 / divisor
    for multiple in (2, 3):
        if f0_hz * multiple < HIGHEST_HZ and not _stands(spectrum, cycles, multiple):
            return float(multiple)
    return 1.0


def _block_spectrum(signal: BandLimited, clock: Clock) -> tuple[NDArray[np.float64] | None, int]:
    """Mean power spectrum of Hann blocks, and cycles per block (bins per harmonic); None for too few cycles."""
    f0_hz = float(np.median(clock.f0_hz))
    points = points_per_cycle(f0_hz, signal.highest_hz)
    instants = clock.instants_s(points)
    most = max(4 * _BLOCK, int(_LONGEST_S * f0_hz))
    skip = max(0, (len(instants) - most) // 2)
    instants = instants[skip : skip + most]
    if len(instants) < _BLOCK:
        return None, 0
    cycles = _BLOCK * max(1, min(len(instants) // (4 * _BLOCK), math.ceil(0.1 * f0_hz / _BLOCK)))
    samples = signal.at(instants).ravel()
    length = cycles * points
    blocks = np.lib.stride_tricks.sliding_window_view(samples, length)[:: length // 2]
    window = scipy.signal.get_window("hann", length)
    return np.asarray((np.abs(scipy.fft.rfft(blocks * window, axis=1)) ** 2).mean(axis=0)), cycles


def _stands(spectrum: NDArray[np.float64], step: int, divisor: int) -> bool:
    """Whether the multiples of bin `step` that are no multiples of `step * divisor` hold lines of their own."""
    lines = np.arange(step, min(len(spectrum) - step, _HARMONICS * divisor * step + 1), step)
    added = lines[lines % (step * divisor) != 0]
    shared = lines[lines % (step * divisor) == 0]
    if len(added) == 0:
        return False
    # The floor around a line: bins between it and its neighbours, two or more from each (a Hann line is three wide).
    offsets = np.array([o for o in range(-step + 2, step - 1) if abs(o) >= 2])
    floor = np.median(spectrum[added[:, None] + offsets], axis=1)
    salience_db = 10.0 * np.log10(spectrum[added] / (floor + 1e-300) + 1e-300)
    excess = np.where(salience_db > 3.0, spectrum[added] - floor, 0.0).sum()
    share_db = 10.0 * math.log10(excess / float(spectrum[shared].sum() + 1e-300) + 1e-300)
    clear = int(np.sum(salience_db > _STANDS_OUT_DB))
    # One or two lines alone may be a knock or a hum: they must be strong, less so where there is room for one only.
    if clear >= 1 and share_db > (_TRACE_OF_ONE_DB if len(added) == 1 else _OF_FEW_DB):
        return True
    # The four best lines should all be clear.
    best = float(np.median(np.sort(salience_db)[-4:]))
    return share_db > _TRACE_DB[divisor] and clear >= max(2, len(added) // 5) and best > _CLEARLY_DB
