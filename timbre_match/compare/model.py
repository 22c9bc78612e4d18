r"""One mixed model for verdicts, body curve and regions.

The difference of harmonic k of note n, averaged over the takes of each side, is

.. math:: D_{nk} = a_n + c(x) + o_{nk} + (t + t_n)\,x + w(x) + e_{nk}, \qquad x = \log_2 f ,

with a free gain a_n, the body curve c, the harmonic's own deviation o, a tilt t common to a take, a tilt t_n of each
note, a smooth wobble w common to a take, and scatter e. The difference that an instrument maker asks for is c + o; the
rest is playing. What the takes of one side differ among themselves obeys the same equation without c and o, and informs
the playing's variances.

At given variances the estimates are best linear unbiased predictions (Robinson 1991, *Statistical Science* 6), and the
variances have a restricted likelihood (Patterson & Thompson 1971, *Biometrika* 58); this module computes both, and the
slope of the likelihood. The repeats' likelihood times the prior is summed up as a normal distribution of the logarithms
(Laplace approximation); :mod:`timbre_match.compare.sampling` goes on from there.

The covariance is diagonal plus low rank (two columns a note, some eighty shared ones), so each evaluation costs
n_harmonics times n_shared^2 operations.
"""

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

SMOOTH, OWN, SCATTER, TAKE_TILT, NOTE_TILT, WOBBLE = range(6)
"""Places of the logarithms of the standard deviations in a parameter vector."""

FIXED = -1
"""Group of a column whose variance is no parameter."""

_GAIN_SD_DB = 100.0
_SLOPE_DB = 0.7  # per octave; a scale and not a standard deviation, since the slope has heavy tails too
_STEP = 1e-3


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Columns:
    """Effects that harmonics share: `matrix` (n, p), and the variance of each column's effect.

    That variance is `unit` (p,) times the parameter that `group` (p,) names, or `unit` itself in dB^2 where the group
    is :data:`FIXED`. Columns from `curve_first` up to `curve_last` make the body curve: its slope, then its bumps.
    """

    matrix: Array
    group: IntArray
    unit: Array
    curve_first: int
    curve_last: int


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Row:
    """One vector of differences over (some of) the harmonics, and what scatters in it.

    Attributes
    ----------
    value_db : array, shape (n,)
    note : int array, shape (n,)
        Ascending note indices.
    octave : array, shape (n,)
    shared : Columns
    note_playing : array, shape (n_notes,)
        Variance of a note's own tilt, in units of that of one take.
    own : bool
        Whether the harmonics have deviations of their own; takes of the same instrument have none.
    scatter_variance : array, shape (n,)
        Variance of the scatter at unit scatter factor, dB^2.
    scatter_df : array, shape (n,)
        Degrees of freedom with which each harmonic's scatter variance is known.
    error_variance : array, shape (n,)
        Variance of the measurement itself, dB^2.
    count : float
        How often the row counts: m rows about a mean hold m - 1 independent ones.
    """

    value_db: Array
    note: IntArray
    octave: Array
    shared: Columns
    note_playing: Array
    own: bool
    scatter_variance: Array
    scatter_df: Array
    error_variance: Array
    count: float = 1.0


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Weights:
    """Precisions relative to the common ones: of scatter and own deviations (n,), and of the columns' effects (p,)."""

    scatter: Array
    own: Array
    columns: Array


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Prior:
    """Normal distribution of the six log standard deviations: `centre`, shape (6,), and `precision`, shape (6, 6)."""

    centre: Array
    precision: Array


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Solution:
    """Predictions of one row at given variances, in the form that intervals and draws need.

    With the notes' effects eliminated, shared effects are normal with mean `shared` and covariance `shared_cov`; given
    them, note n's gain and tilt have the mean `note_offset[n] - note_slope[n] @ shared` and covariance `note_cov[n]`.
    """

    shared: Array
    shared_cov: Array
    note_offset: Array
    note_slope: Array
    note_cov: Array
    shrinkage: Array
    own_variance: Array
    noise_variance: Array
    log_likelihood: float
    shared_variance: Array = field(repr=False)
    note_variance: Array = field(repr=False)


