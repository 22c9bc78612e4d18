"""A recording cut into bands, one for each partial, each turned down to zero frequency."""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_FADE = 1.0
"""A band fades out within so many of its half-widths: the slower, the sooner its response to the attack has passed."""
_EDGE_S = 0.02


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Bands:
    """Complex envelopes of partials.

    Attributes
    ----------
    time_s : array, shape (n,)
        Seconds from the onset, at equal steps.
    y : complex array, shape (P, n)
        An amplitude of 1 is a cosine with a peak of 1.
    noise_factor : float
        The noise per sample of `y` over that of independent samples: less than one value in `1 / noise_factor` is new.
    """

    time_s: Real
    y: Complex
    noise_factor: float


def cut_bands(
    samples: Real,
    sample_rate_hz: float,
    onset_s: float,
    stretch_s: tuple[float, float],
    centre_hz: Real,
    half_hz: float,
) -> Bands:
    """Cut bands of +-`half_hz` around `centre_hz` out of a recording.

    Parameters
    ----------
    samples : array, shape (n,)
    sample_rate_hz : float
    onset_s : float
        Where time zero is, seconds from the start of the recording.
    stretch_s : (float, float)
        From where to where the envelopes are wanted, seconds from the start of the recording.
    centre_hz : array, shape (P,)
    half_hz : float
        Half-width of each band where it is flat; at twice that it has faded out.

    Returns
    -------
    Bands
    """
    rate = sample_rate_hz
    edge = round(_EDGE_S * rate)
    first = max(0, round(onset_s * rate) - 2 * edge)
    last = min(len(samples), round(stretch_s[1] * rate) + 2 * edge)
    part = samples[first:last].copy()
    fade = 0.5 - 0.5 * np.cos(np.pi * (np.arange(edge) + 0.5) / edge)
    if len(part) > 2 * edge:
        part[:edge] *= fade
        part[-edge:] *= fade[::-1]
    size = int(scipy.fft.next_fast_len(len(part) + 2 * edge, real=True))
    spectrum = scipy.fft.rfft(part, size)
    bin_hz = rate / size
    reach = int(np.ceil((1.0 + _FADE) * half_hz / bin_hz))
    count = int(scipy.fft.next_fast_len(2 * reach + 1))
    offset = np.arange(count) - count // 2
    gain = np.clip((1.0 + _FADE - np.abs(offset) * bin_hz / half_hz) / _FADE, 0.0, 1.0)
    gain = 0.5 - 0.5 * np.cos(np.pi * gain)
    middle = np.round(centre_hz / bin_hz).astype(np.int64)
    place = middle[:, None] + offset
    inside = (place > 0) & (place < len(spectrum))
    cut = np.where(inside, spectrum[np.clip(place, 0, len(spectrum) - 1)], 0.0) * (2.0 * gain * count / size)
    envelope = scipy.fft.ifft(scipy.fft.ifftshift(cut, axes=1), axis=1)
    step_s = size / rate / count
    time_s = first / rate + np.arange(count) * step_s
    wanted = (time_s >= stretch_s[0]) & (time_s <= stretch_s[1])
    time_s = time_s[wanted]
    # The phase is that of the cosine at the onset.
    off_hz = middle * bin_hz - centre_hz
    origin = np.exp(2j * np.pi * middle * bin_hz * (onset_s - first / rate))
    turn = np.exp(2j * np.pi * off_hz[:, None] * (time_s - onset_s))
    return Bands(
        time_s=np.asarray(time_s - onset_s, dtype=np.float64),
        y=envelope[:, wanted] * turn * origin[:, None],
        noise_factor=float(np.sum(gain**2)) / count,
    )
