"""From the fitted model to estimates, standard deviations and draws of harmonics and curve.

Differences in dB, all from the same reference level (see :mod:`timbre_match.compare.body_curve`).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare.body_curve import reference_weights
from timbre_match.compare.model import Fit, Row, Solution

Array = NDArray[np.float64]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Estimates:
    """Differences of harmonics (n,) and of the curve on its grid (g,), with what is uncertain about them.

    Attributes
    ----------
    harmonic_db, harmonic_sd_db : arrays, shape (n,)
        Body curve plus the harmonic's own deviation, shrunk as far as its evidence is weak.
    curve_db, curve_sd_db : arrays, shape (g,)
    harmonic_draws_db, curve_draws_db : arrays, shape (n_draws, n) and (n_draws, g)
        Joint draws of both.
    scatter_variance, own_variance, shared_variance : arrays, shape (n,)
        Variance of the harmonic's scatter, of its own deviation before the data, and what curve, gains and tilts
        add to the uncertainty of its estimate; dB^2.
    """

    harmonic_db: Array
    harmonic_sd_db: Array
    curve_db: Array
    curve_sd_db: Array
    harmonic_draws_db: Array
    curve_draws_db: Array
    scatter_variance: Array
    own_variance: Array
    shared_variance: Array


def estimate(
    fit: Fit,
    row: Row,
    grid_hz: Array,
    grid_octave: Array,
    grid_smooth: Array,
    rng: np.random.Generator,
    *,
    draws_per_sample: int = 64,
) -> Estimates:
    """Mix the solutions of all parameter samples.

    Parameters
    ----------
    fit : Fit
    row : Row
        The differences that were fitted.
    grid_hz, grid_octave : arrays, shape (g,)
        The grid's frequencies, and their log2 on the origin of `row.octave`.
    grid_smooth : array, shape (g, n_smooth)
        Columns of the curve on the grid.
    rng : numpy Generator
    draws_per_sample : int
    """
    first = 1 + row.wobble.shape[1]
    grid = np.column_stack([grid_octave, grid_smooth])
    raw = np.mean([grid @ solution.shared[first:] for solution in fit.solutions], axis=0)
    reference = reference_weights(raw, grid_hz) @ grid
    means, variances, shared_parts, curve_means, curve_variances = [], [], [], [], []
    draws, curve_draws, noises, owns = [], [], [], []
    for solution in fit.solutions:
        onto_shared, onto_note = _harmonic_coefficients(solution, row, first, reference)
        mean, variance, shared_part = _moments(solution, row, onto_shared, onto_note)
        means.append(mean)
        variances.append(variance)
        shared_parts.append(shared_part)
        curve = grid - reference
        curve_means.append(curve @ solution.shared[first:])
        curve_variances.append(np.einsum("gp,gp->g", curve @ solution.shared_cov[first:, first:], curve))
        noises.append(solution.scatter_variance)
        owns.append(solution.shrinkage / (1.0 - solution.shrinkage) * solution.scatter_variance)
        shared = _shared_draws(solution, rng, draws_per_sample)
        curve_draws.append(shared[:, first:] @ curve.T)
        draws.append(_harmonic_draws(solution, row, shared, onto_shared, onto_note, rng))
    return Estimates(
        harmonic_db=np.mean(means, axis=0),
        harmonic_sd_db=np.sqrt(np.mean(variances, axis=0) + np.var(means, axis=0)),
        curve_db=np.mean(curve_means, axis=0),
        curve_sd_db=np.sqrt(np.mean(curve_variances, axis=0) + np.var(curve_means, axis=0)),
        harmonic_draws_db=np.concatenate(draws),
        curve_draws_db=np.concatenate(curve_draws),
        scatter_variance=np.mean(noises, axis=0),
        own_variance=np.mean(owns, axis=0),
        shared_variance=np.mean(shared_parts, axis=0),
    )


def _harmonic_coefficients(solution: Solution, row: Row, first: int, reference: Array) -> tuple[Array, Array]:
    """Coefficients of each harmonic's difference on the shared effects (n, p) and its note's effects (n, 2).

    Curve plus shrinkage times (value - everything fitted), less the reference level.
    """
    rho = solution.shrinkage[:, None]
    onto_shared = -rho * solution.columns
    onto_shared[:, first:] += solution.columns[:, first:] - reference
    onto_note = -rho * np.column_stack([np.ones(row.octave.size), row.octave])
    return onto_shared, onto_note


def _moments(solution: Solution, row: Row, onto_shared: Array, onto_note: Array) -> tuple[Array, Array, Array]:
    slope = solution.note_slope[row.note]
    offset = solution.note_offset[row.note]
    reach = onto_shared - np.einsum("ni,nip->np", onto_note, slope)
    mean = solution.shrinkage * row.value_db + reach @ solution.shared + np.einsum("ni,ni->n", onto_note, offset)
    shared_part = np.einsum("np,np->n", reach @ solution.shared_cov, reach)
    shared_part = shared_part + np.einsum("ni,nij,nj->n", onto_note, solution.note_cov[row.note], onto_note)
    return mean, shared_part + solution.shrinkage * solution.scatter_variance, shared_part


def _shared_draws(solution: Solution, rng: np.random.Generator, count: int) -> Array:
    root = np.linalg.cholesky(solution.shared_cov)
    return np.asarray(solution.shared + rng.standard_normal((count, solution.shared.size)) @ root.T)


def _harmonic_draws(
    solution: Solution, row: Row, shared: Array, onto_shared: Array, onto_note: Array, rng: np.random.Generator
) -> Array:
    count = shared.shape[0]
    note_root = np.linalg.cholesky(solution.note_cov)
    noise = np.einsum("nij,dnj->dni", note_root, rng.standard_normal((count, row.n_notes, 2)))
    effects = solution.note_offset - np.einsum("nip,dp->dni", solution.note_slope, shared) + noise
    own_sd = np.sqrt(solution.shrinkage * solution.scatter_variance)
    return np.asarray(
        solution.shrinkage * row.value_db
        + shared @ onto_shared.T
        + np.einsum("ni,dni->dn", onto_note, effects[:, row.note])
        + own_sd * rng.standard_normal((count, row.octave.size))
    )
