"""Whether the harmonics of a note are locked to each other, as a bow or a reed locks them, or ring free.

A driven note is periodic, whatever its level does: the phases of its harmonics keep step (Fletcher 1978, J. Acoust.
Soc. Am. 64:1566, on mode locking in wind and bowed instruments). The partials of a string left to itself lie where
stiffness and the body put them, some tenths of a cent to several cents off the multiples of one fundamental.
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from timbre_match.intake.spectrum import BandLimited, points_per_cycle
from timbre_match.intake.warp import Clock

_STEP_S = 0.04
_HARMONICS = 16
_FEWEST_STEPS = 5
_RANGE_DB = 30.0
_STEADY = 0.9
"""Harmonics whose phase turns evenly, to this share of what perfect evenness would give, tell their frequency."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Spread:
    """How far harmonics lie off the multiples of one fundamental: rms in cents, and how many of them tell."""

    cents: float
    harmonics: int


def spread_of_harmonics(signal: BandLimited, clock: Clock) -> Spread:
    """Frequencies of the stronger harmonics against each other, from how their phases turn on the note's clock.

    Parameters
    ----------
    signal : BandLimited
    clock : Clock
        Refined.
    """
    f0_hz = float(np.median(clock.f0_hz))
    points = points_per_cycle(f0_hz, signal.highest_hz)
    instants = clock.instants_s(points)
    per_step = max(1, round(_STEP_S * f0_hz))
    steps = len(instants) // per_step
    if steps < _FEWEST_STEPS:
        return Spread(cents=0.0, harmonics=0)
    cycles = signal.at(instants[: steps * per_step]).reshape(steps, per_step, points).sum(axis=1)
    each = scipy.fft.rfft(cycles, axis=1)[:, 1 : _HARMONICS + 1]
    turn = each[1:] * each[:-1].conj()
    total = turn.sum(axis=0)
    power = (np.abs(each) ** 2).sum(axis=0)
    tells = (power > power.max() * 10.0 ** (-_RANGE_DB / 10.0)) & (np.abs(total) > _STEADY * np.abs(turn).sum(axis=0))
    k = np.arange(1, len(power) + 1)
    step_s = float(instants[per_step * (steps - 1), 0] - instants[0, 0]) / (steps - 1)
    cents = 1200.0 / np.log(2.0) * np.angle(total) / (2.0 * np.pi * step_s * k * f0_hz)
    return Spread(cents=_rms_about_median(cents[tells]), harmonics=int(tells.sum()))


def _rms_about_median(values: NDArray[np.float64]) -> float:
    return float(np.sqrt(np.mean((values - np.median(values)) ** 2))) if len(values) else 0.0
