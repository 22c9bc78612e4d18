"""From the fitted model to estimates, standard deviations and draws of harmonics and curve.

Differences in dB, all from the same reference level (see :mod:`timbre_match.compare.body_curve`).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare.body_curve import reference_level
from timbre_match.compare.model import Row, Solution

Array = NDArray[np.float64]

FALSE_CURVE_RATE = 0.05
"""How often a curve is said to differ somewhere where nothing does, as far as the model knows the playing."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Estimates:
    """Differences of harmonics (n,) and of the curve on its grid (g,), with what is uncertain about them.

    Attributes
    ----------
    harmonic_db, harmonic_sd_db : arrays, shape (n,)
        Body curve plus the harmonic's own deviation, shrunk as far as its evidence is weak.
    curve_db, curve_sd_db : arrays, shape (g,)
    curve_significance : float
        How many of its standard deviations a curve must be off zero somewhere to differ from none at all: the playing
        alone reaches that in one comparison of twenty.
    harmonic_draws_db, curve_draws_db : arrays, shape (n_draws, n) and (n_draws, g)
        Joint draws of both.
    curve_at_harmonics_db : array, shape (n_draws, n)
        The same draws of the curve, at the harmonics' frequencies.
    scatter_variance, scatter_scale, own_variance, shared_variance : arrays, shape (n,)
        Variance of the harmonic's scatter, the squared scale of its distribution, variance of its own deviation before
        the data, and what curve, gains and tilts add to the uncertainty of its estimate; dB^2.
    """

    harmonic_db: Array
    harmonic_sd_db: Array
    curve_db: Array
    curve_sd_db: Array
    curve_significance: float
    harmonic_draws_db: Array
    curve_draws_db: Array
    curve_at_harmonics_db: Array
    scatter_variance: Array
    scatter_scale: Array
    own_variance: Array
    shared_variance: Array


def estimate(
    solutions: list[Solution],
    row: Row,
    grid_octave: Array,
    grid_smooth: Array,
    grid_loudness: Array,
    rng: np.random.Generator,
    *,
    harmonics: int,
    draws_per_solution: int = 16,
) -> Estimates:
    """Mix the solutions at all draws of the parameters.

    Parameters
    ----------
    solutions : list of Solution
        From :func:`timbre_match.compare.sampling.sample`.
    row : Row
        The differences that were fitted.
    grid_octave : array, shape (g,)
        log2 of the grid's frequencies, on the origin of `row.octave`.
    grid_smooth : array, shape (g, n_smooth)
        Columns of the curve on the grid.
    grid_loudness : array, shape (g,)
        What each point counts for in the reference level.
    rng : numpy Generator
    harmonics : int
        How many of the row's first values are the instrument's; a control's may follow.
    draws_per_solution : int
    """
    curve_part = slice(row.shared.curve_first, row.shared.curve_last)
    grid = np.column_stack([grid_octave, grid_smooth])
    reached = row.shared.matrix[:harmonics, curve_part]
    draws, curve_draws, reached_draws, played_curves = [], [], [], []
    for solution in solutions:
        shared = _shared_draws(solution, rng, draws_per_solution)
        curve = shared[:, curve_part] @ grid.T
        level = reference_level(curve, grid_loudness)[:, None]
        curve_draws.append(curve - level)
        reached_draws.append(shared[:, curve_part] @ reached.T - level)
        draws.append(_harmonic_draws(solution, row, shared, rng)[:, :harmonics] - level)
        played = _played_effects(solution, row, rng, draws_per_solution)[:, curve_part] @ grid.T
        played_curves.append(played - reference_level(played, grid_loudness)[:, None])
    harmonic, curve = np.concatenate(draws), np.concatenate(curve_draws)
    curve_sd_db = np.std(curve, axis=0)
    farthest = np.max(np.abs(np.concatenate(played_curves)) / curve_sd_db, axis=1)
    mine = slice(harmonics)
    own_part = np.mean([(solution.shrinkage * solution.noise_variance)[mine] for solution in solutions], axis=0)
    return Estimates(
        harmonic_db=np.mean(harmonic, axis=0),
        harmonic_sd_db=np.std(harmonic, axis=0),
        curve_db=np.mean(curve, axis=0),
        curve_sd_db=curve_sd_db,
        curve_significance=float(np.quantile(farthest, 1.0 - FALSE_CURVE_RATE)),
        harmonic_draws_db=harmonic,
        curve_draws_db=curve,
        curve_at_harmonics_db=np.concatenate(reached_draws),
        scatter_variance=np.mean([solution.noise_variance[mine] for solution in solutions], axis=0),
        # Precisions are gamma distributed about that of the scale.
        scatter_scale=1.0
        / np.mean([1.0 / (solution.noise_variance - row.error_variance)[mine] for solution in solutions], axis=0),
        own_variance=np.mean([solution.own_variance[mine] for solution in solutions], axis=0),
        shared_variance=np.maximum(np.var(harmonic, axis=0) - own_part, 0.0),
    )


def _shared_draws(solution: Solution, rng: np.random.Generator, count: int) -> Array:
    root = np.linalg.cholesky(solution.shared_cov)
    return np.asarray(solution.shared + rng.standard_normal((count, solution.shared.size)) @ root.T)


def _played_effects(solution: Solution, row: Row, rng: np.random.Generator, count: int) -> Array:
    """What the shared effects are estimated to be, shape (count, p), where there is playing and no body curve.

    With information F = C^-1 - V^-1 (C the posterior covariance, V the prior variances) the estimate is C r, and r has
    the covariance F + F V0 F, V0 being V without the curve's part (Robinson 1991, *Statistical Science* 6).
    """
    covariance, variance = solution.shared_cov, solution.shared_variance
    information = np.linalg.inv(covariance) - np.diag(1.0 / variance)
    played = variance.copy()
    played[row.shared.curve_first : row.shared.curve_last] = 0.0
    spread = covariance @ (information + information @ (played[:, None] * information)) @ covariance
    values, vectors = np.linalg.eigh(0.5 * (spread + spread.T))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    return np.asarray(rng.standard_normal((count, values.size)) @ root.T)


def _harmonic_draws(solution: Solution, row: Row, shared: Array, rng: np.random.Generator) -> Array:
    """Curve plus own deviation of each harmonic, shape (n_draws, n), given draws of the shared effects.

    The own deviation has the mean shrinkage times (value - everything fitted).
    """
    count = shared.shape[0]
    curve_part = slice(row.shared.curve_first, row.shared.curve_last)
    noise = np.einsum(
        "nij,dnj->dni", np.linalg.cholesky(solution.note_cov), rng.standard_normal((count, row.note_playing.size, 2))
    )
    note = solution.note_offset - np.einsum("nip,dp->dni", solution.note_slope, shared) + noise
    fitted = shared @ row.shared.matrix.T + note[:, row.note, 0] + note[:, row.note, 1] * row.octave
    own_sd = np.sqrt(solution.shrinkage * solution.noise_variance)
    own = solution.shrinkage * (row.value_db - fitted) + own_sd * rng.standard_normal((count, row.octave.size))
    return np.asarray(shared[:, curve_part] @ row.shared.matrix[:, curve_part].T + own)
