"""What all partials of a note do together: the pitch glide after a strong pluck, a bend, an unsteady recorder.

A string that swings wide is tighter than at rest, so its pitch falls for some tenths of a second after the pluck
(Legge & Fletcher 1984, J. Acoust. Soc. Am. 76:5). A decay is fitted to the partials once this is taken out: a turn of
one radian within the decay would otherwise look like a second component.
"""

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_SMOOTH_S = 0.05
_ENOUGH = 30.0
"""Beyond this ratio of power to noise a partial's own beats, not the noise, limit what it says."""
_CERTAIN = 16.0
"""Strings in white noise reach 14 in one of a hundred; real plucked ones mostly 20 to 400."""
_WORTH = 3e-4
"""Half a cent: less than that harms no fit."""


def common_glide(time_s: Real, y: Complex, freq_hz: Real, noise: Real) -> Real:
    """The relative frequency deviation that the partials share, over time.

    The turn of partial k from one sample to the next, over its frequency, is a constant of its own plus the common
    deviation: a two-way layout, fitted by weighted least squares in turns, each value weighted by frequency squared
    and ratio to the noise, then smoothed (Whittaker 1923; Eilers 2003, Anal. Chem. 75:3631).

    Parameters
    ----------
    time_s : array, shape (n,), at equal steps
    y : complex array, shape (P, n)
    freq_hz, noise : arrays, shape (P,)
        Frequency of each partial, and the noise power per sample.

    Returns
    -------
    array, shape (n,)
        Zero throughout where the partials do not agree on any.
    """
    none = np.zeros(len(time_s))
    if len(freq_hz) < 3 or len(time_s) < 12:
        return none
    step_s = float(time_s[1] - time_s[0])
    turn = y[:, 1:] * y[:, :-1].conj()
    deviation = np.angle(turn) / (2.0 * np.pi * step_s * freq_hz[:, None])
    ratio = np.abs(turn) / noise[:, None]
    weight = freq_hz[:, None] ** 2 * np.where(ratio > 2.0, np.minimum(ratio, _ENOUGH), 0.0)
    # No partial decides alone.
    weight = np.minimum(weight, 0.3 * weight.sum(axis=0))
    total = weight.sum(axis=0)
    sure = total > 1e-3 * total.max()
    if sure.sum() < 8:
        return none
    smooth = (_SMOOTH_S / step_s / 3.0) ** 4
    own = np.zeros(len(freq_hz))
    glide = np.zeros(len(total))
    robust = weight
    for _ in range(5):
        own = ((deviation - glide) * robust).sum(axis=1) / (robust.sum(axis=1) + 1e-300)
        rest = deviation - own[:, None]
        share = (rest * robust).sum(axis=0)
        glide = _smoothed(share, robust.sum(axis=0), smooth)
        glide -= float(total @ glide) / float(total.sum())
        off = np.abs(rest - glide)
        usual = np.median(off[weight > 0.0]) + 1e-300
        robust = weight / (1.0 + (off / (3.0 * usual)) ** 2)
    spread = float((robust * (deviation - own[:, None] - glide) ** 2).sum()) / float(np.count_nonzero(robust) or 1)
    # How much larger the common deviation is than partials that do nothing together would show.
    pieces = max(4.0, len(total) * step_s / _SMOOTH_S)
    power = float(robust.sum(axis=0) @ glide**2)
    if power < _CERTAIN * spread * pieces or power < _WORTH**2 * float(robust.sum()):
        return none
    return np.interp(np.arange(len(time_s)), np.arange(len(total)) + 0.5, glide)


def without_glide(time_s: Real, y: Complex, freq_hz: Real, glide: Real) -> Complex:
    """The envelopes turned back by a common relative deviation of frequency."""
    step_s = float(time_s[1] - time_s[0])
    phase = np.concatenate([[0.0], np.cumsum(0.5 * (glide[1:] + glide[:-1]))]) * step_s
    # As it was at the onset, before the first sample.
    phase += glide[0] * time_s[0]
    return np.asarray(y * np.exp(-2j * np.pi * freq_hz[:, None] * phase))


def _smoothed(weighted: Real, weight: Real, smooth: float) -> Real:
    """Minimise sum weight (g - value)^2 + smooth * mean weight * sum (second difference of g)^2."""
    count = len(weight)
    usual = float(weight.mean()) + 1e-300
    band = np.zeros((3, count))
    band[2] = weight
    penalty = smooth * usual
    difference = np.array([1.0, -2.0, 1.0])
    for offset in range(3):
        for row in range(3 - offset):
            # Row of the second difference that begins at i touches i ... i + 2.
            band[2 - offset, row + offset : count - 2 + row + offset] += (
                penalty * difference[row] * difference[row + offset]
            )
    # A little pull to zero, where no partial sounds any more.
    band[2] += 1e-3 * usual
    return np.asarray(scipy.linalg.solveh_banded(band, weighted))
