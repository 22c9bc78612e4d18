"""What is wrong with a recording, as plain sentences, and where a codec has cut it off.

A false warning costs trust, so every finding here asks for more than one sign of its fault. What cannot be told from
the recording alone (a close microphone's proximity effect, a noisy room under a note that fills the whole file) is
not guessed at.
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.ndimage
from numpy.typing import NDArray

from timbre_match.intake.spectral_faults import find_low_pass, find_mains_hum, long_term_spectrum

LOW_LEVEL_DB = -40.0
"""Peak below which 16-bit recordings and cheap preamplifiers leave little room over their own noise."""

LEAST_SIGNAL_TO_NOISE_DB = 30.0
"""Overtones 30 dB under the whole note are common; with a floor as high as that they drown."""

HUM_WORTH_A_WARNING_DB = 60.0
LARGEST_DC_SHARE = 0.02
SLOW_DECAY_S = 1.6
LOW_PASS_WORTH_A_WARNING_HZ = 17_500.0

_HOP_S = 0.01
_QUIET_DB = -20.0
_STEADY_HOPS = 30
_HELD_HOPS = 50
_LAG_HOPS = 30
_SMOOTH_HOPS = 5
_SILENCE_DB = -130.0
_SIXTEEN_BIT_STEP = 2.0**-15


@dataclass(frozen=True, kw_only=True, slots=True)
class Faults:
    """Warnings as plain sentences, and the codec's edge in Hz where there is one."""

    warnings: tuple[str, ...]
    low_pass_hz: float | None


def find_faults(samples: NDArray[np.float64], sample_rate_hz: int) -> Faults:
    """Find what would spoil a measurement of this channel.

    Parameters
    ----------
    samples : float64 array, shape (n,)
        Finite, full scale 1, at least 50 ms and not constant.
    sample_rate_hz : int

    Returns
    -------
    Faults
    """
    levels_db = hop_levels_db(samples, sample_rate_hz)
    loud_db = float(np.percentile(levels_db, 95))
    spectrum = long_term_spectrum(samples, sample_rate_hz)
    low_pass_hz = find_low_pass(spectrum)
    lowest, highest = float(samples.min()), float(samples.max())
    found = (
        _clipping(samples, lowest, highest),
        _low_level(lowest, highest),
        _noise(samples, sample_rate_hz, levels_db, loud_db),
        _hum(samples, sample_rate_hz, levels_db, loud_db, spectrum.strongest_hz()),
        _reverberation(levels_db, loud_db),
        _low_pass(low_pass_hz),
        _dc(float(samples.mean()), lowest, highest),
    )
    return Faults(warnings=tuple(sentence for sentence in found if sentence), low_pass_hz=low_pass_hz)