def playing_columns(octave: Array, wobble: Array, playing: float) -> Columns:
    """Tilt and wobble of a take (or of a difference of means of takes, with `playing` times its variance)."""
    matrix = np.column_stack([octave, wobble])
    group = np.array([TAKE_TILT] + [WOBBLE] * wobble.shape[1])
    none = matrix.shape[1]
    return Columns(matrix=matrix, group=group, unit=np.full(none, playing), curve_first=none, curve_last=none)


def joined(parts: list[Columns]) -> Columns:
    """Columns of the playing of several differences, side by side."""
    matrix = np.concatenate([part.matrix for part in parts], axis=1)
    none = matrix.shape[1]
    return Columns(
        matrix=matrix,
        group=np.concatenate([part.group for part in parts]),
        unit=np.concatenate([part.unit for part in parts]),
        curve_first=none,
        curve_last=none,
    )


def with_curve(columns: Columns, octave: Array, smooth: Array) -> Columns:
    """Add a curve, slope and bumps (n, n_smooth), which from now on is the body curve."""
    first = columns.matrix.shape[1]
    return Columns(
        matrix=np.column_stack([columns.matrix, octave, smooth]),
        group=np.concatenate([columns.group, [FIXED], np.full(smooth.shape[1], SMOOTH)]),
        unit=np.concatenate([columns.unit, [_SLOPE_DB**2], np.ones(smooth.shape[1])]),
        curve_first=first,
        curve_last=first + 1 + smooth.shape[1],
    )


def even_weights(row: Row) -> Weights:
    """Weights of one for everything."""
    ones = np.ones(row.value_db.size)
    return Weights(scatter=ones, own=ones, columns=np.ones(row.shared.group.size))


def solve(row: Row, theta: Array, weights: Weights) -> Solution:
    """Predictions and restricted log-likelihood at the log standard deviations `theta`, shape (6,)."""
    variance = np.exp(2.0 * theta)
    scatter = variance[SCATTER] * row.scatter_variance / weights.scatter
    own = variance[OWN] / weights.own if row.own else np.zeros(scatter.shape)
    noise = scatter + row.error_variance
    total = noise + own
    pull = 1.0 / total
    x, y = row.octave, row.value_db
    columns = row.shared
    shared_variance = np.where(columns.group == FIXED, 1.0, variance[columns.group]) * columns.unit / weights.columns
    note_variance = np.stack(
        [np.full(row.note_playing.size, _GAIN_SD_DB**2), variance[NOTE_TILT] * row.note_playing], axis=-1
    )
    s0, s1, s2 = (_per_note(row, pull * x**power) for power in range(3))
    s0, s2 = s0 + 1.0 / note_variance[:, 0], s2 + 1.0 / note_variance[:, 1]
    determinant = s0 * s2 - s1**2
    note_cov = np.stack([np.stack([s2, -s1], -1), np.stack([-s1, s0], -1)], -2) / determinant[:, None, None]
    root = columns.matrix * np.sqrt(pull)[:, None]
    weighted = columns.matrix * pull[:, None]
    cross = np.stack([_per_note(row, weighted), _per_note(row, weighted * x[:, None])], axis=1)
    slope = note_cov @ cross
    offset = np.einsum("nij,nj->ni", note_cov, np.stack([_per_note(row, pull * y), _per_note(row, pull * x * y)], -1))
    size = shared_variance.size
    flat_cross = cross.reshape(-1, size)
    system = root.T @ root - flat_cross.T @ slope.reshape(-1, size) + np.diag(1.0 / shared_variance)
    right = weighted.T @ y - flat_cross.T @ offset.reshape(-1)
    factor = linalg.cho_factor(system, lower=True, check_finite=False)
    covariance = linalg.cho_solve(factor, np.eye(size), check_finite=False)
    effect = covariance @ right
    log_det = (
        np.sum(np.log(total))
        + np.sum(np.log(determinant))
        + 2.0 * np.sum(np.log(np.diag(factor[0])))
        + np.sum(np.log(shared_variance))
        + np.sum(np.log(note_variance))
    )
    solution = Solution(
        shared=effect,
        shared_cov=covariance,
        note_offset=offset,
        note_slope=slope,
        note_cov=note_cov,
        shrinkage=own * pull,
        own_variance=own,
        noise_variance=noise,
        log_likelihood=0.0,
        shared_variance=shared_variance,
        note_variance=note_variance,
    )
    quadratic = float(np.sum(pull * residual(row, effect, offset - slope @ effect) * y))
    return replace(solution, log_likelihood=-0.5 * (float(log_det) + quadratic))


