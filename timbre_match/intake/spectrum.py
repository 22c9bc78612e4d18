"""A recording by its spectrum: brought to a lower rate, or read between its samples."""

from typing import Final

import numpy as np
import scipy.fft
from numpy.typing import NDArray

_BLOCK_S: Final = 0.6
_MARGIN: Final = 1 / 32
"""Part of a block, on either side, into which its other end wraps around."""
_MIRRORED_S: Final = 0.0045
_REDUCED_HZ: Final = 13_700.0
_REDUCED_BAND_HZ: Final = 5500.0
_FADED_AT: Final = 1.05
"""Where a band has faded out, as a multiple of its edge."""

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
"""A quintic B-spline piece by piece: from the six coefficients around a place (columns) to the polynomial in the
fraction of a step beyond the third of them (rows, the constant first)."""
_CHUNK: Final = 8192
"""Places that are read at a time: their working memory stays in the processor's cache."""


class Spectrum:
    """The spectrum of a recording in overlapping blocks, for changing its rate.

    Blocks that are transformed together take less time than one transform of the whole. Of each block, brought to
    another rate, the ends are left out (overlap-save; Stockham 1966, AFIPS Conf. Proc. 28:229). Single precision
    throughout, for speed: its rounding (24 bits) lies under the noise of any recording.

    Parameters
    ----------
    samples : array, shape (n,)
        A constant offset is taken out.
    sample_rate_hz : float
    """

    def __init__(self, samples: NDArray[np.float64], sample_rate_hz: float) -> None:
        self.sample_rate_hz = sample_rate_hz
        self.length = len(samples)
        longest = self.length / (1.0 - 4.0 * _MARGIN)
        self.block = 1 << int(np.ceil(np.log2(max(1024.0, min(_BLOCK_S * sample_rate_hz, longest)))))
        self.margin = int(_MARGIN * self.block)
        hop = self.block - 2 * self.margin
        count = -(-(self.length + 2 * self.margin) // hop)
        blocks = np.lib.stride_tricks.sliding_window_view(self._padded(samples, count * hop), self.block)[::hop].copy()
        # Both ends of a block meet: without a step, or it would ring.
        fade_in = (0.5 - 0.5 * np.cos(np.pi * (np.arange(self.margin) + 0.5) / self.margin)).astype(np.float32)
        blocks[:, : self.margin] *= fade_in
        blocks[:, -self.margin :] *= fade_in[::-1]
        self._bins = scipy.fft.rfft(blocks, axis=1)

    def _padded(self, samples: NDArray[np.float64], size: int) -> NDArray[np.float32]:
        """The samples from two margins on, in `size` and two margins."""
        first = 2 * self.margin
        last = first + self.length
        padded = np.zeros(size + 2 * self.margin, dtype=np.float32)
        np.subtract(samples, samples.mean(), out=padded[first:last], casting="same_kind")
        # Point-mirrored ends go on without a step or a kink and fade to nothing, so that neither rings.
        near = padded[first:last]
        reach = min(round(_MIRRORED_S * self.sample_rate_hz), self.margin, self.length - 1)
        fade_in = 0.5 - 0.5 * np.cos(np.pi * (np.arange(reach) + 0.5) / max(1, reach))
        padded[first - reach : first] = fade_in * (2.0 * near[0] - near[reach:0:-1])
        padded[last : last + reach] = fade_in[::-1] * (2.0 * near[-1] - near[-2 : -2 - reach : -1])
        return padded

    def at_rate(
        self,
        lowest_rate_hz: float,
        edge_hz: float,
        *,
        between_s: tuple[float, float] | None = None,
        spline_order: int = 0,
    ) -> tuple[NDArray[np.float32], float, int]:
        """The recording, or a part of it, at another rate, band-limited.

        Parameters
        ----------
        lowest_rate_hz : float
            The rate is this, or the next above it that the FFT likes.
        edge_hz : float
            What lies above fades out within a twentieth.
        between_s : pair of float, optional
            The part that is wanted, in seconds; somewhat more is given.
        spline_order : int
            Made to be the coefficients of a B-spline of this order; 0 for samples.

        Returns
        -------
        samples : float32 array, shape (m,)
        rate_hz : float
        origin : int
            Which of them stands for time 0; negative where the part begins later.
        """
        unit = round(1.0 / _MARGIN)
        wanted = lowest_rate_hz / self.sample_rate_hz * self.block
        size = unit * int(scipy.fft.next_fast_len(int(np.ceil(wanted / unit)), real=True))
        edge = edge_hz / self.sample_rate_hz * self.block
        place = np.arange(min(self._bins.shape[1], (size + 1) // 2, int(_FADED_AT * edge) + 1))
        fade = np.clip((place / edge - 1.0) / (_FADED_AT - 1.0), 0.0, 1.0)
        gain = size / self.block * (0.5 + 0.5 * np.cos(np.pi * fade))
        if spline_order:
            gain *= np.sinc(place / size) ** -(spline_order + 1)
        first, last = (0, len(self._bins)) if between_s is None else self._blocks_between(*between_s)
        blocks = scipy.fft.irfft(self._bins[first:last, : len(place)] * gain.astype(np.float32), size, axis=1)
        margin = size // unit
        origin = margin - first * (size - 2 * margin)
        return blocks[:, margin:-margin].ravel(), self.sample_rate_hz * size / self.block, origin

    def _blocks_between(self, start_s: float, end_s: float) -> tuple[int, int]:
        """First and last (exclusive) of the blocks that hold a part and a margin on either side."""
        hop = self.block - 2 * self.margin
        first = int(start_s * self.sample_rate_hz) // hop
        last = int(end_s * self.sample_rate_hz + 2 * self.margin) // hop + 1
        return max(0, first), min(len(self._bins), last)

    def reduced(self) -> tuple[NDArray[np.float64], float]:
        """The recording at a lower rate that holds every fundamental and its first harmonics.

        Returns
        -------
        samples : array, shape (m,)
        sample_rate_hz : float
            About 14 kHz.
        """
        samples, rate_hz, first = self.at_rate(_REDUCED_HZ, _REDUCED_BAND_HZ)
        count = int(np.ceil(self.length * rate_hz / self.sample_rate_hz))
        return samples[first : first + count].astype(np.float64), rate_hz


class BandLimited:
    """A recording that can be read between its samples.

    Brought by FFT to a multiple of the rate that its band needs, then a quintic B-spline whose passband is made flat in
    the frequency domain (Unser 1999, IEEE Signal Process. Mag. 16(6):22): the gain is 1 up to the band's edge, and the
    images of a component at half the edge (at the edge) stand 101 (57) dB under it for twice the rate, 125 (84) dB for
    thrice.

    Parameters
    ----------
    spectrum : Spectrum
    highest_hz : float
        Edge of the band that is wanted, Hz: at most half the sample rate. What lies above fades out within a twentieth.
    density : float
        The multiple.
    between_s : pair of float, optional
        The part that will be read, in seconds; without it, all.
    """

    def __init__(
        self,
        spectrum: Spectrum,
        highest_hz: float,
        *,
        density: float = 2.0,
        between_s: tuple[float, float] | None = None,
    ) -> None:
        order = len(_SPLINE_PIECES) - 1
        self._coefficients, self._rate_hz, origin = spectrum.at_rate(
            2.0 * density * highest_hz, highest_hz, between_s=between_s, spline_order=order
        )
        # Counted from the first of the six coefficients around a place.
        self._origin = origin - 2
        self.highest_hz = highest_hz

    def at(self, time_s: NDArray[np.float64]) -> NDArray[np.float32]:
        """The signal at any times in seconds, same shape."""
        values = np.empty(time_s.size, dtype=np.float32)
        taps = len(_SPLINE_PIECES)
        around, polynomial = np.empty((2, taps, min(_CHUNK, time_s.size)), dtype=np.float32)
        for start in range(0, time_s.size, _CHUNK):
            place = time_s.ravel()[start : start + _CHUNK] * self._rate_hz + self._origin
            count = len(place)
            whole = place.astype(np.intp)
            fraction = (place - whole).astype(np.float32)
            for tap in range(taps):
                around[tap, :count] = self._coefficients[tap:].take(whole, mode="clip")
            np.matmul(_SPLINE_PIECES, around[:, :count], out=polynomial[:, :count])
            value = values[start : start + count]
            np.multiply(polynomial[-1, :count], fraction, out=value)
            for power in polynomial[-2:0:-1, :count]:
                value += power
                value *= fraction
            value += polynomial[0, :count]
        return values.reshape(time_s.shape)


def points_per_cycle(f0_hz: float, highest_hz: float) -> int:
    """Points N per cycle that show all of a band with its fade: of a length that the FFT likes."""
    return int(scipy.fft.next_fast_len(max(8, int(np.ceil((1.0 + _FADED_AT) * highest_hz / f0_hz)) + 1), real=True))