def hop_levels_db(samples: NDArray[np.float64], sample_rate_hz: int) -> NDArray[np.float64]:
    """Level of each 10 ms of sound about the recording's mean, dB re full scale; silence is -400 dB.

    Returns
    -------
    float64 array, shape (floor(100 * duration),)
    """
    hop = round(_HOP_S * sample_rate_hz)
    rows = samples[: len(samples) // hop * hop].reshape(-1, hop)
    offset = samples.mean()
    power = np.einsum("ij,ij->i", rows, rows) / hop - 2.0 * offset * rows.mean(axis=1) + offset**2
    return np.asarray(10.0 * np.log10(np.maximum(power, 1e-40)))


def sounding_seconds(samples: NDArray[np.float64], sample_rate_hz: int) -> float:
    """Time in seconds for which the sound is within 30 dB of its loudest 10 ms."""
    levels_db = hop_levels_db(samples, sample_rate_hz)
    return float(_HOP_S * np.count_nonzero(levels_db > levels_db.max() - 30.0))


def _clipping(samples: NDArray[np.float64], lowest: float, highest: float) -> str:
    """Look for runs of three or more equal samples at an extreme, entered and left by a step.

    A normalised file touches its extreme once, and a slow sine in 16 bits rests there for a few samples but is then
    one step away on both sides; only a cut-off wave comes to its flat top with speed.
    """
    runs = 0
    clipped = 0
    for extreme in (highest, lowest):
        at = np.flatnonzero(samples == extreme)
        first = np.flatnonzero(np.diff(at, prepend=-2) > 1)
        lengths = np.diff(first, append=len(at))
        starts = at[first]
        inside = (lengths >= 3) & (starts > 0) & (starts + lengths < len(samples))
        starts, lengths = starts[inside], lengths[inside]
        before = np.abs(samples[starts - 1] - extreme)
        after = np.abs(samples[starts + lengths] - extreme)
        cut = np.minimum(before, after) > 4.0 * _SIXTEEN_BIT_STEP
        runs += int(np.count_nonzero(cut))
        clipped += int(lengths[cut].sum())
    if runs < 3:
        return ""
    return (
        f"Clipped: {clipped} samples in {runs} places are cut flat at the loudest level, which adds overtones that the "
        "instrument does not have. Record again with the input turned down by 6 dB or more."
    )


def _low_level(lowest: float, highest: float) -> str:
    peak_db = 20.0 * np.log10(max(highest, -lowest))
    if peak_db >= LOW_LEVEL_DB:
        return ""
    return (
        f"Very quiet: the loudest sample is {-peak_db:.0f} dB below full scale. Turn the input up, or move the "
        "microphone closer, until the loudest notes reach about -12 dB."
    )


def _noise(samples: NDArray[np.float64], rate: int, levels_db: NDArray[np.float64], loud_db: float) -> str:
    noise_db = _noise_level_db(samples, rate, levels_db, loud_db)
    if noise_db is None or loud_db - noise_db >= LEAST_SIGNAL_TO_NOISE_DB:
        return ""
    return (
        f"Noisy: the background is only {loud_db - noise_db:.0f} dB below the notes, so weak overtones drown in it. "
        "Look for fans, traffic or a hot preamplifier, and bring the microphone closer."
    )


def _noise_level_db(
    samples: NDArray[np.float64], rate: int, levels_db: NDArray[np.float64], loud_db: float
) -> float | None:
    """Level of the background where nothing is played, or None where the recording has no such place.

    Of the stretches of 0.3 s that are steady (both halves alike, so no decay and no fade) the quietest is taken. Its
    level is that of the floor between spectral lines, so that a softly held note is not taken for noise: the median
    of an exponential distribution is ln 2 of its mean.
    """
    half = _STEADY_HOPS // 2
    if len(levels_db) < 4 * half:
        return None
    means = np.lib.stride_tricks.sliding_window_view(10.0 ** (levels_db / 10.0), half).mean(axis=1)
    means_db = 10.0 * np.log10(np.maximum(means, 1e-40))
    first, second = means_db[:-half], means_db[half:]
    not_silent = np.lib.stride_tricks.sliding_window_view(levels_db, 2 * half).min(axis=1) > _SILENCE_DB
    steady = (np.abs(first - second) < 2.0) & (np.maximum(first, second) < loud_db - 12.0) & not_silent
    if not steady.any():
        return None
    at = int(np.argmin(np.where(steady, first + second, np.inf)))
    # Where other places are clearly quieter, this was a soft note or a swell, and not the background.
    if second[at] > np.percentile(means_db, 2) + 6.0:
        return None
    hop = round(_HOP_S * rate)
    piece = samples[at * hop : (at + 2 * half) * hop]
    window = np.hanning(len(piece))
    spectrum = np.abs(scipy.fft.rfft((piece - piece.mean()) * window)) ** 2
    spectrum /= 0.5 * len(piece) * np.sum(window**2)
    audible = spectrum[int(20.0 * len(piece) / rate) :]
    width = 32
    blocks = audible[: len(audible) // width * width].reshape(-1, width)
    noise_power = float(np.median(blocks, axis=1).sum() * width / np.log(2.0))
    return 10.0 * float(np.log10(max(noise_power, 1e-40)))


def _hum(
    samples: NDArray[np.float64], rate: int, levels_db: NDArray[np.float64], loud_db: float, note_hz: float
) -> str:
    hum = find_mains_hum(samples, rate, levels_db, loud_db + _QUIET_DB, note_hz)
    if hum is None or hum.level_db < loud_db - HUM_WORTH_A_WARNING_DB:
        return ""
    multiples = ", ".join(f"{frequency:.0f}" for frequency in hum.lines_hz)
    return (
        f"Mains hum: lines at {multiples} Hz, {loud_db - hum.level_db:.0f} dB below the notes. Harmonics near them are "
        "not to be trusted; try another socket or cable, or a balanced input, and keep away from transformers."
    )


def _reverberation(levels_db: NDArray[np.float64], loud_db: float) -> str:
    decays_s = decay_times_s(levels_db, loud_db)
    decay_s = float(np.median(decays_s)) if decays_s else 0.0
    if decay_s < SLOW_DECAY_S:
        return ""
    return (
        f"Slow to die away: after a note stops, the sound takes {decay_s:.1f} s to fall by 60 dB. A reverberant room "
        "(or strings left ringing) colours each harmonic in its own way; record in a drier room, closer, or damp them."
    )


def decay_times_s(levels_db: NDArray[np.float64], loud_db: float) -> list[float]:
    """Time to fall by 60 dB after the end of each held note, from the fall between 5 and 35 dB below it.

    That range is the one of T30 in ISO 3382-1. A fall counts where a level held for half a second comes first (a
    plucked note falls from the start), where it is straight in dB, and where it does not steepen, as fades and dying
    bow strokes do.

    Parameters
    ----------
    levels_db : float64 array, shape (n,)
        Level of each 10 ms, dB.
    loud_db : float
        Level of the loud parts; falls from more than 12 dB below it do not count.

    Returns
    -------
    list of float
        Seconds, one for each fall that counts; may be empty.
    """
    lead = _HELD_HOPS + _LAG_HOPS
    if len(levels_db) <= lead:
        return []
    power = np.convolve(10.0 ** (levels_db / 10.0), np.full(_SMOOTH_HOPS, 1.0 / _SMOOTH_HOPS), mode="same")
    smooth_db = 10.0 * np.log10(np.maximum(power, 1e-40))
    held_before_db = scipy.ndimage.median_filter(smooth_db, _HELD_HOPS)[_HELD_HOPS // 2 :][: len(smooth_db) - lead]
    # Looked at with a lag, or else the reference would follow a slow fall down.
    below = (smooth_db[lead:] < held_before_db - 5.0) & (held_before_db > loud_db - 12.0)
    starts = lead + np.flatnonzero(below & ~np.concatenate([[False], below[:-1]]))
    decays_s = []
    done = 0
    for start in starts.tolist():
        if start < done:
            continue
        held = smooth_db[start - lead : start - _LAG_HOPS]
        if np.ptp(held) >= 8.0:
            continue
        held_db = float(np.median(held))
        deep = np.flatnonzero(smooth_db[start:] < held_db - 35.0)
        if not len(deep) or deep[0] < 2 * _SMOOTH_HOPS:
            continue
        fall = smooth_db[start : start + int(deep[0])]
        slope, unevenness_db = _straight_line(fall)
        # The line must set out from where the note stopped, or this is a soft note that follows a loud one.
        sets_out = float(fall.mean()) - 0.5 * slope * _HOP_S * len(fall) > held_db - 13.0
        # One note's fall in a room is uneven by a few dB.
        if not sets_out or unevenness_db >= 3.5:
            continue
        half = len(fall) // 2
        early, late = _straight_line(fall[:half])[0], _straight_line(fall[half:])[0]
        # A room goes on falling as it began; a stroke that dies and then stops falls off a cliff.
        expected_hops = -10.0 / slope / _HOP_S if slope < 0.0 else np.inf
        cliff = bool(np.any(smooth_db[start + len(fall) :][: int(min(0.5 * expected_hops, 1e6))] < fall[-1] - 10.0))
        was_held = abs(_straight_line(held)[0]) < 0.25 * abs(slope)
        # A fade of any usual shape is 4 times as steep at its end.
        if was_held and not cliff and 1.9 * early < late < 0.4 * early:
            decays_s.append(-60.0 / slope)
            done = start + len(fall)
    return decays_s


def _straight_line(levels_db: NDArray[np.float64]) -> tuple[float, float]:
    """Slope in dB per second of a straight line through `levels_db`, and the rms distance from it in dB."""
    time_s = _HOP_S * (np.arange(len(levels_db)) - 0.5 * (len(levels_db) - 1))
    about_mean_db = levels_db - levels_db.mean()
    slope = float(time_s @ about_mean_db / (time_s @ time_s))
    return slope, float(np.std(about_mean_db - slope * time_s))


def _low_pass(low_pass_hz: float | None) -> str:
    if low_pass_hz is None or low_pass_hz > LOW_PASS_WORTH_A_WARNING_HZ:
        return ""
    return (
        f"Nothing to be trusted above {low_pass_hz / 1000:.1f} kHz: a lossy format has cut it off. Harmonics above "
        "that are not measured; record to WAV or FLAC."
    )


def _dc(offset: float, lowest: float, highest: float) -> str:
    peak = max(highest - offset, offset - lowest)
    if abs(offset) < LARGEST_DC_SHARE * peak:
        return ""
    return (
        f"Offset (DC): the wave is centred {100 * abs(offset) / peak:.0f} % of its height away from zero. It costs "
        "headroom and points to a fault in the sound card or its cable; the harmonics themselves are not changed by it."
    )
