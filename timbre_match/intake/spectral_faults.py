"""Faults that show in the long-term spectrum: mains hum, and the edge at which a lossy codec has cut the sound off."""

import functools
from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray
from scipy.signal import get_window

MAINS_HZ = (50.0, 60.0)

_HUM_MULTIPLES = range(1, 7)
_HUM_RATE_HZ = 1400.0
_HUM_HIGHEST_HZ = 400.0
_HUM_FRAME_S = 1.0
_LINE_ABOVE_FLOOR = 10.0**1.5
_LINE_ABOVE_NEXT = 4.0
_STEADY_LINE = 4.0
_SAME_LINE_HZ = 1.2

_FRAME_S = 0.18
_FRAMES = 24
_BAND_HZ = 75.0
_EDGE_LOWEST_HZ = 7000.0
_CODEC_USUAL_HZ = 14_500.0
_EDGE_DROP_DB = 14.0
_DEEP_DROP_DB = 20.0


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class LongTermSpectrum:
    """Mean power per bin over the recording (float64, shape (bins,)), and the spacing of the bins in Hz."""

    power: NDArray[np.float64]
    step_hz: float

    def strongest_hz(self) -> float:
        """Frequency of the strongest bin, refined by a parabola through its neighbours' levels."""
        at = int(np.clip(np.argmax(self.power[1:-1]) + 1, 1, len(self.power) - 2))
        low, mid, high = np.log(self.power[at - 1 : at + 2] + 1e-300)
        bend = low - 2.0 * mid + high
        return float(self.step_hz * (at + (0.5 * (low - high) / bend if bend < 0.0 else 0.0)))


@dataclass(frozen=True, kw_only=True, slots=True)
class MainsHum:
    """Frequencies of the hum's lines in Hz, and their common level in dB re full scale."""

    lines_hz: tuple[float, ...]
    level_db: float


