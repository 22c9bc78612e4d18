"""The fundamental over time, frame by frame.

Every frame gives a few candidate periods from the autocorrelation of its compressed spectrum (the generalised
autocorrelation of Tolonen & Karjalainen 2000, IEEE Trans. Speech Audio Process. 8:708, normalised by the window's own
autocorrelation after Boersma 1993, Proc. Inst. Phonetic Sciences 17:97); the cheapest path through the candidates
(Viterbi 1967) is the track. A single frame cannot settle the octave of a note with weak odd harmonics: that is decided
over the whole held note, in :mod:`timbre_match.intake.octave`.
"""

import functools
from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.signal
from numpy.typing import NDArray

LOWEST_HZ = 25.0
"""A little below the contrabassoon's lowest note (27 to 29 Hz)."""
HIGHEST_HZ = 4500.0
_RUMBLE_HZ = 18.0

HOP_S = 0.02
_FRAME_S = 0.1
_AT_ONCE = 128
"""Frames whose spectra are held in memory together."""
_BAND_HZ = 5500.0
_CANDIDATES = 6
# All below were chosen on 357 real single notes of 18 instruments: the fewest wrong octaves in single frames.
_COMPRESSION = 0.5
_COST_PER_OCTAVE = 0.07
_WINDOW_EXPONENT = 0.5
_JUMP_COST_PER_OCTAVE = 1.5
_LARGEST_JUMP_COST = 0.35
_SMALLEST_PEAK = 0.1


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class PitchTrack:
    """The fundamental over time.

    All arrays have shape (n_frames,) and are read-only.

    Attributes
    ----------
    time_s : centre of each frame, seconds
    f0_hz : fundamental in Hz, possibly an octave off in single frames
    strength : 0 to 1, height of the autocorrelation peak (periodicity)
    level_db : power of the windowed frame, dB re full scale
    """

    time_s: NDArray[np.float64]
    f0_hz: NDArray[np.float64]
    strength: NDArray[np.float64]
    level_db: NDArray[np.float64]

    def __post_init__(self) -> None:
        for name in ("time_s", "f0_hz", "strength", "level_db"):
            array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)


def without_rumble(samples: NDArray[np.float64], sample_rate_hz: float) -> NDArray[np.float64]:
    """Take out what lies below the lowest note: steps on the floor, wind, traffic.

    The filter rings for some cycles at the start of a sound; levels and tracks can bear that, phases cannot.
    """
    return np.asarray(scipy.signal.sosfilt(_highpass(sample_rate_hz), samples))


@functools.cache
def _highpass(sample_rate_hz: float) -> NDArray[np.float64]:
    return np.asarray(scipy.signal.butter(4, _RUMBLE_HZ, "highpass", fs=sample_rate_hz, output="sos"))


