r"""A mixed model for decay times: what belongs to the instrument, what to a take, what to chance.

The natural logarithm of the decay time of harmonic k of note n, instrument less target, averaged over the takes of each
side, is

.. math:: D_{nk} = \mu + c(x) + g_n + o_{nk} + \bar s + \bar t_n + \bar e_{nk}, \qquad x = \log_2 f ,

with a shift :math:`\mu`, a curve c, a shift g of each note (a dead spot, a string), the harmonic's own deviation o; and
what the hand does: a shift s of each take, a shift t of each note of each take, and scatter e. What a maker asks for is
the sum of the first four. How takes of one side differ among themselves is written as contrasts (Helmert's, of the
takes that have the harmonic): these obey the same equation without the first four, and their scatter is independent of
that of the mean. Differences and contrasts are fitted together.

At given variances the estimates are best linear unbiased predictions (Robinson 1991, *Statistical Science* 6); the
logarithms of the standard deviations have normal priors and a restricted likelihood (Patterson & Thompson 1971,
*Biometrika* 58), from whose product they are drawn by importance sampling about its maximum.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

FIXED = -1
TAKE, TAKE_NOTE, NOTE, SMOOTH, OWN, SCATTER = range(6)
"""Places of the logarithms of the standard deviations in a parameter vector; FIXED columns have none."""

_DRAWS = 120
_STEP = 1e-3
_WIDER = 1.15


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Rows:
    """Differences, shape (n,), and contrasts of takes, shape (m,), with the effects that they share.

    Attributes
    ----------
    value : array, shape (n,)
        Differences of log decay times.
    matrix : array, shape (n, p)
        The shared effects in each difference.
    scatter : array, shape (n,)
        Variance of each difference's scatter, in units of the common one.
    contrast, contrast_matrix, contrast_scatter : arrays, shapes (m,), (m, p), (m,)
        The same of the contrasts.
    group : int array, shape (p,)
        Which parameter rules each effect, or FIXED.
    unit : array, shape (p,)
        Variance of each effect in units of its parameter's; that variance itself where FIXED.
    instrument : bool array, shape (p,)
        Which effects belong to the instrument and not to the hand.
    """

    value: Array
    matrix: Array
    scatter: Array
    contrast: Array
    contrast_matrix: Array
    contrast_scatter: Array
    group: IntArray
    unit: Array
    instrument: NDArray[np.bool_]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Prior:
    """Normal distributions of the six log standard deviations, shape (6,) each."""

    centre: Array
    sd: Array


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Fit:
    """What is known of the differences, all as natural logarithms.

    Attributes
    ----------
    mean, sd : arrays, shape (n,)
        Of each harmonic's difference.
    scatter_share : array, shape (n,)
        How much of its variance is the harmonic's own scatter.
    effects : array, shape (draws, p)
        Joint draws of the shared effects.
    harmonics : array, shape (draws, n)
        The same draws of the harmonics' differences.
    """

    mean: Array
    sd: Array
    scatter_share: Array
    effects: Array
    harmonics: Array


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Sums:
    """What the contrasts contribute at unit scatter, summed once."""

    square: Array
    cross: Array
    value: float
    log_scatter: float


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Solution:
    """Predictions at given variances; `factor` is the lower Cholesky factor of the effects' precision."""

    effect: Array
    factor: Array
    effect_variance: Array
    own: float
    noise: Array
    log_density: float

    @property
    def root(self) -> Array:
        """A matrix whose product with its transpose is the covariance of the effects."""
        return np.asarray(linalg.solve_triangular(self.factor, np.eye(len(self.factor)), lower=True).T)


def fit(rows: Rows, prior: Prior, rng: np.random.Generator, *, draws_each: int = 12) -> Fit:
    """Fit the model.

    Parameters
    ----------
    rows : Rows
    prior : Prior
    rng : numpy Generator
    draws_each : int
        Draws of the effects at each draw of the variances.
    """
    sums = _summed(rows)
    reach = rows.matrix * rows.instrument
    means, variances, shares, counts, effects, harmonics = [], [], [], [], [], []
    for theta, count in _draw_parameters(rows, sums, prior, rng):
        one = _solve(rows, sums, prior, theta)
        root = one.root
        rho = one.own / (one.own + one.noise)
        # The own deviation takes its share of what the effects leave: instrument part + rho (value - everything).
        through = reach - rho[:, None] * rows.matrix
        lone = rho * one.noise
        spread = through @ root
        counts.append(count)
        means.append(through @ one.effect + rho * rows.value)
        variances.append(np.einsum("np,np->n", spread, spread) + lone)
        shares.append(rho**2 * one.noise / np.maximum(variances[-1], 1e-300))
        size = count * draws_each
        drawn = one.effect + rng.standard_normal((size, one.effect.size)) @ root.T
        effects.append(drawn)
        harmonics.append(drawn @ through.T + rho * rows.value + np.sqrt(lone) * rng.standard_normal((size, lone.size)))
    mean = np.average(means, axis=0, weights=counts)
    between = np.average((np.array(means) - mean) ** 2, axis=0, weights=counts)
    return Fit(
        mean=mean,
        sd=np.sqrt(np.average(variances, axis=0, weights=counts) + between),
        scatter_share=np.clip(np.average(shares, axis=0, weights=counts), 0.0, 1.0),
        effects=np.concatenate(effects),
        harmonics=np.concatenate(harmonics),
    )


