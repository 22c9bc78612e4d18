"""A recording by its spectrum: brought to a lower rate, or read between its samples."""

from fractions import Fraction
from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

REDUCED_HZ: Final = 12_000
"""About the rate that :meth:`Spectrum.reduced` gives; below half of it lies every fundamental with its first harmonics."""
_REDUCED_BAND: Final = 0.46
"""Up to which part of the reduced rate nothing is lost."""
_MARGIN: Final = 64

_SPLINE_PIECES: Final = (
    np.array(
        [
            [1.0, 26.0, 66.0, 26.0, 1.0, 0.0],
            [-5.0, -50.0, 0.0, 50.0, 5.0, 0.0],
            [10.0, 20.0, -60.0, 20.0, 10.0, 0.0],
            [-10.0, 20.0, 0.0, -20.0, 10.0, 0.0],
            [5.0, -20.0, 30.0, -20.0, 5.0, 0.0],
            [-1.0, 5.0, -10.0, 10.0, -5.0, 1.0],
        ],
        dtype=np.float32,
    )
    / 120.0
)
"""A quintic B-spline piece by piece: from the six coefficients around a place (columns) to the polynomial in the fraction
of a step beyond the third of them (rows, the constant first)."""
_FADED_AT: Final = 1.05
_CHUNK: Final = 8192
"""Places that are read at a time: their working memory stays in the processor's cache."""


class Spectrum:
    """The discrete Fourier transform of a recording.

    Single precision throughout: its rounding lies 30 dB under what reading between the samples leaves, and it halves
    the time.

    Parameters
    ----------
    samples : array, shape (n,)
    sample_rate_hz : float
    """

    def __init__(self, samples: NDArray[np.float64], sample_rate_hz: float) -> None:
        self.sample_rate_hz = sample_rate_hz
        self.length = len(samples)
        # Of a length that reduces to whole samples, and with a margin that does.
        self._to_reduced = Fraction(REDUCED_HZ / sample_rate_hz).limit_denominator(160)
        unit = self._to_reduced.denominator
        self.margin = -(-_MARGIN // unit) * unit
        self.size = unit * int(scipy.fft.next_fast_len(-(-(self.length + 2 * self.margin) // unit), real=True))
        self.bins = scipy.fft.rfft(self._padded(samples))

    def _padded(self, samples: NDArray[np.float64]) -> NDArray[np.float32]:
        first, last = self.margin, self.margin + self.length
        padded = np.zeros(self.size, dtype=np.float32)
        padded[first:last] = samples
        # Point-mirrored margins go on without a step or a kink and fade to nothing, so that neither end rings.
        reach = min(_MARGIN, self.length - 1)
        fade_in = 0.5 - 0.5 * np.cos(np.pi * (np.arange(reach) + 0.5) / max(1, reach))
        padded[first - reach : first] = fade_in * (2.0 * samples[0] - samples[reach:0:-1])
        padded[last : last + reach] = fade_in[::-1] * (2.0 * samples[-1] - samples[-2 : -2 - reach : -1])
        return padded

    def up_to(self, edge_hz: float, size: int) -> NDArray[np.complex64]:
        """The bins up to `edge_hz` and those of a twentieth above it, over which they fade out; below `size` / 2."""
        edge = edge_hz / self.sample_rate_hz * self.size
        bins = self.bins[: min(len(self.bins), (size + 1) // 2, int(_FADED_AT * edge) + 1)].copy()
        beyond = np.arange(int(edge) + 1, len(bins)) / edge - 1.0
        bins[int(edge) + 1 :] *= 0.5 + 0.5 * np.cos(np.pi * beyond / (_FADED_AT - 1.0))
        return bins

    def reduced(self) -> tuple[NDArray[np.float64], float]:
        """The recording at a lower rate, without a constant offset.

        Returns
        -------
        samples : array, shape (n,)
        sample_rate_hz : float
            About 12 kHz.
        """
        size = int(self.size * self._to_reduced)
        rate_hz = self.sample_rate_hz * size / self.size
        bins = self.up_to(_REDUCED_BAND * rate_hz, size)
        first = int(self.margin * self._to_reduced)
        samples = scipy.fft.irfft(bins, size)[first : first + round(self.length * self._to_reduced)]
        return samples.astype(np.float64) * (size / self.size), rate_hz


class BandLimited:
    """A recording that can be read between its samples.

    Brought by FFT to twice the rate that its band needs, then a quintic B-spline whose passband is made flat in the
    frequency domain (Unser 1999, IEEE Signal Process. Mag. 16(6):22): the gain is 1 up to the band's edge, and the
    images of a component at half the edge (at the edge) stand 101 (57) dB under it.

    Parameters
    ----------
    spectrum : Spectrum
    highest_hz : float
        Edge of the band that is wanted, Hz: at most half the sample rate. What lies above fades out within a twentieth.
    """

    def __init__(self, spectrum: Spectrum, highest_hz: float) -> None:
        wanted = 4.0 * highest_hz / spectrum.sample_rate_hz
        size = int(scipy.fft.next_fast_len(int(np.ceil(spectrum.size * wanted)), real=True))
        bins = spectrum.up_to(highest_hz, size)
        gain = 1.0 / np.sinc(np.arange(len(bins), dtype=np.float32) / np.float32(size))
        gain *= gain * gain
        gain *= gain * np.float32(size / spectrum.size)
        bins *= gain
        self._coefficients = scipy.fft.irfft(bins, size)
        self._scale = spectrum.sample_rate_hz * size / spectrum.size
        # Counted from the first of the six coefficients around a place.
        self._origin = spectrum.margin * size / spectrum.size - 2.0
        self.highest_hz = highest_hz

    def at(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """The signal at any times in seconds, same shape."""
        values = np.empty(time_s.size)
        taps = len(_SPLINE_PIECES)
        around, polynomial = np.empty((2, taps, min(_CHUNK, time_s.size)), dtype=np.float32)
        for start in range(0, time_s.size, _CHUNK):
            place = time_s.ravel()[start : start + _CHUNK] * self._scale + self._origin
            count = len(place)
            whole = place.astype(np.intp)
            fraction = (place - whole).astype(np.float32)
            for tap in range(taps):
                around[tap, :count] = self._coefficients[tap:].take(whole, mode="clip")
            np.matmul(_SPLINE_PIECES, around[:, :count], out=polynomial[:, :count])
            value = polynomial[-1, :count]
            for power in polynomial[-2::-1, :count]:
                value *= fraction
                value += power
            values[start : start + count] = value
        return values.reshape(time_s.shape)


def points_per_cycle(f0_hz: float, highest_hz: float) -> int:
    """Points N per cycle that show all of a band with its fade: of a length that the FFT likes."""
    return int(scipy.fft.next_fast_len(max(8, int(np.ceil((1.0 + _FADED_AT) * highest_hz / f0_hz)) + 1), real=True))
