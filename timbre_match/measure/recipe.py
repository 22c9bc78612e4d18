"""Levels, phases and their uncertainty for the harmonics of one note."""

import numpy as np
import scipy.fft
import scipy.special
from numpy.typing import NDArray

from timbre_match import units
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.cycles import Cycles, cut_cycles
from timbre_match.intake.notes import HeldNote
from timbre_match.intake.recording import Recording
from timbre_match.intake.warp import turned_back
from timbre_match.measure.blocks import Blocks, analyse_blocks
from timbre_match.measure.records import Recipe, Ringing
from timbre_match.measure.ringing import measure_ringing
from timbre_match.threads import single_threaded

__all__ = ["Recipe", "Ringing", "measure_recipe"]

_FALSE_ALARM = 1e-4
_LEAST_EXCESS = 2.0
_ACCURACY = 1e-11
"""What resampling itself leaves behind, as power re the strongest harmonic: -110 dB."""
_STEP_S = 0.02
_DECIDING = 32


@single_threaded
def measure_recipe(recording: Recording, note: HeldNote, *, a4_hz: float = units.STANDARD_A4_HZ) -> Recipe:
    """Measure the harmonics of a note; of a ringing one by :func:`timbre_match.measure.ringing.measure_ringing`.

    A held harmonic's power is the mean over the blocks of |c_k|^2 less the floor's share. Its standard error is that of
    the same estimate in white noise at the measured floor or, where the harmonic moves more than that within the note,
    that of a mean of correlated blocks (Newey & West 1987, Econometrica 55:703). A harmonic is heard where its power
    beats the floor at a false-alarm rate of 1e-4.

    Parameters
    ----------
    recording : Recording
    note : HeldNote
        Found in that recording.
    a4_hz : float
        Tuning reference for the note name, Hz.

    Returns
    -------
    Recipe

    Raises
    ------
    NoHeldNoteError
        If none of its harmonics is heard.
    """
    if note.kind == "ringing":
        return measure_ringing(recording, note, a4_hz=a4_hz)
    cycles = cut_cycles(recording, note)
    count = max(1, min(int(cycles.highest_hz / note.f0_hz), (cycles.samples.shape[1] - 1) // 2))
    # In single precision, as the cycles were read: its rounding lies 130 dB under the strongest harmonic.
    blocks = analyse_blocks(cycles.samples.astype(np.float32), count, note.f0_hz)
    floor = np.maximum(blocks.floor_power, _ACCURACY * float((np.abs(blocks.harmonics) ** 2).mean(axis=0).max()))
    raw = (np.abs(blocks.harmonics) ** 2).mean(axis=0)
    heard = raw > floor * _hearing_ratio(blocks)
    if not heard.any():
        raise NoHeldNoteError(
            f"nothing of {note.note} at {note.start_s:.2f} s stands out of the noise",
            where=recording.file,
            cause="the note is too soft against the noise around it",
            remedy="record closer to the microphone, or in a quieter room",
        )
    power = np.where(heard, np.maximum(raw - floor, 0.0), 0.0)
    total = float(power.sum())
    variance = _variance_of_shares(blocks, power, floor, heard)
    f0_hz = _mean_fundamental_hz(cycles, np.flatnonzero(heard) + 1)
    cents = units.cents_between(f0_hz, units.note_to_hz(note.note, a4_hz))
    k = np.arange(1, count + 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        level_db = np.where(heard, units.power_to_db(power / total), np.nan)
        se_db = np.where(heard, 10.0 / np.log(10.0) * np.sqrt(variance) * total / power, np.nan)
    return Recipe(
        note=note.note,
        f0_hz=f0_hz,
        cents=cents,
        start_s=note.start_s,
        end_s=note.end_s,
        cycles=len(cycles.samples),
        points_per_cycle=cycles.samples.shape[1],
        kind=note.kind,
        k=k,
        freq_hz=k * f0_hz,
        level_db=level_db,
        se_db=se_db,
        floor_db=units.power_to_db(floor / total),
        heard=heard,
        phase_rad=np.where(heard, _phases(blocks.harmonics), np.nan),
    )


def _hearing_ratio(blocks: Blocks) -> float:
    """How many times the floor a bin's mean power must reach to count as heard: an F quantile, 3 dB at the least."""
    own = 2.0 / blocks.square_gain
    return max(_LEAST_EXCESS, float(scipy.special.fdtri(own, 2.0 * blocks.floor_freedom, 1.0 - _FALSE_ALARM)))


def _variance_of_shares(
    blocks: Blocks, power: NDArray[np.float64], floor: NDArray[np.float64], heard: NDArray[np.bool_]
) -> NDArray[np.float64]:
    """Variance of each harmonic's share of the total power, shape (harmonics,)."""
    total = float(power.sum())
    share = power / total
    noise = 2.0 * power * floor * blocks.linear_gain + floor**2 * (blocks.square_gain + 1.0 / blocks.floor_freedom)
    noise = np.where(heard, noise, 0.0)
    # d share_k = (dP_k - share_k dP_total) / P_total, with independent dP.
    expected = (noise * (1.0 - 2.0 * share) + share**2 * noise.sum()) / total**2
    each = np.where(heard, np.abs(blocks.harmonics) ** 2 - floor, 0.0)
    residual = (each - share * each.sum(axis=1, keepdims=True)) / total
    observed, relative_sd = _variance_of_mean(residual)
    return np.where(observed > expected * (1.0 + 2.0 * relative_sd), observed, expected)


def _variance_of_mean(values: NDArray[np.float64]) -> tuple[NDArray[np.float64], float]:
    """Variance of the mean over rows that are correlated in time, and the relative sd of that variance.

    Bartlett weights over a quarter of the rows at most (Newey & West 1987).
    """
    rows = len(values)
    if rows < 3:
        return np.zeros(values.shape[1]), 1.0
    lags = max(1, min(rows // 4, round(1.5 * rows ** (1.0 / 3.0))))
    centred = values - values.mean(axis=0)
    long_run = (centred**2).sum(axis=0)
    for lag in range(1, lags + 1):
        long_run += 2.0 * (1.0 - lag / (lags + 1)) * (centred[lag:] * centred[:-lag]).sum(axis=0)
    variance = np.maximum(long_run, 0.0) / rows / max(1, rows - 1)
    return variance, float(np.sqrt(4.0 / 3.0 * (lags + 1) / rows))


def _mean_fundamental_hz(cycles: Cycles, heard: NDArray[np.int64]) -> float:
    """Fundamental in Hz: the least-squares slope of its phase over the held note.

    The phase is that of the clock plus what the harmonics still turn by on it, each weighted by its power times k^2 as
    in the Cramer-Rao bound of harmonics in white noise (Nielsen, Jensen & Christensen 2017, Signal Processing 135:188).
    """
    count = len(cycles.samples)
    mean_period_s = (cycles.start_s[-1] - cycles.start_s[0]) / (count - 1)
    per_step = max(1, min(count // 8, round(_STEP_S / mean_period_s)))
    steps = count // per_step
    summed = cycles.samples[: steps * per_step].reshape(steps, per_step, -1).sum(axis=1)
    each = scipy.fft.rfft(summed, axis=1)[:, heard]
    turn = _agreed_turn(each, heard)
    # A coefficient speaks for its whole cycle: its mean phase belongs to the middle of that cycle.
    ends_s = np.append(cycles.start_s[1:], 2.0 * cycles.start_s[-1] - cycles.start_s[-2])
    middle_s = 0.5 * (cycles.start_s + ends_s)
    centre_s = middle_s[: steps * per_step].reshape(steps, per_step).mean(axis=1)
    phase = (np.arange(steps) + 0.5) * per_step + turn / (2.0 * np.pi)
    centre_s = centre_s - centre_s.mean()
    return float(centre_s @ phase / (centre_s @ centre_s))


def _agreed_turn(each: NDArray[np.complex128], order: NDArray[np.int64]) -> NDArray[np.float64]:
    """Phase in radians of the fundamental in each row, shape (rows,), agreed on by the harmonics `order` (columns)."""
    # The few dozen that know most decide; the others would only cost time.
    best = np.argsort((np.abs(each) ** 2).sum(axis=0) * order**2)[-_DECIDING:]
    each, order = each[:, best], order[best]
    turn, turned = np.zeros(len(each)), each
    for number in range(3):
        if number:
            turned = each * np.exp(-1j * np.outer(turn, order))
        reference = turned.sum(axis=0)
        off = np.angle(turned * reference.conj())
        weight = np.abs(reference) ** 2 * order
        turn += off @ weight / float(weight @ order)
    return turn


def _phases(harmonics: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Phase of each c_k, shape (harmonics,), with time counted from where the fundamental's phase is zero."""
    k = np.arange(1, harmonics.shape[1] + 1)
    # Blocks may still turn a little against each other.
    mean = turned_back(harmonics, _agreed_turn(harmonics, k)).sum(axis=0)
    turned = np.angle(mean) - k * np.angle(mean[0])
    return np.asarray((turned + np.pi) % (2.0 * np.pi) - np.pi)
