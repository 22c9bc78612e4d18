r"""The partials of a stiff string: where they are, and the flexible fundamental and inharmonicity that they follow.

.. math:: f_k = k f_0 \sqrt{1 + B k^2}

(Fletcher 1964, J. Acoust. Soc. Am. 36:203; Järveläinen et al. 2001, J. Acoust. Soc. Am. 110:3149). f_0 is the
fundamental that the string would have without stiffness: its first partial sounds at f_0 sqrt(1 + B).
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.ndimage
from numpy.typing import NDArray

from timbre_match.units import cents_between

Real = NDArray[np.float64]

LARGEST_B = 3e-3
MOST_PARTIALS = 200
_LONGEST_S = 1.0
_SHORTEST_CYCLES = 14.0
_OFF_CENTS = 60
_NEAR_CENTS = 4
"""How far off a partial still counts in the search."""
_NOISE_DB, _ENOUGH_DB = 14.0, 26.0
"""A bin of noise stands so far above its surroundings now and then; another so much above that is sure enough."""
_ALONE = 0.12
"""A peak is the highest within this share of the fundamental."""
_MOST = 96
_PEAK_HZ = 0.3
"""How well a peak shows a partial that dies within a second."""
_NORMAL_MEDIAN = 0.6745
"""Median of the absolute value of a standard normal variable."""
_TUKEY = 4.685
"""The biweight at this many standard deviations is 95 % efficient for normal errors (Beaton & Tukey 1974)."""


@dataclass(frozen=True, kw_only=True, slots=True)
class StiffString:
    """The law that the partials follow.

    Attributes
    ----------
    f0_hz, f0_se_hz : float
        Flexible fundamental and its standard error.
    b, b_se : float
        Inharmonicity B (0 or more) and its standard error.
    scatter : float
        How far partials lie off the law beyond their own errors, relative standard deviation.
    """

    f0_hz: float
    f0_se_hz: float
    b: float
    b_se: float
    scatter: float


def stretched_hz(k: NDArray[np.int64], f0_hz: float, b: float) -> Real:
    """Frequencies of partials k of a stiff string, Hz."""
    return np.asarray(k * f0_hz * np.sqrt(1.0 + b * np.square(k, dtype=np.float64)))


def search_partials(samples: Real, sample_rate_hz: float, f0_hz: float, highest_hz: float) -> tuple[Real, float]:
    """Find the partials of a note in its spectrum, by the f0 and B whose partials stand out most.

    The first eight partials are tried over a wide grid of f0 and B, then twice as many over a finer one around the
    best, and so on: a few partials that the body pulls off the law, or that are missing, do not lead the search astray.

    Parameters
    ----------
    samples : array, shape (n,)
        The note from its onset on.
    sample_rate_hz : float
    f0_hz : float
        Right to within 60 cents.
    highest_hz : float
        Where the band ends.

    Returns
    -------
    freq_hz : array, shape (K,)
        A frequency for each partial in the band: that of a peak near where the law has it, else where the law has it.
    f0_hz : float
        The flexible fundamental, roughly.
    """
    peak_hz, height_db = _peaks(samples, sample_rate_hz, f0_hz, highest_hz)
    salience = _by_cents(peak_hz, height_db, f0_hz, highest_hz)
    off_cents = np.arange(-_OFF_CENTS, _OFF_CENTS + 1, 3, dtype=np.float64)
    count = min(8, max(1, int(highest_hz / f0_hz)))
    step = _stretch_step(count)
    b = np.arange(0.0, LARGEST_B, step)
    while True:
        k = np.arange(1, count + 1)
        cents = off_cents[:, None, None] + 1200.0 * np.log2(k) + 600.0 * np.log2(1.0 + b[:, None] * k**2)
        place = np.round(cents).astype(np.int64) + _OFF_CENTS
        score = np.where(place < len(salience), salience[np.minimum(place, len(salience) - 1)], 0.0).sum(axis=2)
        # Of equals the least stretched.
        score -= 1e-3 * np.arange(len(b))
        best = np.unravel_index(score.argmax(), score.shape)
        centre, middle = float(off_cents[best[0]]), float(b[best[1]])
        found_hz = f0_hz * 2.0 ** (centre / 1200.0)
        if 2 * count > _MOST or found_hz * count * np.sqrt(1.0 + middle * count**2) > highest_hz:
            break
        count *= 2
        off_cents = centre + np.arange(-6.0, 7.0)
        reach, step = 5.0 * step, _stretch_step(count)
        b = np.arange(max(0.0, middle - reach), middle + reach, step)
    return _on_peaks(peak_hz, found_hz, middle, highest_hz)


def _on_peaks(peak_hz: Real, f0_hz: float, b: float, highest_hz: float) -> tuple[Real, float]:
    """Partials of a law that is nearly right, on peaks where there are any near; and the fundamental through these."""
    for near_cents in (2.0 * _NEAR_CENTS, 1.5 * _NEAR_CENTS):
        freq_hz = stretched_hz(np.arange(1, MOST_PARTIALS + 1), f0_hz, b)
        freq_hz = freq_hz[: max(1, int(np.searchsorted(freq_hz, highest_hz)))]
        if not len(peak_hz):
            return freq_hz, f0_hz
        at = np.clip(np.searchsorted(peak_hz, freq_hz), 1, max(1, len(peak_hz) - 1))
        at = np.where(np.abs(peak_hz[at - 1] - freq_hz) < np.abs(peak_hz[at % len(peak_hz)] - freq_hz), at - 1, at)
        nearest_hz = peak_hz[at % len(peak_hz)]
        reach_hz = np.minimum(freq_hz * (2.0 ** (near_cents / 1200.0) - 1.0) + 0.5, 0.1 * f0_hz)
        close = np.flatnonzero(np.abs(nearest_hz - freq_hz) < reach_hz)
        if len(close) > 2:
            law = fit_law(close + 1, nearest_hz[close], np.full(len(close), _PEAK_HZ))
            f0_hz, b = law.f0_hz, law.b
        freq_hz[close] = nearest_hz[close]
    return freq_hz, f0_hz


def _stretch_step(count: int) -> float:
    """The step in B that moves the highest of `count` partials by as far as a partial may lie off."""
    return float(_NEAR_CENTS / (600.0 / np.log(2.0) * count**2))


def _peaks(samples: Real, rate: float, f0_hz: float, highest_hz: float) -> tuple[Real, Real]:
    """The peaks of a note's spectrum: frequencies in Hz, and how far they stand out of their surroundings, dB."""
    length = min(len(samples), round(max(_LONGEST_S, _SHORTEST_CYCLES / f0_hz) * rate))
    # Fast in, slowly out: a decaying note is best told from noise by its beginning.
    window = np.minimum(1.0, np.linspace(0.0, 6.0, length)) * np.hanning(2 * length)[length:]
    size = int(scipy.fft.next_fast_len(2 * length, real=True))
    bin_hz = rate / size
    power = np.abs(scipy.fft.rfft(samples[:length] * window, size)) ** 2
    level_db = 10.0 * np.log10(power[: int(highest_hz / bin_hz) + 4] + 1e-300)
    per = max(4, round(1.5 * f0_hz / bin_hz))
    blocks = -(-len(level_db) // per)
    padded = np.pad(level_db, (0, blocks * per - len(level_db)), mode="edge").reshape(blocks, per)
    floor_db = np.interp(np.arange(len(level_db)), (np.arange(blocks) + 0.5) * per, np.percentile(padded, 40, axis=1))
    above_db = level_db - floor_db - _NOISE_DB
    # Only the highest around: the slopes of a strong peak stand out of the floor as well.
    near = 2 * round(_ALONE * f0_hz / bin_hz) + 1
    peak = np.flatnonzero((level_db == scipy.ndimage.maximum_filter1d(level_db, near)) & (above_db > 0.0))
    peak = peak[(peak > 0) & (peak < len(level_db) - 1)]
    left, middle, right = level_db[peak - 1], level_db[peak], level_db[peak + 1]
    place = peak + 0.5 * (left - right) / np.minimum(left - 2.0 * middle + right, -1e-9)
    return bin_hz * place, above_db[peak]


def _by_cents(peak_hz: Real, height_db: Real, f0_hz: float, highest_hz: float) -> Real:
    """Heights of peaks cent by cent from 60 cents under `f0_hz` on; a peak counts a few cents off too."""
    steps = round(cents_between(highest_hz, f0_hz)) + _OFF_CENTS
    cents = np.round(1200.0 * np.log2(np.maximum(peak_hz, 1.0) / f0_hz)).astype(np.int64) + _OFF_CENTS
    inside = (cents >= 0) & (cents < steps)
    salience = np.zeros(steps)
    np.maximum.at(salience, cents[inside], np.minimum(height_db[inside], _ENOUGH_DB))
    return np.asarray(scipy.ndimage.maximum_filter1d(salience, 2 * _NEAR_CENTS + 1))


def fit_law(k: NDArray[np.int64], freq_hz: Real, se_hz: Real) -> StiffString:
    """Fit f0 and B to partials, robustly.

    With u = (f_k / k)^2 the law is a straight line, u = f0^2 + f0^2 B k^2. A partial's variance is that of its own
    frequency plus a relative scatter common to all (the body's resonances push partials off the law), estimated from
    the median of the residuals; partials far off it lose their weight (biweight: Beaton & Tukey 1974, Technometrics
    16:147).

    Parameters
    ----------
    k : int array, shape (n,), n >= 1
    freq_hz, se_hz : arrays, shape (n,)
        Frequencies and their standard errors, Hz.

    Returns
    -------
    StiffString
        With B and its error unknown (0 and infinite) for a single partial.
    """
    if len(k) == 1:
        return StiffString(
            f0_hz=float(freq_hz[0] / k[0]), f0_se_hz=float(se_hz[0] / k[0]), b=0.0, b_se=float("inf"), scatter=0.0
        )
    u = (freq_hz / k) ** 2
    y = u / np.median(u)
    own = 2.0 * se_hz / freq_hz
    design = np.stack([np.ones(len(k)), np.square(k, dtype=np.float64)], axis=1)
    theta, covariance, scatter = _robust_line(design, y, own)
    if theta[1] < 0.0:
        flat, flat_covariance, scatter = _robust_line(design[:, :1], y, own)
        theta = np.array([flat[0], 0.0])
        # B's error stays that of the free fit: 0 is where the law ends, not what is known.
        covariance = np.diag([flat_covariance[0, 0], covariance[1, 1]])
    f0_hz = float(np.sqrt(theta[0] * np.median(u)))
    slope = np.array([-theta[1] / theta[0] ** 2, 1.0 / theta[0]])
    return StiffString(
        f0_hz=f0_hz,
        f0_se_hz=float(0.5 * f0_hz * np.sqrt(covariance[0, 0]) / theta[0]),
        b=float(theta[1] / theta[0]),
        b_se=float(np.sqrt(slope @ covariance @ slope)),
        scatter=0.5 * scatter,
    )


def _robust_line(design: Real, y: Real, own: Real) -> tuple[Real, Real, float]:
    """Coefficients, their covariance and the common scatter."""
    # From far off, so that the many that agree begin by outvoting the few that claim to be exact.
    scatter = float(np.median(np.abs(y - np.median(y)))) + float(np.median(own))
    theta, covariance = _line(design, y, 1.0 / (own**2 + scatter**2))
    for _ in range(12):
        rest = np.abs(y - design @ theta)
        before = scatter
        scatter = _scatter(rest, own, len(y) - design.shape[1])
        spread = np.sqrt(own**2 + scatter**2)
        robust = np.maximum(1.0 - (rest / (_TUKEY * spread)) ** 2, 0.0) ** 2 if len(y) > 4 else np.ones(len(y))
        theta, covariance = _line(design, y, robust / spread**2)
        if abs(scatter - before) <= 1e-2 * scatter + 1e-12:
            break
    return theta, covariance, scatter


def _line(design: Real, y: Real, weight: Real) -> tuple[Real, Real]:
    """Weighted least squares: coefficients and covariance."""
    # Scaled columns, or k^2 of a hundred partials would spoil the inversion.
    size = np.abs(design).max(axis=0)
    scaled = design / size
    covariance = np.linalg.pinv(scaled.T @ (weight[:, None] * scaled), hermitian=True)
    theta = covariance @ (scaled.T @ (weight * y))
    return theta / size, covariance / np.outer(size, size)


def _scatter(rest: Real, own: Real, freedom: int) -> float:
    """The common scatter that makes the median of the residuals as large, relative to their errors, as it should be."""
    if freedom < 1:
        return 0.0
    # For each residual the scatter (squared) at which it is as large as the median should be. Of n residuals of a fit
    # with p parameters, p may be zero whatever the scatter is: hence not quite the median.
    needed = np.sort((rest / _NORMAL_MEDIAN) ** 2 - own**2)
    return float(np.sqrt(max(0.0, needed[len(rest) - 1 - (freedom - 1) // 2])))
