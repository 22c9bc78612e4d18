r"""One mixed model for verdicts, body curve and regions.

The difference of harmonic k of note n, averaged over the takes of each side, is

.. math:: D_{nk} = a_n + c(x) + o_{nk} + (t + t_n)\,x + w(x) + e_{nk}, \qquad x = \log_2 f ,

with a free gain a_n, the body curve c (a penalised spline), the harmonic's own deviation o, a tilt t common to a
take, a tilt t_n of each note, a smooth wobble w common to a take, and scatter e. The difference that an instrument
maker asks for is c + o; the rest is playing. What the takes of one side differ among themselves obeys the same
equation without c and o, and informs the playing's variances. Those are found by maximising the restricted likelihood
of both (Patterson & Thompson 1971, *Biometrika* 58) times a prior on their logarithms, and their remaining
uncertainty is carried into every interval by sampling them (Laplace approximation). Given the variances, estimates
are best linear unbiased predictions (Robinson 1991, *Statistical Science* 6). Scatter and own deviations have heavy
tails: they are normal with a precision of each harmonic's own, updated as in Lange, Little & Taylor (1989, *JASA*
84).

The covariance is diagonal plus low rank (two columns a note, some sixty shared ones), so each evaluation costs
n_harmonics times n_shared^2 operations.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

SMOOTH, OWN, SCATTER, TAKE_TILT, NOTE_TILT, WOBBLE = range(6)
"""Places of the logarithms of the standard deviations in a parameter vector."""

_GAIN_SD_DB = 100.0
_SLOPE_SD_DB = 3.0
_TAIL_DF = 4.0
_WEIGHT_ROUNDS = 3
_STEP = 1e-3


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Row:
    """One vector of differences over (some of) the harmonics, and what scatters in it.

    Attributes
    ----------
    value_db : array, shape (n,)
    note : int array, shape (n,)
        Ascending note indices; `n_notes` of them.
    octave : array, shape (n,)
    smooth, wobble : arrays, shape (n, n_smooth) and (n, n_wobble)
        Columns of the body curve (n_smooth = 0 where the row holds takes of the same instrument) and of the wobble.
    scatter_variance : array, shape (n,)
        Variance of the scatter at unit scatter factor, dB^2.
    error_variance : array, shape (n,)
        Variance of the measurement itself, dB^2.
    repeat_df : array, shape (n,)
        Degrees of freedom of what repeats show of each harmonic's scatter.
    playing : float
        Variance of a take-wide effect in this row, in units of that of one take.
    count : float
        How often the row counts: m rows about a mean hold m - 1 independent ones.
    """

    value_db: Array
    note: IntArray
    n_notes: int
    octave: Array
    smooth: Array
    wobble: Array
    scatter_variance: Array
    error_variance: Array
    repeat_df: Array
    playing: float
    count: float = 1.0


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Weights:
    """Precisions of each harmonic's scatter and own deviation, relative to the common ones; arrays of shape (n,)."""

    scatter: Array
    own: Array


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Prior:
    """Normal prior of the six log standard deviations: `centre` and `sd`, arrays of shape (6,)."""

    centre: Array
    sd: Array


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
    scatter_variance: Array
    residual_db: Array
    leverage: Array
    log_likelihood: float
    gradient: Array
    columns: Array = field(repr=False)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Fit:
    """The model of one comparison: parameter samples, shape (n_samples, 6), and the solution at each of them."""

    best: Array
    samples: Array
    solutions: tuple[Solution, ...]
    weights: Weights


def fit(differences: Row, repeats: list[Row], prior: Prior, rng: np.random.Generator, samples: int = 16) -> Fit:
    """Fit the model to the differences of two sides and to the repeats within them.

    Parameters
    ----------
    differences : Row
        Instrument minus target.
    repeats : list of Row
        Takes less their mean, for every profile with at least two takes.
    prior : Prior
    rng : numpy Generator
    samples : int
        Parameter vectors drawn from the Laplace approximation.
    """
    ones = np.ones(differences.value_db.size)
    weights = Weights(scatter=ones, own=ones)
    theta = prior.centre
    for _ in range(_WEIGHT_ROUNDS):
        theta = _maximise(differences, repeats, prior, weights, theta)
        weights = _updated_weights(differences, solve(differences, theta, weights), weights)
    theta = _maximise(differences, repeats, prior, weights, theta)
    spread = _laplace_root(differences, repeats, prior, weights, theta)
    drawn = theta + rng.standard_normal((samples, theta.size)) @ spread.T
    return Fit(
        best=theta,
        samples=drawn,
        solutions=tuple(solve(differences, one, weights) for one in drawn),
        weights=weights,
    )


