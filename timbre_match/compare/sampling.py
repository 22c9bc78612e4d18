r"""Draws from the model: variances, heavy tails and effects together.

Scatter, own deviations, and the slope and bumps of the body curve have heavy tails: each is normal with a precision of
its own that is gamma distributed about the common one, which makes it Student t (West 1987, On scale mixtures of normal
distributions, *Biometrika* 74). So one odd level does not bend the curve, and one strong bump does not have to share
its size with a flat rest: a curve of bumps whose heights are heavy-tailed is smooth where nothing happens and free
where something does (Wallin & Bolin 2015, Geostatistical modelling using non-Gaussian Matern fields, *Scandinavian
Journal of Statistics* 42). Whether a harmonic's deviation is its own or scatter is decided by what repeats show of its
scatter: the precision of the scatter is a gamma variable with that many degrees of freedom.

The draws are those of a Gibbs sampler (Gelfand & Smith 1990, Sampling-based approaches to calculating marginal
densities, *JASA* 85): variances by a Metropolis step with all effects integrated out, then effects given the variances,
then precisions given the effects, in the order that keeps it valid (van Dyk & Park 2008, Partially collapsed Gibbs
samplers, *JASA* 103); and the variances once more given everything else.
"""

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare import model
from timbre_match.compare.model import Prior, Row, Solution, Weights

Array = NDArray[np.float64]

OWN_TAIL_DF = 4.0
CURVE_TAIL_DF = 2.0

BURN_IN = 60
ROUNDS = 240
THINNING = 3
METROPOLIS_EVERY = 2

_METROPOLIS_SCALE = 2.38
"""Proposals are this, over the root of the number of parameters, times the posterior's spread (Gelman, Roberts & Gilks
1996, Efficient Metropolis jumping rules, *Bayesian Statistics* 5)."""

_GRID = np.linspace(-4.0, 4.0, 81)


def sample(row: Row, prior: Prior, rng: np.random.Generator) -> list[Solution]:
    """Solutions of the model at draws of everything that they depend on.

    Parameters
    ----------
    row : Row
        Instrument minus target.
    prior : Prior
        Of the log standard deviations, what repeats say included.
    rng : numpy Generator

    Returns
    -------
    list of Solution
        Between them they hold the uncertainty of variances and precisions; each holds that of the effects.
    """
    weights = model.even_weights(row)
    mode = model.informed_prior([row], prior)
    theta = mode.centre
    jump = np.linalg.inv(np.linalg.cholesky(mode.precision)).T * _METROPOLIS_SCALE / np.sqrt(theta.size)
    kept = []
    for turn in range(BURN_IN + ROUNDS):
        solution = model.solve(row, theta, weights)
        if turn % METROPOLIS_EVERY == 0:
            proposal = theta + jump @ rng.standard_normal(theta.size)
            proposed = model.solve(row, proposal, weights)
            gain = proposed.log_likelihood - solution.log_likelihood
            gain += _log_prior(prior, proposal) - _log_prior(prior, theta)
            if np.log(rng.uniform()) < gain:
                theta, solution = proposal, proposed
        if turn >= BURN_IN and turn % THINNING == 0:
            kept.append(solution)
        theta, weights = _given_effects(row, prior, theta, weights, solution, rng)
    return kept


def _log_prior(prior: Prior, theta: Array) -> float:
    away = theta - prior.centre
    return -0.5 * float(away @ prior.precision @ away)