def residual(row: Row, shared: Array, note_effect: Array) -> Array:
    """What shared effects (p,) and the notes' gains and tilts (n_notes, 2) leave of the values, shape (n,)."""
    return np.asarray(
        row.value_db - row.shared.matrix @ shared - note_effect[row.note, 0] - note_effect[row.note, 1] * row.octave
    )


def gradient(row: Row, solution: Solution) -> Array:
    """Return the derivative of the restricted log-likelihood by each log standard deviation, shape (6,).

    For a group of p independent effects u with variance v it is (u'u + tr C) / v - p; C is their posterior covariance.
    """
    x, slope, covariance = row.octave, solution.note_slope, solution.shared_cov
    note_effect = solution.note_offset - slope @ solution.shared
    left = residual(row, solution.shared, note_effect)
    reach = row.shared.matrix - slope[row.note, 0] - slope[row.note, 1] * x[:, None]
    local = solution.note_cov[row.note]
    leverage = local[:, 0, 0] + 2.0 * local[:, 0, 1] * x + local[:, 1, 1] * x * x
    leverage = leverage + np.einsum("ip,ip->i", reach @ covariance, reach)
    pull = 1.0 / (solution.own_variance + solution.noise_variance)
    per_harmonic = (left**2 + leverage) * pull**2 - pull
    excess = (solution.shared**2 + np.diag(covariance)) / solution.shared_variance - 1.0
    tilt_cov = solution.note_cov[:, 1, 1] + np.einsum("np,np->n", slope[:, 1] @ covariance, slope[:, 1])
    result = np.array([np.sum(excess[row.shared.group == place]) for place in range(6)])
    result[NOTE_TILT] = np.sum((note_effect[:, 1] ** 2 + tilt_cov) / solution.note_variance[:, 1] - 1.0)
    result[SCATTER] = np.sum(per_harmonic * (solution.noise_variance - row.error_variance))
    result[OWN] = np.sum(per_harmonic * solution.own_variance)
    return result


def informed_prior(rows: list[Row], prior: Prior) -> Prior:
    """Normal approximation of prior times the rows' likelihoods, at their maximum (Laplace)."""
    if not rows:
        return prior
    weights = [even_weights(row) for row in rows]

    def objective(theta: Array) -> tuple[float, Array]:
        away = theta - prior.centre
        value = -0.5 * float(away @ prior.precision @ away)
        slope = -prior.precision @ away
        for row, even in zip(rows, weights, strict=True):
            solution = solve(row, theta, even)
            value += row.count * solution.log_likelihood
            slope = slope + row.count * gradient(row, solution)
        return -value, -slope

    reach = 5.0 / np.sqrt(np.diag(prior.precision))
    found = optimize.minimize(
        objective,
        prior.centre,
        jac=True,
        method="L-BFGS-B",
        bounds=list(zip(prior.centre - reach, prior.centre + reach, strict=True)),
        options={"maxiter": 60, "ftol": 1e-7},
    )
    centre = np.asarray(found.x, dtype=np.float64)
    columns = [
        (objective(centre + step)[1] - objective(centre - step)[1]) / (2.0 * _STEP)
        for step in _STEP * np.eye(centre.size)
    ]
    values, vectors = np.linalg.eigh(0.5 * (np.array(columns) + np.array(columns).T))
    # The prior bounds the curvature from below; where noise in the differences makes it less, the prior speaks.
    values = np.maximum(values, 0.25 * float(np.min(np.diag(prior.precision))))
    return Prior(centre=centre, precision=(vectors * values) @ vectors.T)


def _per_note(row: Row, values: Array) -> Array:
    sums = np.zeros((row.note_playing.size, *values.shape[1:]))
    starts = np.flatnonzero(np.concatenate([[True], np.diff(row.note) > 0]))
    sums[row.note[starts]] = np.add.reduceat(values, starts, axis=0)
    return sums