def helmert(count: int) -> Array:
    """Contrasts of `count` values: shape (count - 1, count), of unit length, orthogonal to each other and the mean."""
    rows = np.zeros((max(count - 1, 0), count))
    for place in range(count - 1):
        rows[place, : place + 1] = 1.0
        rows[place, place + 1] = -(place + 1.0)
        rows[place] /= np.sqrt((place + 1.0) * (place + 2.0))
    return rows


def _summed(rows: Rows) -> _Sums:
    pulled = rows.contrast_matrix / rows.contrast_scatter[:, None]
    return _Sums(
        square=pulled.T @ rows.contrast_matrix,
        cross=pulled.T @ rows.contrast,
        value=float(np.sum(rows.contrast**2 / rows.contrast_scatter)),
        log_scatter=float(np.sum(np.log(rows.contrast_scatter))),
    )


def _solve(rows: Rows, sums: _Sums, prior: Prior, theta: Array) -> _Solution:
    """Predictions and log posterior density at the log standard deviations `theta`."""
    variance = np.exp(2.0 * theta)
    own, common = float(variance[OWN]), float(variance[SCATTER])
    noise = common * rows.scatter
    total = own + noise
    effect_variance = np.where(rows.group == FIXED, 1.0, variance[rows.group]) * rows.unit
    pulled = rows.matrix / total[:, None]
    system: Array = pulled.T @ rows.matrix + sums.square / common + np.diag(1.0 / effect_variance)
    factor = np.asarray(np.linalg.cholesky(system), dtype=np.float64)
    right = pulled.T @ rows.value + sums.cross / common
    effect = linalg.cho_solve((factor, True), right, check_finite=False)
    log_det = (
        np.sum(np.log(total))
        + rows.contrast.size * np.log(common)
        + sums.log_scatter
        + 2.0 * np.sum(np.log(np.diag(factor)))
        + np.sum(np.log(effect_variance))
    )
    square = float(np.sum(rows.value**2 / total)) + sums.value / common - float(right @ effect)
    away = (theta - prior.centre) / prior.sd
    return _Solution(
        effect=effect,
        factor=factor,
        effect_variance=effect_variance,
        own=own,
        noise=noise,
        log_density=-0.5 * (float(log_det) + square + float(away @ away)),
    )


def _slope(rows: Rows, sums: _Sums, prior: Prior, theta: Array, one: _Solution) -> Array:
    """Return the derivative of the log posterior density by each log standard deviation, shape (6,).

    For a group of p independent effects u with variance v it is (u'u + tr C) / v - p; C is their posterior covariance.
    """
    root, effect = one.root, one.effect
    total = one.own + one.noise
    spread = rows.matrix @ root
    left = (rows.value - rows.matrix @ effect) ** 2 + np.einsum("np,np->n", spread, spread)
    tension = (left / total - 1.0) / total
    covariance = root @ root.T
    excess = (effect**2 + np.diag(covariance)) / one.effect_variance - 1.0
    slope = np.array([np.sum(excess[rows.group == place]) for place in range(6)])
    slope[OWN] = one.own * np.sum(tension)
    contrasts = sums.value - 2.0 * effect @ sums.cross + effect @ sums.square @ effect
    contrasts += np.sum(sums.square * covariance)
    slope[SCATTER] = np.sum(tension * one.noise) + contrasts / np.exp(2.0 * theta[SCATTER]) - rows.contrast.size
    return np.asarray(slope - (theta - prior.centre) / prior.sd**2)


def _draw_parameters(rows: Rows, sums: _Sums, prior: Prior, rng: np.random.Generator) -> list[tuple[Array, int]]:
    """Draws of the log standard deviations, shape (6,), each with how often it was drawn.

    From a normal distribution about the maximum, weighted by what the density is over that, and drawn anew.
    """

    def objective(theta: Array) -> tuple[float, Array]:
        one = _solve(rows, sums, prior, theta)
        return -one.log_density, -_slope(rows, sums, prior, theta, one)

    reach = 4.0 * prior.sd
    found = optimize.minimize(
        objective,
        prior.centre,
        jac=True,
        method="L-BFGS-B",
        bounds=list(zip(prior.centre - reach, prior.centre + reach, strict=True)),
        options={"maxiter": 50, "ftol": 1e-8},
    )
    centre: Array = np.asarray(found.x, dtype=np.float64)
    columns = [
        (objective(centre + step)[1] - objective(centre - step)[1]) / (2.0 * _STEP)
        for step in _STEP * np.eye(centre.size)
    ]
    values, vectors = np.linalg.eigh(0.5 * (np.array(columns) + np.array(columns).T))
    # Where the likelihood is flat or bends the wrong way, the prior alone bounds what is tried.
    spread = vectors * (_WIDER / np.sqrt(np.maximum(values, 1.0 / np.max(prior.sd) ** 2)))
    steps = rng.standard_normal((_DRAWS, centre.size))
    tried = centre + steps @ spread.T
    weight = np.array([_solve(rows, sums, prior, theta).log_density for theta in tried])
    weight += 0.5 * np.sum(steps**2, axis=1)
    share = np.cumsum(np.exp(weight - np.max(weight)))
    # Systematic resampling: as even as draws can be.
    places = np.searchsorted(share, share[-1] * (np.arange(_DRAWS) + rng.uniform()) / _DRAWS)
    kept, counts = np.unique(np.minimum(places, _DRAWS - 1), return_counts=True)
    return [(tried[place], int(count)) for place, count in zip(kept, counts, strict=True)]