def solve(row: Row, theta: Array, weights: Weights | None = None) -> Solution:
    """Predictions, restricted log-likelihood and its gradient at the log standard deviations `theta`, shape (6,)."""
    variance = np.exp(2.0 * theta)
    has_curve = row.smooth.shape[1] > 0
    scatter = variance[SCATTER] * row.scatter_variance / (1.0 if weights is None else weights.scatter)
    own = variance[OWN] / (1.0 if weights is None else weights.own) if has_curve else np.zeros(scatter.shape)
    noise = scatter + row.error_variance
    total = noise + own
    pull = 1.0 / total
    x = row.octave
    shared = np.column_stack([x, row.wobble, x, row.smooth] if has_curve else [x, row.wobble])
    n_wobble, n_smooth = row.wobble.shape[1], row.smooth.shape[1]
    shared_variance = np.concatenate(
        [
            [variance[TAKE_TILT] * row.playing],
            np.full(n_wobble, variance[WOBBLE] * row.playing),
            np.full(1 if has_curve else 0, _SLOPE_SD_DB**2),
            np.full(n_smooth, variance[SMOOTH]),
        ]
    )
    note_variance = np.array([_GAIN_SD_DB**2, variance[NOTE_TILT] * row.playing])
    starts = np.flatnonzero(np.concatenate([[True], np.diff(row.note) > 0]))
    present = row.note[starts]

    def per_note(values: Array) -> Array:
        sums = np.zeros((row.n_notes, *values.shape[1:]))
        sums[present] = np.add.reduceat(values, starts, axis=0)
        return sums

    s0, s1, s2 = per_note(pull), per_note(pull * x), per_note(pull * x * x)
    s0, s2 = s0 + 1.0 / note_variance[0], s2 + 1.0 / note_variance[1]
    determinant = s0 * s2 - s1**2
    note_cov = np.stack([np.stack([s2, -s1], -1), np.stack([-s1, s0], -1)], -2) / determinant[:, None, None]
    weighted = shared * pull[:, None]
    cross = np.stack([per_note(weighted), per_note(weighted * x[:, None])], axis=1)
    slope = note_cov @ cross
    y = row.value_db
    note_right = np.stack([per_note(pull * y), per_note(pull * x * y)], axis=-1)
    offset = np.einsum("nij,nj->ni", note_cov, note_right)
    system = weighted.T @ shared - np.einsum("nip,niq->pq", cross, slope) + np.diag(1.0 / shared_variance)
    right = weighted.T @ y - np.einsum("nip,ni->p", cross, offset)
    factor = linalg.cho_factor(system, lower=True)
    covariance = linalg.cho_solve(factor, np.eye(system.shape[0]))
    effect = covariance @ right
    note_effect = offset - slope @ effect
    residual = y - shared @ effect - note_effect[row.note, 0] - note_effect[row.note, 1] * x
    reach = shared - slope[row.note, 0] - slope[row.note, 1] * x[:, None]
    local = note_cov[row.note]
    leverage = local[:, 0, 0] + 2.0 * local[:, 0, 1] * x + local[:, 1, 1] * x * x
    leverage = leverage + np.einsum("ip,ip->i", reach @ covariance, reach)
    log_det = (
        np.sum(np.log(total))
        + np.sum(np.log(determinant))
        + 2.0 * np.sum(np.log(np.diag(factor[0])))
        + np.sum(np.log(shared_variance))
        + row.n_notes * np.sum(np.log(note_variance))
    )
    quadratic = float(np.sum(pull * residual * y))
    return Solution(
        shared=effect,
        shared_cov=covariance,
        note_offset=offset,
        note_slope=slope,
        note_cov=note_cov,
        shrinkage=own * pull,
        scatter_variance=noise,
        residual_db=residual,
        leverage=leverage,
        log_likelihood=-0.5 * (float(log_det) + quadratic),
        gradient=_gradient(
            effect, covariance, shared_variance, note_effect, note_cov, slope, note_variance,
            (residual**2 + leverage) * pull**2 - pull, own, scatter, n_wobble, has_curve,
        ),
        columns=shared,
    )  # fmt: skip