def long_term_spectrum(samples: NDArray[np.float64], sample_rate_hz: int) -> LongTermSpectrum:
    """Mean power spectrum of up to 24 frames spread over the recording.

    The window is Nuttall's four-term one with continuous first derivative (Nuttall 1981, IEEE Trans. ASSP 29:84-91):
    its sidelobes lie at -93 dB and fall by 18 dB per octave, so that strong harmonics do not fill the gaps between
    them, which is where the edge of a codec is looked for.
    """
    size = min(1 << round(np.log2(_FRAME_S * sample_rate_hz)), len(samples))
    starts = np.linspace(0, len(samples) - size, min(_FRAMES, max(1, 2 * len(samples) // size - 1))).astype(np.int64)
    window = _nuttall(size)
    frames = np.lib.stride_tricks.sliding_window_view(samples, size)[starts].astype(np.float32)
    frames *= window
    spectra = scipy.fft.rfft(frames, axis=1)
    power = (spectra.real**2 + spectra.imag**2).sum(axis=0, dtype=np.float64)
    power *= 2.0 / (len(starts) * float(window.sum()) ** 2)
    return LongTermSpectrum(power=power, step_hz=sample_rate_hz / size)


@functools.cache
def _nuttall(size: int) -> NDArray[np.float32]:
    return np.asarray(get_window("nuttall", size), dtype=np.float32)


def find_low_pass(spectrum: LongTermSpectrum) -> float | None:
    """Find the edge above which a codec, or a conversion of the sample rate, has left nothing to be trusted.

    The floor between the harmonics is what is looked at (the lower quartile of each 75 Hz), since an instrument's own
    harmonics may end anywhere, but the noise of bow, breath and room does not end at a line. At an edge the floor
    falls by 14 dB from one 150 Hz to the next but one, from a level that is no mere bump, and most of what lies above
    stays down; a codec may let single strong harmonics through up there, now and then.

    Returns
    -------
    float or None
        The edge in Hz, rounded down to the band.
    """
    width = max(4, round(_BAND_HZ / spectrum.step_hz))
    bands = spectrum.power[: len(spectrum.power) // width * width].reshape(-1, width)
    floor_db = 10.0 * np.log10(np.quantile(bands, 0.25, axis=1) + 1e-30)
    band_hz = width * spectrum.step_hz
    edges = np.arange(max(20, int(_EDGE_LOWEST_HZ / band_hz)), len(floor_db) - 8)
    sums = np.concatenate([[0.0], np.cumsum(floor_db)])
    below_db = (sums[edges] - sums[edges - 2]) / 2.0
    before_db = (sums[edges - 4] - sums[edges - 20]) / 16.0
    drop_db = below_db - (sums[edges + 3] - sums[edges + 1]) / 2.0
    falls = (drop_db > _EDGE_DROP_DB) & (below_db < before_db + 4.0)
    for at in sorted(np.flatnonzero(falls), key=lambda at: -drop_db[at]):
        lowest_db, low_db, high_db = np.quantile(floor_db[edges[at] + 1 :], [0.1, 0.75, 0.9])
        # Lower down, a high note's own spectrum may fall as fast: there the fall must be deep, and onto bare floor.
        sure = edges[at] * band_hz > _CODEC_USUAL_HZ or (drop_db[at] > _DEEP_DROP_DB and high_db - lowest_db < 8.0)
        if low_db < below_db[at] - 0.7 * _EDGE_DROP_DB and sure:
            return float(edges[at] * band_hz)
    return None


def find_mains_hum(
    samples: NDArray[np.float64],
    sample_rate_hz: int,
    levels_db: NDArray[np.float64],
    quiet_db: float,
    note_hz: float,
) -> MainsHum | None:
    """Find a series of lines at multiples of 50 or 60 Hz that stands all through the recording.

    The least power over all seconds of the recording is searched, since hum is always there and notes come and go.
    Where some seconds are quiet, only these are searched. The strongest line of all must not be a multiple of the
    mains frequency itself, or else note and hum cannot be told apart and none is reported. Lines that swell or die
    with a note are the note's.

    Parameters
    ----------
    samples : float64 array, shape (n,)
        Full scale 1.
    sample_rate_hz : int
    levels_db : float64 array, shape (m,)
        Level over time, equally spaced over the recording, dB re full scale.
    quiet_db : float
        Level below which nothing is being played.
    note_hz : float
        Strongest line of the whole recording.

    Returns
    -------
    MainsHum or None
    """
    factor = max(1, round(sample_rate_hz / _HUM_RATE_HZ))
    taps = get_window("blackmanharris", 4 * factor)
    slow = _slowed(samples, taps / taps.sum(), factor)
    rate = sample_rate_hz / factor
    size = round(_HUM_FRAME_S * rate)
    if len(slow) < size:
        return None
    starts = np.arange(0, len(slow) - size + 1, size // 3)
    window = np.hanning(size + 1)[:-1].astype(np.float32)
    padded = 1 << (2 * size - 1).bit_length()
    step_hz = rate / padded
    frames = slow.astype(np.float32)[starts[:, None] + np.arange(size)] * window
    spectra = scipy.fft.rfft(frames, padded, axis=1)[:, : int(_HUM_HIGHEST_HZ / step_hz)]
    power = (spectra.real**2 + spectra.imag**2) * (2.0 / float(window.sum()) ** 2)
    edges = np.round(np.stack([starts, starts + size]) * len(levels_db) / len(slow)).astype(np.int64)
    quiet = np.array([levels_db[first:last].max() < quiet_db for first, last in edges.T])
    # Between notes hum keeps its level; under notes they may cover it for most of the time.
    searched, share = (power[quiet], 60) if quiet.any() else (power, 30)
    least = searched.min(axis=0)

    def usual(line: int) -> float:
        return float(np.percentile(searched[:, line], share))

    for mains_hz in MAINS_HZ:
        if abs(note_hz - mains_hz * round(note_hz / mains_hz)) < _SAME_LINE_HZ:
            continue
        peaks = [_line_bin(least, m * mains_hz, 0.1 + 0.1 * m, step_hz) for m in _HUM_MULTIPLES]
        found = [
            (m * mains_hz, peak)
            for m, peak in zip(_HUM_MULTIPLES, peaks, strict=True)
            # A line of hum keeps its level.
            if peak is not None and usual(peak) < _STEADY_LINE * least[peak]
        ]
        # One line may be anything; two at exact multiples are a series.
        if len(found) >= 2:
            total = sum(usual(peak) / _gain(taps, line_hz / sample_rate_hz) for line_hz, peak in found)
            return MainsHum(lines_hz=tuple(line_hz for line_hz, _ in found), level_db=10.0 * float(np.log10(total)))
    return None


def _slowed(samples: NDArray[np.float64], taps: NDArray[np.float64], factor: int) -> NDArray[np.float64]:
    """Every `factor`-th output of the filter `taps` (4 x factor long), as one matrix product and three additions."""
    blocks = samples[: len(samples) // factor * factor].reshape(-1, factor)
    parts = blocks @ taps.reshape(4, factor).T
    return np.asarray(parts[:-3, 0] + parts[1:-2, 1] + parts[2:-1, 2] + parts[3:, 3])


def _gain(taps: NDArray[np.float64], turns_per_sample: float) -> float:
    response = np.sum(taps * np.exp(-2j * np.pi * turns_per_sample * np.arange(len(taps)))) / np.sum(taps)
    return float(abs(response) ** 2)


def _line_bin(least: NDArray[np.floating], line_hz: float, tolerance_hz: float, step_hz: float) -> int | None:
    """Bin of a line at `line_hz` that stands 15 dB out of its surroundings, alone, or None."""

    def between(low_hz: float, high_hz: float) -> slice:
        return slice(max(0, round((line_hz + low_hz) / step_hz)), round((line_hz + high_hz) / step_hz) + 1)

    near = between(-3.5, 3.5)
    peak = near.start + int(np.argmax(least[near]))
    around = np.concatenate([least[between(-14.0, -4.0)], least[between(4.0, 14.0)]])
    in_place = abs(peak * step_hz - line_hz) <= tolerance_hz + 0.5 * step_hz
    # A sideband of vibrato stands beside something stronger; a line of hum stands alone.
    alone = least[peak] > _LINE_ABOVE_NEXT * around.max()
    return peak if in_place and alone and least[peak] > _LINE_ABOVE_FLOOR * np.median(around) else None
