"""A note on its own clock: samples taken at equal steps of the fundamental's phase instead of time.

On that clock a note with vibrato and drift becomes strictly periodic, N points to every cycle (time warping by the
phase of the fundamental). The phase comes from the pitch track first and is then refined with the note's own harmonics.
"""

from functools import cached_property

import numpy as np
import scipy.fft
import scipy.ndimage
import scipy.signal
import scipy.special
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline, PchipInterpolator, PPoly

from timbre_match.intake.spectrum import BandLimited, points_per_cycle

_STEP_S = 0.01
_SMOOTH_STEPS = 19
_SMOOTH_S = 0.07
_FEWEST_FOR_RIGID = 12
_LOW_FIRST = (4, 16)
_MOST_HARMONICS = 40


class Clock:
    """The time of every phase of a note.

    Parameters
    ----------
    time_s, f0_hz : arrays, shape (n,)
        The fundamental in Hz at increasing times in seconds, n >= 2.
    """

    def __init__(self, time_s: NDArray[np.float64], f0_hz: NDArray[np.float64]) -> None:
        self.time_s = time_s
        self.f0_hz = f0_hz

    @cached_property
    def _curves(self) -> tuple[PPoly, PPoly, NDArray[np.float64]]:
        """The fundamental over time, the phase over time, and the phase at `time_s`."""
        interpolators = (CubicSpline, PchipInterpolator) if len(self.time_s) > 3 else (PchipInterpolator,)
        for interpolator in interpolators:
            f0_of_time = interpolator(self.time_s, self.f0_hz)
            # Integrated from the first time on, so that the phase is zero there.
            phase_of_time = f0_of_time.antiderivative()
            phase = np.asarray(phase_of_time(self.time_s))
            # The monotone interpolation where a cubic would swing through zero between far values.
            if np.all(np.diff(phase) > 0.0):
                break
        return f0_of_time, phase_of_time, phase

    @property
    def cycles(self) -> int:
        """Number of whole cycles between the first and the last time."""
        return int(self.turns + 1e-9)

    @property
    def turns(self) -> float:
        """Cycles, whole and broken, between the first and the last time."""
        return float(self._curves[2][-1])

    def instants_s(self, points: int) -> NDArray[np.float64]:
        """Times in seconds of `points` equal steps of every whole cycle, shape (cycles, points)."""
        count = self.cycles
        f0_of_time, phase_of_time, known = self._curves
        # Straight lines between instants a millisecond apart are right to a tenth of a microsecond.
        each = max(1, int(points * float(self.f0_hz.min()) / 1000.0))
        while points % each:
            each -= 1
        knots = points // each
        phase = np.arange(count * knots + 1) / knots
        coarse = np.interp(phase, known, self.time_s)
        # The track is nearly straight from one of its values to the next: one step of Newton's method makes it exact.
        coarse -= (phase_of_time(coarse) - phase) / f0_of_time(coarse)
        fine = np.outer(np.diff(coarse), np.arange(each) / each)
        fine += coarse[:-1, None]
        return fine.reshape(count, points)

    def phase_at(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Phase in cycles since the first time, at any times in seconds between the first and the last."""
        return np.asarray(self._curves[1](time_s))

    def corrected(self, time_s: NDArray[np.float64], relative: NDArray[np.float64]) -> "Clock":
        """The clock with its fundamental raised by the fraction `relative`, given at `time_s` (shape (m,)).

        Before the first and after the last of these times the fundamental stays as it is there.
        """
        f0_hz = self.f0_hz * (1.0 + np.interp(self.time_s, time_s, relative))
        return Clock(self.time_s, np.interp(np.clip(self.time_s, time_s[0], time_s[-1]), self.time_s, f0_hz))


def refine_clock(signal: BandLimited, clock: Clock, *, roughly: bool = False) -> Clock:
    """Refine a clock with the phases of the note's own harmonics.

    In each round the note is read on its clock; what the phase of harmonic k still turns by from one stretch of
    about 10 ms to the next is k times the clock's error, so the error is the least-squares slope over all harmonics,
    each weighted by its power times k^2 (its Fisher information; Nielsen, Jensen & Christensen 2017,
    Signal Processing 135:188).

    Parameters
    ----------
    signal : BandLimited
    clock : Clock
        Right to within a few per cent.
    roughly : bool
        One round only: right to about 1e-4, enough to tell lines from gaps.

    Returns
    -------
    Clock
        Over the same stretch of time.
    """
    clock = _without_jitter(clock)
    f0_hz = float(np.median(clock.f0_hz))
    points = points_per_cycle(f0_hz, signal.highest_hz)
    usual = max(1, round(_STEP_S * f0_hz))
    rigid = None
    # The first steps are short: over 8 cycles even an error of 6 per cent cannot wrap.
    for number, per_step in enumerate((min(usual, 8), usual, usual, usual)):
        # In steps of one or two cycles the harmonics of a clock that is off leak into each other: a steady note, which
        # can be known best, then takes two rounds more.
        if number >= (1 if roughly else 2) and (roughly or rigid is None or usual > 2):
            break
        instants = clock.instants_s(points)
        steps = len(instants) // per_step
        if steps < 4:
            return clock
        cycles = signal.at(instants[: steps * per_step]).reshape(steps, per_step, points).sum(axis=1)
        coefficients = scipy.fft.rfft(cycles, axis=1)[:, 1 : _MOST_HARMONICS + 1]
        starts = np.arange(steps) * per_step
        ends = np.minimum(starts + per_step, len(instants) - 1)
        centre_s = 0.5 * (instants[starts, 0] + instants[ends, 0])
        turn = _common_turn(coefficients) / (2.0 * np.pi)
        rigid = _rigid_clock(clock, centre_s, turn)
        if rigid is not None:
            clock = rigid
        else:
            smooth = _smoothed(turn, round(_SMOOTH_S * f0_hz / per_step) // 2 * 2 + 1)
            clock = clock.corrected(0.5 * (centre_s[1:] + centre_s[:-1]), smooth / per_step)
    return clock


def _rigid_clock(clock: Clock, centre_s: NDArray[np.float64], turn: NDArray[np.float64]) -> Clock | None:
    """The clock of a perfectly steady or evenly drifting note, where nothing speaks against it; else None.

    A cubic is fitted to the measured phase. What it leaves is white where it is noise, and hangs together from one
    step to the next where it is vibrato or unsteadiness.
    """
    if len(centre_s) < _FEWEST_FOR_RIGID:
        return None
    middle_s = 0.5 * (clock.time_s[0] + clock.time_s[-1])
    phase = clock.phase_at(centre_s) + np.concatenate([[0.0], np.cumsum(turn)])
    fit = np.polynomial.Polynomial.fit(centre_s - middle_s, phase, 3)
    rest = phase - fit(centre_s - middle_s)
    if _hangs_together(rest):
        return None
    return Clock(clock.time_s, np.asarray(fit.deriv()(clock.time_s - middle_s)))


def _hangs_together(rest: NDArray[np.float64]) -> bool:
    """Whether a series is anything but white noise (Ljung & Box 1978, Biometrika 65:297, at a level of 1e-4)."""
    count = len(rest)
    lags = np.arange(1, min(10, count // 3) + 1)
    power = float(rest @ rest) + 1e-300
    correlation = np.array([float(rest[lag:] @ rest[:-lag]) / power for lag in lags])
    statistic = count * (count + 2.0) * float(np.sum(correlation**2 / (count - lags)))
    return statistic > float(scipy.special.chdtri(len(lags), 1e-4))


def _without_jitter(clock: Clock) -> Clock:
    """The clock every 10 ms, smoothed over what a frame-by-frame track cannot know.

    The vibrato that this takes away too comes back with the refinement; jitter faster than that would stay.
    """
    count = max(4, int((clock.time_s[-1] - clock.time_s[0]) / _STEP_S) + 1)
    time_s = np.linspace(clock.time_s[0], clock.time_s[-1], count)
    width = min(_SMOOTH_STEPS, count // 2 * 2 - 1)
    weight = scipy.signal.get_window("hann", width + 2, fftbins=False)[1:-1]
    raw = np.interp(time_s, clock.time_s, clock.f0_hz)
    return Clock(time_s, scipy.ndimage.convolve1d(raw, weight / weight.sum(), mode="nearest"))


def _common_turn(coefficients: NDArray[np.complexfloating]) -> NDArray[np.float64]:
    """Phase in radians by which the fundamental turns from each row of harmonics to the next, shape (rows - 1,)."""
    step = coefficients[1:] * coefficients[:-1].conj()
    k = np.arange(1, step.shape[1] + 1)
    turn = np.zeros(len(step))
    knows = k**2 * np.abs(step)
    # Low harmonics first: theirs cannot wrap while the clock is still far off.
    for highest in _LOW_FIRST:
        told = np.angle(turned_back(step[:, :highest], turn)) / k[:highest]
        weight = knows[:, :highest]
        turn += np.einsum("ij,ij->i", weight, told) / (weight.sum(axis=1) + 1e-300)
    if step.shape[1] > _LOW_FIRST[-1]:
        # What is left is small: the sine will do, which the score of a phase in white noise has in its place.
        turn += turned_back(step, turn).imag @ k / (knows.sum(axis=1) + 1e-300)
    return turn


def turned_back(harmonics: NDArray[np.complexfloating], turn: NDArray[np.float64]) -> NDArray[np.complexfloating]:
    """Harmonics 1, 2, ... (columns), each row turned back by the fundamental's `turn` in radians, shape (rows,)."""
    # Powers of one phasor cost a fifth of as many phasors.
    return harmonics * np.cumprod(np.broadcast_to(np.exp(-1j * turn)[:, None], harmonics.shape), axis=1)


def _smoothed(turn: NDArray[np.float64], width: int) -> NDArray[np.float64]:
    """A series smoothed over `width` values (an odd number; under five nothing is smoothed)."""
    if not 5 <= width <= len(turn):
        return turn
    lone_removed = scipy.ndimage.median_filter(turn, 3, mode="nearest")
    return np.asarray(scipy.signal.savgol_filter(lone_removed, width, 3, mode="nearest"))
