"""How much more a difference of few takes scatters than the model is told.

The mean over takes is a robust one, and its variance is taken from the large-sample theory of a Student t location: the
squared scale, over the weights, times (df + 3) / (df + 1). Of few takes it scatters more: with three takes and three
degrees of freedom by half, with five by a fifth. A single take scatters as the tables say, but the difference of two
Student t levels has a wider middle than one with the scale of both. What is too much counts as harmonics that differ.
That moves no single harmonic far, but a sum of squares over all of them, such as the colour distance, adds it up.

The remedy is a parametric bootstrap (Efron & Tibshirani 1993, *An Introduction to the Bootstrap*, section 6.5): levels
that have the tails of the tables and no difference go through the same alignment, and their scatter is set against what
is claimed for it.
"""

import functools

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from timbre_match.compare.alignment import align_takes
from timbre_match.compare.repeatability import ScatterPrior

Array = NDArray[np.float64]

_UNREPEATED_SCALE = 0.88
"""What the model claims where nothing was repeated, over the tables' squared scale. Its prior leaves that open from
half to twice as much, and no theory says where it ends: the figure is one that keeps the mean colour distance of
`random 1x12` of benchmarks/calibration.py near the truth (seed 5)."""

_LEVELS = 4_000
_NORMAL_DF = 1_000.0
_ROUNDS = 100
_SEED = 51


def claim_factor(prior: ScatterPrior, take_counts: tuple[int, ...], scatter_df: float) -> float:
    """Variance of a difference without a difference, over what the model claims for it.

    Parameters
    ----------
    prior : ScatterPrior
        Its `tail_df` is that of the levels, and of the alignment.
    take_counts : tuple of int
        Takes of the instrument, then of each member of the target.
    scatter_df : float
        Degrees of freedom of the model's scatter. The factor is that of the scale of a Student t distribution with
        these, fitted to the differences by maximum likelihood (Lange, Little & Taylor 1989, *JASA* 84): with heavy
        tails in the model it is the middle that counts, without them the variance.
    """
    tails = prior.tail_df, min(round(scatter_df, 1), _NORMAL_DF)
    return _claim_factor(*tails, prior.take_tilt_db, prior.note_tilt_db, take_counts)


@functools.lru_cache(maxsize=64)
def _claim_factor(
    tail_df: float,
    scatter_df: float,
    take_tilt_db: float,
    note_tilt_db: float,
    take_counts: tuple[int, ...],
) -> float:
    prior = ScatterPrior(
        group="",
        centre_hz=np.ones(1),
        scale_db=np.ones(1),
        tail_df=tail_df,
        take_tilt_db=take_tilt_db,
        note_tilt_db=note_tilt_db,
        wobble_db=0.0,
    )
    rng = np.random.default_rng(_SEED)
    sides = [_null_side(prior, count, rng) for count in take_counts]
    members = len(sides) - 1
    value = sides[0][0] - sum(mean for mean, _, _ in sides[1:]) / members
    claimed = sides[0][1] + sum(spread for _, spread, _ in sides[1:]) / members**2
    repeats = sum(count - 1 for count in take_counts)
    shown = sum((count - 1) * scale for count, (_, _, scale) in zip(take_counts, sides, strict=True))
    claimed = claimed * (shown / repeats if repeats else _UNREPEATED_SCALE)
    square = value**2 / claimed
    factor = 1.0
    for _ in range(_ROUNDS):
        factor = float(np.mean((scatter_df + 1.0) / (scatter_df + square / factor) * square))
    return factor


def _null_side(prior: ScatterPrior, takes: int, rng: np.random.Generator) -> tuple[Array, Array, float]:
    """Mean over the takes and its claimed variance, shape (n_levels,), and the squared scale that repeats show.

    Every take has the same levels in another order, evenly spread over the distribution: its tails are then neither
    missed nor hit too often.
    """
    levels = stats.t.ppf((np.arange(_LEVELS) + 0.5) / _LEVELS, prior.tail_df)
    drawn = np.array([rng.permutation(levels) for _ in range(takes)])
    octave = np.linspace(-2.0, 2.0, _LEVELS)
    aligned = align_takes(drawn, np.zeros(_LEVELS, dtype=np.int64), octave, prior, np.ones(_LEVELS))
    if takes == 1:
        return aligned.mean_db, aligned.spread, 1.0
    scale = float(np.mean(np.sum(aligned.weight * aligned.residual_db**2, axis=0))) / (takes - 1)
    return aligned.mean_db, aligned.spread, scale