def track_pitch(samples: NDArray[np.float64], sample_rate_hz: float) -> PitchTrack:
    """Follow the fundamental through a recording.

    Parameters
    ----------
    samples : array, shape (n,)
        At the rate of :meth:`Spectrum.reduced`.
    sample_rate_hz : float

    Returns
    -------
    PitchTrack
        One value every 20 ms; silent frames have strength 0.
    """
    length = int(_FRAME_S * sample_rate_hz) // 2 * 2
    hop = round(HOP_S * sample_rate_hz)
    size = int(scipy.fft.next_fast_len(int(length + sample_rate_hz / LOWEST_HZ + 2), real=True))
    window = scipy.signal.get_window("hann", length).astype(np.float32)
    padded = np.zeros(len(samples) + length, dtype=np.float32)
    padded[length // 2 : length // 2 + len(samples)] = samples
    frames = np.lib.stride_tricks.sliding_window_view(padded, length)[::hop]
    own = _autocorrelation(_power(window[None], size), size, sample_rate_hz)[0]
    weight = np.maximum(own / own[0], 0.1) ** _WINDOW_EXPONENT
    parts = []
    for first in range(0, len(frames), _AT_ONCE):
        power = _power(frames[first : first + _AT_ONCE] * window, size)
        correlation = _autocorrelation(power, size, sample_rate_hz)
        correlation /= weight
        parts.append((*_candidates(correlation, 2.0 * sample_rate_hz), power.sum(axis=1)))
    f0_hz, strength, total = (np.concatenate(part) for part in zip(*parts, strict=True))
    path = _cheapest_path(f0_hz, strength)
    rows = np.arange(len(path))
    return PitchTrack(
        time_s=rows * hop / sample_rate_hz,
        f0_hz=f0_hz[rows, path],
        strength=strength[rows, path],
        level_db=10.0 * np.log10(total * 2.0 / size / float(np.sum(window**2)) + 1e-20),
    )


def _power(frames: NDArray[np.float32], size: int) -> NDArray[np.float32]:
    """Power spectra, shape (n_frames, size // 2 + 1)."""
    spectra = scipy.fft.rfft(frames, size, axis=1)
    return np.asarray(spectra.real**2 + spectra.imag**2)


def _autocorrelation(power: NDArray[np.float32], size: int, rate: float) -> NDArray[np.float32]:
    """Generalised autocorrelation at twice the rate, so that peaks between samples keep their height.

    Column i is for a lag of i + 1/2 steps: the cosine transform that gives these (DCT-III) is half the work. The value
    at lag 0 would be 1.
    """
    band = int(_BAND_HZ / rate * size)
    taper = np.ones(band, dtype=np.float32)
    edge = band // 5
    taper[-edge:] = 0.5 + 0.5 * np.cos(np.pi * np.arange(edge) / edge)
    compressed = power[:, :band] ** _COMPRESSION * taper
    at_lag_zero = 2.0 * compressed.sum(axis=1, keepdims=True) - compressed[:, :1]
    compressed /= np.maximum(at_lag_zero, 1e-30)
    return np.asarray(scipy.fft.dct(compressed, 3, size, axis=1)[:, : int(2 * rate / LOWEST_HZ) + 3])


def _candidates(correlation: NDArray[np.float32], rate: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Frequencies in Hz and peak heights, shape (n_frames, _CANDIDATES), of the best peaks; height 0 where none."""
    frames = len(correlation)
    left, middle, right = correlation[:, :-2], correlation[:, 1:-1], correlation[:, 2:]
    peaks = np.flatnonzero((middle > left) & (middle >= right) & (middle > _SMALLEST_PEAK))
    frame, column = np.divmod(peaks, middle.shape[1])
    # The slope down from lag 0 is no period: peaks count from the first zero crossing on.
    negative = correlation < 0.0
    crossing = np.where(negative.any(axis=1), negative.argmax(axis=1), correlation.shape[1])
    counts = (column + 1 > crossing[frame]) & (column + 1.5 > rate / HIGHEST_HZ - 1.0)
    frame, column = frame[counts], column[counts]
    a, b, c = (side[frame, column].astype(np.float64) for side in (left, middle, right))
    score = b - _COST_PER_OCTAVE * np.log2((column + 1.5) * HIGHEST_HZ / rate)
    # Frame by frame, the best first: scores differ by less than 3.
    order = np.argsort(3.0 * frame - score)
    place = np.arange(len(order)) - np.searchsorted(frame, np.arange(frames))[frame]
    order, place = order[place < _CANDIDATES], place[place < _CANDIDATES]
    frame, column, a, b, c = frame[order], column[order], a[order], b[order], c[order]
    shift = (0.5 * (a - c) / (a - 2.0 * b + c)).clip(-0.5, 0.5)
    f0_hz = np.full((frames, _CANDIDATES), HIGHEST_HZ)
    height = np.zeros((frames, _CANDIDATES))
    f0_hz[frame, place] = rate / (column + 1.5 + shift)
    height[frame, place] = b - 0.25 * (a - c) * shift
    return f0_hz, height


def _cheapest_path(f0_hz: NDArray[np.float64], strength: NDArray[np.float64]) -> NDArray[np.int64]:
    """Index of the chosen candidate in every frame (Viterbi 1967)."""
    gain = np.where(strength > 0.0, strength - _COST_PER_OCTAVE * np.log2(HIGHEST_HZ / f0_hz), -1.0)
    if len(gain) == 1:
        return np.asarray(gain.argmax(axis=1))
    octaves = np.log2(f0_hz)
    jump = np.abs(octaves[:-1, :, None] - octaves[1:, None, :]) * _JUMP_COST_PER_OCTAVE
    cost = np.minimum(jump, _LARGEST_JUMP_COST) - gain[1:, None, :]
    cost[0] -= gain[0][:, None]
    return _cheapest_steps(cost)


def _cheapest_steps(cost: NDArray[np.float64]) -> NDArray[np.int64]:
    """The cheapest path, shape (steps + 1,), where step n from i to j costs `cost[n, i, j]`.

    By halves: two steps, by way of the cheapest place between them, are one; once the path over these is known, so are
    the places between. All steps of one length are worked out at once.
    """
    if len(cost) == 1:
        return np.array(np.unravel_index(cost[0].argmin(), cost[0].shape))
    pairs = len(cost) // 2
    first, second = cost[: 2 * pairs : 2], cost[1 : 2 * pairs : 2]
    double = (first[:, :, :, None] + second[:, None, :, :]).min(axis=2)
    ends = _cheapest_steps(np.concatenate([double, cost[2 * pairs :]]))
    path = np.empty(len(cost) + 1, dtype=np.int64)
    path[: 2 * pairs + 1 : 2] = ends[: pairs + 1]
    path[-1] = ends[-1]
    each = np.arange(pairs)
    path[1 : 2 * pairs : 2] = (first[each, ends[:pairs], :] + second[each, :, ends[1 : pairs + 1]]).argmin(axis=1)
    return path
