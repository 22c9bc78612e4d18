"""The body curve: its spline basis, its reference level, its bands and the regions where it leaves zero.

Frequencies in Hz, levels in dB. The curve is a cubic B-spline over log2 frequency with a penalty on its coefficients
(Eilers & Marx 1996, Flexible smoothing with B-splines and penalties, *Statistical Science* 11), written as a mixed
model: a straight line and random deviations from it. The penalty is not on second differences but the inverse of a
Matern correlation of the coefficients (after Lindgren, Rue & Lindström 2011, *J. R. Stat. Soc. B* 73): bodies differ
in peaks a third of an octave to an octave wide. The bumps that make the curve have heights of their own scale
(:mod:`timbre_match.compare.sampling`), so that a lone peak is not shrunk to the size of the flat rest.

**Reference level.** Each note's gain is free, so the curve is known up to a constant only. The constant is chosen so
that zero is where most of what is heard lies: the densest of the curve's values, each counting for the loudness around
its frequency, is the mean of those within some 1.5 dB of it. A change of 4 dB or more hardly moves that level, be it as
broad as two fifths of the loudness; one of 1 to 3 dB moves it by up to 0.7 dB. What is scarcely heard does not move it.
A mean, or the middle of the sorted values, would be drawn towards each broad change, and noise in the curve would draw
it further.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import BSpline

Array = NDArray[np.float64]

GRID_PER_OCTAVE = 24
KNOTS_PER_OCTAVE = 6.0
WOBBLE_KNOTS_PER_OCTAVE = 3.0
CORRELATION_OCTAVES = 0.2

_DEGREE = 3
_SCALE_POINTS = 400
_REFERENCE_WIDTH_DB = 1.5  # wider than the noise of a curve, narrower than the changes that makers work for
_MEAN_SHIFTS = 50


@dataclass(frozen=True, kw_only=True, slots=True)
class Stretch:
    """Grid points `first` to `last` (inclusive) over which the curve lies on one side of zero."""

    first: int
    last: int


def spline_basis(octave: ArrayLike, low: float, high: float, knots_per_octave: float) -> Array:
    """Cubic B-splines on equal steps of log2 frequency from `low` to `high`.

    Returns
    -------
    array, shape (n, n_splines)
        Each row sums to one.
    """
    x = np.asarray(octave, dtype=np.float64)
    pieces = max(int(np.ceil((high - low) * knots_per_octave)), 1)
    step = max(high - low, 1e-6) / pieces
    knots = low + step * np.arange(-_DEGREE, pieces + _DEGREE + 1)
    inside = np.clip(x, low, low + step * pieces - 1e-12 * max(abs(high), 1.0))
    return np.asarray(BSpline.design_matrix(inside, knots, _DEGREE).toarray())


def smooth_columns(octave: ArrayLike, low: float, high: float) -> Array:
    """Columns whose independent unit-variance coefficients make a curve of unit variance.

    B L with L L' the Matern correlation (smoothness 5/2, length a fifth of an octave) of neighbouring spline
    coefficients. L is the symmetric root, so that each coefficient is the height of a bump at one place.

    Returns
    -------
    array, shape (n, n_splines)
    """
    basis = spline_basis(octave, low, high, KNOTS_PER_OCTAVE)
    place = np.arange(basis.shape[1]) / KNOTS_PER_OCTAVE
    scaled = np.sqrt(5.0) * np.abs(np.subtract.outer(place, place)) / CORRELATION_OCTAVES
    values, vectors = np.linalg.eigh((1.0 + scaled + scaled**2 / 3.0) * np.exp(-scaled))
    root = (vectors * np.sqrt(np.maximum(values, 0.0))) @ vectors.T
    return np.asarray(basis @ root / _mean_deviation(low, high, KNOTS_PER_OCTAVE, root))


def wobble_columns(octave: ArrayLike, low: float, high: float) -> Array:
    """Smooth columns, three an octave, whose independent unit-variance coefficients make a wobble of unit variance.

    At that distance places half an octave apart are correlated by about a quarter, as neighbouring half-octave bands
    (those of the table that the wobble's size comes from) are where independent ones are joined by straight lines.
    """
    basis = spline_basis(octave, low, high, WOBBLE_KNOTS_PER_OCTAVE)
    return np.asarray(basis / _mean_deviation(low, high, WOBBLE_KNOTS_PER_OCTAVE, np.eye(basis.shape[1])))


def _mean_deviation(low: float, high: float, knots_per_octave: float, root: Array) -> float:
    """Root-mean-square over the range of what unit coefficients make; the range decides, not where harmonics lie."""
    everywhere = spline_basis(np.linspace(low, high, _SCALE_POINTS), low, high, knots_per_octave) @ root
    return float(np.sqrt(np.mean(np.sum(everywhere**2, axis=1))))


def frequency_grid(freq_hz: Array) -> Array:
    """Grid from the lowest to the highest harmonic, at least 24 points an octave, Hz."""
    low, high = float(np.min(freq_hz)), float(np.max(freq_hz))
    points = max(int(np.ceil(GRID_PER_OCTAVE * np.log2(high / low))) + 1, 2)
    return np.asarray(np.geomspace(low, high, points))


def reference_level(curve_db: Array, loudness: Array) -> Array:
    """Where most of each curve lies, shape (n_curves,): the mode of its values, found by mean shift from the median.

    Mean shift (Fukunaga & Hostetler 1975, The estimation of the gradient of a density function, *IEEE Trans. Inf.
    Theory* 21) climbs to the densest value of a kernel estimate; here the kernel is normal, 1.5 dB wide.

    Parameters
    ----------
    curve_db : array, shape (n_curves, n_grid)
    loudness : array, shape (n_grid,)
        What each grid point counts for (:func:`timbre_match.compare.colour.loudness_over_frequency`).
    """
    order = np.argsort(curve_db, axis=1, kind="stable")
    half = np.argmax(np.cumsum(loudness[order], axis=1) >= 0.5 * np.sum(loudness), axis=1)
    level = np.take_along_axis(curve_db, np.take_along_axis(order, half[:, None], axis=1), axis=1)
    for _ in range(_MEAN_SHIFTS):
        weight = loudness * np.exp(-0.5 * ((curve_db - level) / _REFERENCE_WIDTH_DB) ** 2)
        level = np.sum(weight * curve_db, axis=1, keepdims=True) / np.sum(weight, axis=1, keepdims=True)
    return np.asarray(level[:, 0])


def simultaneous_factor(draws_db: Array, centre_db: Array, sd_db: Array, level: float = 0.95) -> float:
    """Multiple of the standard deviation within which whole curves stay, in `level` of the draws.

    Parameters
    ----------
    draws_db : array, shape (n_draws, n_grid)
    centre_db, sd_db : arrays, shape (n_grid,)
    """
    farthest = np.max(np.abs(draws_db - centre_db) / sd_db, axis=1)
    return float(np.quantile(farthest, level))


def stretches(side: NDArray[np.int64]) -> list[Stretch]:
    """Return the runs of grid points that lie on one side of zero: `side` (n_grid,) is 1 above, -1 below, else 0."""
    edges = np.flatnonzero(np.diff(side)) + 1
    starts = np.concatenate([[0], edges])
    ends = np.concatenate([edges - 1, [side.size - 1]])
    return [
        Stretch(first=int(first), last=int(last)) for first, last in zip(starts, ends, strict=True) if side[first] != 0
    ]