def _gradient(
    effect: Array, covariance: Array, shared_variance: Array, note_effect: Array, note_cov: Array, slope: Array,
    note_variance: Array, per_harmonic: Array, own: Array, scatter: Array, n_wobble: int, has_curve: bool,
) -> Array:  # fmt: skip
    """Return the derivative of the restricted log-likelihood by each log standard deviation.

    For a group of p independent effects u with variance v it is (u'u + tr C) / v - p; C is their posterior covariance.
    """
    excess = (effect**2 + np.diag(covariance)) / shared_variance - 1.0
    tilt_cov = note_cov[:, 1, 1] + np.einsum("np,np->n", slope[:, 1] @ covariance, slope[:, 1])
    result = np.zeros(6)
    result[TAKE_TILT] = excess[0]
    result[WOBBLE] = np.sum(excess[1 : 1 + n_wobble])
    result[NOTE_TILT] = np.sum((note_effect[:, 1] ** 2 + tilt_cov) / note_variance[1] - 1.0)
    result[SCATTER] = np.sum(per_harmonic * scatter)
    if has_curve:
        result[SMOOTH] = np.sum(excess[2 + n_wobble :])
        result[OWN] = np.sum(per_harmonic * own)
    return result


def _objective(
    theta: Array, differences: Row, repeats: list[Row], prior: Prior, weights: Weights
) -> tuple[float, Array]:
    """Minus the log posterior of the parameters, and its gradient."""
    z = (theta - prior.centre) / prior.sd
    value = -0.5 * float(z @ z)
    gradient = -z / prior.sd
    for row, w in [(differences, weights), *((repeat, None) for repeat in repeats)]:
        solution = solve(row, theta, w)
        value += row.count * solution.log_likelihood
        gradient = gradient + row.count * solution.gradient
    return -value, -gradient


def _maximise(differences: Row, repeats: list[Row], prior: Prior, weights: Weights, start: Array) -> Array:
    bounds = list(zip(prior.centre - 5.0 * prior.sd, prior.centre + 5.0 * prior.sd, strict=True))
    found = optimize.minimize(
        _objective,
        start,
        args=(differences, repeats, prior, weights),
        jac=True,
        method="L-BFGS-B",
        bounds=bounds,
        options={"maxiter": 60, "ftol": 1e-7},
    )
    return np.asarray(found.x, dtype=np.float64)


def _updated_weights(row: Row, solution: Solution, old: Weights) -> Weights:
    """Return the expected precisions given the present residuals.

    What a harmonic deviates beyond the common variances goes to its own deviation and to its scatter. A single take
    cannot tell which of the two is odd, and each gets its share; where repeats show the scatter, it gets little.
    """
    rho = solution.shrinkage
    own = rho / (1.0 - rho) * solution.scatter_variance * old.own
    scatter = (solution.scatter_variance - row.error_variance) * old.scatter
    ratio = (solution.residual_db**2 + solution.leverage) / (own + scatter + row.error_variance)
    excess = (_TAIL_DF + ratio) / (_TAIL_DF + 1.0) - 1.0
    share = np.where(excess > 0, 1.0 / (1.0 + row.repeat_df**2), 1.0)
    to_scatter = share * excess * scatter
    to_own = excess * (own + scatter) - to_scatter
    return Weights(own=own / (own + to_own), scatter=scatter / (scatter + to_scatter))


def _laplace_root(differences: Row, repeats: list[Row], prior: Prior, weights: Weights, theta: Array) -> Array:
    """Square root, shape (6, 6), of the inverse curvature of the log posterior at its maximum."""
    columns = []
    for step in _STEP * np.eye(theta.size):
        ahead = _objective(theta + step, differences, repeats, prior, weights)[1]
        behind = _objective(theta - step, differences, repeats, prior, weights)[1]
        columns.append((ahead - behind) / (2.0 * _STEP))
    curvature = np.array(columns)
    values, vectors = np.linalg.eigh(0.5 * (curvature + curvature.T))
    # The prior alone bounds the curvature from below; where noise in the differences makes it less, the prior speaks.
    values = np.maximum(values, 0.25 / float(np.max(prior.sd)) ** 2)
    return np.asarray(vectors / np.sqrt(values))
