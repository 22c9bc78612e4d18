"""The structured equations against the same model written with its full covariance matrix."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from timbre_match.compare import model
from timbre_match.compare.body_curve import smooth_columns, wobble_columns
from timbre_match.compare.estimates import estimate

Array = NDArray[np.float64]
THETA = np.log([1.1, 0.9, 1.2, 0.4, 0.6, 0.25])


PLAYING = 0.7


def row(seed: int, *, curve: bool = True) -> model.Row:
    rng = np.random.default_rng(seed)
    note = np.repeat([0, 1, 3], [9, 14, 6])
    octave = rng.uniform(-2.0, 2.0, note.size)
    shared = model.playing_columns(octave, wobble_columns(octave, -2.0, 2.0), PLAYING)
    return model.Row(
        value_db=rng.normal(0, 3, note.size),
        note=note,
        octave=octave,
        shared=model.with_curve(shared, octave, smooth_columns(octave, -2.0, 2.0)) if curve else shared,
        note_playing=np.full(4, PLAYING),
        own=curve,
        scatter_variance=rng.uniform(0.5, 3.0, note.size),
        scatter_df=np.full(note.size, 4.0),
        error_variance=rng.uniform(0.01, 0.1, note.size),
    )


def solved(one: model.Row, theta: Array = THETA) -> model.Solution:
    return model.solve(one, theta, model.even_weights(one))


def parts(one: model.Row, theta: Array) -> tuple[Array, Array, Array]:
    """Covariances of curve, own deviations, and everything else."""
    variance = np.exp(2 * theta)
    same_note = (one.note[:, None] == one.note[None, :]).astype(float)
    tilt = np.outer(one.octave, one.octave)
    smooth, wobble = (basis(one.octave, -2.0, 2.0) for basis in (smooth_columns, wobble_columns))
    curve = 0.7**2 * tilt + variance[model.SMOOTH] * smooth @ smooth.T
    own = variance[model.OWN] * np.eye(one.note.size)
    rest = (
        1e4 * same_note
        + PLAYING * variance[model.NOTE_TILT] * same_note * tilt
        + PLAYING * variance[model.TAKE_TILT] * tilt
        + PLAYING * variance[model.WOBBLE] * wobble @ wobble.T
        + np.diag(variance[model.SCATTER] * one.scatter_variance + one.error_variance)
    )
    return curve, own, rest


def test_likelihood_is_that_of_the_full_covariance() -> None:
    one = row(1)
    total = np.sum(parts(one, THETA), axis=0)
    expected = stats.multivariate_normal(cov=total).logpdf(one.value_db) + 0.5 * one.note.size * np.log(2 * np.pi)
    assert solved(one).log_likelihood == pytest.approx(expected, rel=1e-9)


def test_likelihood_of_repeats_has_no_curve_and_no_own_deviations() -> None:
    one = row(2, curve=False)
    total = parts(one, THETA)[2]
    expected = stats.multivariate_normal(cov=total).logpdf(one.value_db) + 0.5 * one.note.size * np.log(2 * np.pi)
    assert solved(one).log_likelihood == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("curve", [True, False])
def test_gradient_is_the_slope_of_the_likelihood(curve: bool) -> None:
    one = row(3, curve=curve)
    step = 1e-5
    slopes = [
        (solved(one, THETA + move).log_likelihood - solved(one, THETA - move).log_likelihood) / (2 * step)
        for move in step * np.eye(6)
    ]
    assert model.gradient(one, solved(one)) == pytest.approx(slopes, abs=1e-5)


def test_predictions_and_their_variances_are_those_of_conditional_normals() -> None:
    one = row(4)
    curve, own, rest = parts(one, THETA)
    gain = (curve + own) @ np.linalg.inv(curve + own + rest)
    mean = gain @ one.value_db
    covariance = curve + own - gain @ (curve + own)
    order = np.argsort(one.octave)
    smooth = smooth_columns(one.octave[order], -2.0, 2.0)
    found = estimate(
        [solved(one)], one, one.octave[order], smooth, np.ones(order.size), np.random.default_rng(0),
        harmonics=one.octave.size, draws_per_solution=8000,
    )  # fmt: skip
    # The reference level of each draw is its own, so differences of two places are what does not hang on it.
    curve_gain = curve @ np.linalg.inv(curve + own + rest)
    curve_mean = (curve_gain @ one.value_db)[order]
    assert np.diff(found.curve_db) == pytest.approx(np.diff(curve_mean), abs=0.1)
    assert np.diff(found.harmonic_db) == pytest.approx(np.diff(mean), abs=0.1)
    # Differences of two harmonics do not hang on the reference: compare their variance through the draws.
    for i, j in ((0, 5), (3, 20), (11, 28)):
        expected = covariance[i, i] + covariance[j, j] - 2 * covariance[i, j]
        drawn = np.var(found.harmonic_draws_db[:, i] - found.harmonic_draws_db[:, j])
        assert drawn == pytest.approx(expected, rel=0.1)


def test_repeats_inform_the_playing_and_nothing_else() -> None:
    prior = model.Prior(centre=THETA, precision=np.eye(6) / 0.5**2)
    rows = [row(seed, curve=False) for seed in range(4)]
    informed = model.informed_prior(rows, prior)
    assert informed.centre[[model.SMOOTH, model.OWN]] == pytest.approx(THETA[[model.SMOOTH, model.OWN]], abs=1e-6)
    assert informed.precision[model.SCATTER, model.SCATTER] > 2 * prior.precision[model.SCATTER, model.SCATTER]
    step = 1e-4 * np.eye(6)
    total = [
        sum(solved(one, informed.centre + move).log_likelihood for one in rows)
        - 0.5 * float(np.sum((informed.centre + move - THETA) ** 2)) / 0.5**2
        for move in (0 * step[0], *step, *-step)
    ]
    assert np.argmax(np.array(total) - 1e-6 * (np.arange(13) > 0)) == 0