def _given_effects(
    row: Row, prior: Prior, theta: Array, weights: Weights, solution: Solution, rng: np.random.Generator
) -> tuple[Array, Weights]:
    """Draw the effects, then the precisions and the parameters given them."""
    shared = solution.shared + np.linalg.cholesky(solution.shared_cov) @ rng.standard_normal(solution.shared.size)
    noise = np.einsum(
        "nij,nj->ni", np.linalg.cholesky(solution.note_cov), rng.standard_normal(solution.note_offset.shape)
    )
    note = solution.note_offset - solution.note_slope @ shared + noise
    left = model.residual(row, shared, note)
    variance = np.exp(2.0 * theta)
    own_variance, scatter_variance = _exchanged(row, variance, solution, rng)
    noise_variance = scatter_variance + row.error_variance
    rho = own_variance / (own_variance + noise_variance)
    own = rho * left + np.sqrt(rho * noise_variance) * rng.standard_normal(left.size)
    share = scatter_variance / noise_variance
    scatter = share * (left - own) + np.sqrt(share * row.error_variance) * rng.standard_normal(left.size)

    own_square = own**2
    scatter_square = scatter**2 / row.scatter_variance
    columns = row.shared
    column_square = shared**2 / columns.unit
    curve = (columns.group == model.SMOOTH) | (columns.group == model.FIXED)
    common = np.where(columns.group == model.SMOOTH, variance[model.SMOOTH], 1.0)
    curve_weights = np.ones(shared.size)
    curve_weights[curve] = _precisions((column_square / common)[curve], CURVE_TAIL_DF, rng)
    drawn = Weights(
        own=_precisions(own_square / variance[model.OWN], OWN_TAIL_DF, rng),
        scatter=_precisions(scatter_square / variance[model.SCATTER], row.scatter_df, rng),
        columns=curve_weights,
    )
    count = np.array([np.count_nonzero(columns.group == place) for place in range(6)], dtype=np.float64)
    square = np.array([np.sum((column_square * curve_weights)[columns.group == place]) for place in range(6)])
    count[model.OWN], square[model.OWN] = left.size, np.sum(own_square * drawn.own)
    count[model.SCATTER], square[model.SCATTER] = left.size, np.sum(scatter_square * drawn.scatter)
    count[model.NOTE_TILT], square[model.NOTE_TILT] = note.shape[0], np.sum(note[:, 1] ** 2 / row.note_playing)
    return _parameters(prior, theta, count, square, rng), drawn


def _exchanged(row: Row, variance: Array, solution: Solution, rng: np.random.Generator) -> tuple[Array, Array]:
    """Each harmonic's variances of own deviation and of scatter, exchanged where a Metropolis step says so.

    A far-off harmonic may owe that to either; its residual, with the deviation integrated out, hangs on their sum
    alone. Without the exchange the sampler would stay with whichever it tried first.
    """
    own, scatter = solution.own_variance, solution.noise_variance - row.error_variance
    ratio = (
        _log_inverse_gamma(scatter, OWN_TAIL_DF, variance[model.OWN])
        + _log_inverse_gamma(own, row.scatter_df, variance[model.SCATTER] * row.scatter_variance)
        - _log_inverse_gamma(own, OWN_TAIL_DF, variance[model.OWN])
        - _log_inverse_gamma(scatter, row.scatter_df, variance[model.SCATTER] * row.scatter_variance)
    )
    exchange = np.log(rng.uniform(size=own.size)) < ratio
    return np.where(exchange, scatter, own), np.where(exchange, own, scatter)


def _log_inverse_gamma(value: Array, df: Array | float, scale: Array | float) -> Array:
    """Log density of a variance known with `df` degrees of freedom about `scale`, less what does not hang on it."""
    return np.asarray(-(np.asarray(df) / 2.0 + 1.0) * np.log(value) - np.asarray(df) * scale / (2.0 * value))


def _precisions(square: Array, df: Array | float, rng: np.random.Generator) -> Array:
    """Gamma draws of the precision of one normal value each, whose square over the common variance is given."""
    return np.asarray(2.0 * rng.standard_gamma((np.asarray(df) + 1.0) / 2.0, square.shape) / (df + square))


def _parameters(prior: Prior, theta: Array, count: Array, square: Array, rng: np.random.Generator) -> Array:
    """Each log standard deviation in turn, given the sum of squares of `count` effects, on a fine grid."""
    theta = theta.copy()
    for place in range(theta.size):
        precision = prior.precision[place, place]
        away = theta - prior.centre
        centre = prior.centre[place] - (prior.precision[place] @ away - precision * away[place]) / precision
        # The data's curvature is at most 2 count; the grid is as fine as what is known.
        middle, width = centre, 1.0 / np.sqrt(precision)
        if count[place] > 0:
            best = 0.5 * np.log(max(square[place], 1e-12) / count[place])
            known = 2.0 * count[place]
            middle = (known * best + precision * centre) / (known + precision)
            width = 1.0 / np.sqrt(0.5 * known + precision)
        grid = middle + width * 2.0 * _GRID
        density = -count[place] * grid - 0.5 * square[place] * np.exp(-2.0 * grid)
        density = density - 0.5 * precision * (grid - centre) ** 2
        total = np.cumsum(np.exp(density - np.max(density)))
        theta[place] = np.interp(rng.uniform() * total[-1], total, grid + 0.5 * (grid[1] - grid[0]))
    return theta
