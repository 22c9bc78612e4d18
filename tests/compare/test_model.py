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


def row(seed: int, *, curve: bool = True) -> model.Row:
    rng = np.random.default_rng(seed)
    note = np.repeat([0, 1, 3], [9, 14, 6])
    octave = rng.uniform(-2.0, 2.0, note.size)
    smooth = smooth_columns(octave, -2.0, 2.0) if curve else np.zeros((note.size, 0))
    return model.Row(
        value_db=rng.normal(0, 3, note.size),
        note=note,
        n_notes=4,
        octave=octave,
        smooth=smooth,
        wobble=wobble_columns(octave, -2.0, 2.0),
        scatter_variance=rng.uniform(0.5, 3.0, note.size),
        error_variance=rng.uniform(0.01, 0.1, note.size),
        repeat_df=np.zeros(note.size),
        playing=0.7,
    )


def parts(one: model.Row, theta: Array) -> tuple[Array, Array, Array]:
    """Covariances of curve, own deviations, and everything else."""
    variance = np.exp(2 * theta)
    same_note = (one.note[:, None] == one.note[None, :]).astype(float)
    tilt = np.outer(one.octave, one.octave)
    curve = 9.0 * tilt + variance[model.SMOOTH] * one.smooth @ one.smooth.T
    own = variance[model.OWN] * np.eye(one.note.size)
    rest = (
        1e4 * same_note
        + one.playing * variance[model.NOTE_TILT] * same_note * tilt
        + one.playing * variance[model.TAKE_TILT] * tilt
        + one.playing * variance[model.WOBBLE] * one.wobble @ one.wobble.T
        + np.diag(variance[model.SCATTER] * one.scatter_variance + one.error_variance)
    )
    return curve, own, rest


def test_likelihood_is_that_of_the_full_covariance() -> None:
    one = row(1)
    total = np.sum(parts(one, THETA), axis=0)
    expected = stats.multivariate_normal(cov=total).logpdf(one.value_db) + 0.5 * one.note.size * np.log(2 * np.pi)
    assert model.solve(one, THETA).log_likelihood == pytest.approx(expected, rel=1e-9)


def test_likelihood_of_repeats_has_no_curve_and_no_own_deviations() -> None:
    one = row(2, curve=False)
    total = parts(one, THETA)[2]
    expected = stats.multivariate_normal(cov=total).logpdf(one.value_db) + 0.5 * one.note.size * np.log(2 * np.pi)
    assert model.solve(one, THETA).log_likelihood == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("curve", [True, False])
def test_gradient_is_the_slope_of_the_likelihood(curve: bool) -> None:
    one = row(3, curve=curve)
    step = 1e-5
    slopes = [
        (model.solve(one, THETA + move).log_likelihood - model.solve(one, THETA - move).log_likelihood) / (2 * step)
        for move in step * np.eye(6)
    ]
    assert model.solve(one, THETA).gradient == pytest.approx(slopes, abs=1e-5)


def test_predictions_and_their_variances_are_those_of_conditional_normals() -> None:
    one = row(4)
    curve, own, rest = parts(one, THETA)
    gain = (curve + own) @ np.linalg.inv(curve + own + rest)
    mean = gain @ one.value_db
    covariance = curve + own - gain @ (curve + own)
    solution = model.solve(one, THETA)
    still = model.Fit(
        best=THETA,
        samples=THETA[None],
        solutions=(solution,),
        weights=model.Weights(scatter=np.ones(one.note.size), own=np.ones(one.note.size)),
    )
    # The reference is linear in the curve, so asking for the harmonics' own places as the grid shows its weights.
    order = np.argsort(one.octave)
    grid = 1000.0 * 2.0 ** one.octave[order]
    found = estimate(
        still, one, grid, one.octave[order], one.smooth[order], np.random.default_rng(0), draws_per_sample=4000
    )
    curve_gain = curve @ np.linalg.inv(curve + own + rest)
    curve_mean = (curve_gain @ one.value_db)[order]
    constant = curve_mean[0] - found.curve_db[0]
    assert found.curve_db == pytest.approx(curve_mean - constant, abs=1e-6)
    assert found.harmonic_db == pytest.approx(mean - constant, abs=1e-6)
    # Differences of two harmonics do not hang on the reference: compare their variance through the draws.
    for i, j in ((0, 5), (3, 20), (11, 28)):
        expected = covariance[i, i] + covariance[j, j] - 2 * covariance[i, j]
        drawn = np.var(found.harmonic_draws_db[:, i] - found.harmonic_draws_db[:, j])
        assert drawn == pytest.approx(expected, rel=0.1)
    assert np.std(found.harmonic_draws_db, axis=0) == pytest.approx(found.harmonic_sd_db, rel=0.08)
    assert np.std(found.curve_draws_db, axis=0) == pytest.approx(found.curve_sd_db, rel=0.08)


def test_an_odd_harmonic_gets_a_small_weight_and_does_not_bend_the_curve() -> None:
    prior = model.Prior(centre=np.log([0.8, 1.0, 1.0, 0.3, 0.5, 0.2]), sd=np.full(6, 0.5))
    rng = np.random.default_rng(6)
    octave = np.tile(np.linspace(-2, 2, 30), 4)
    note = np.repeat(np.arange(4), 30)
    value = rng.normal(0, 1, octave.size)
    value[47] += 25.0
    one = model.Row(
        value_db=value,
        note=note,
        n_notes=4,
        octave=octave,
        smooth=smooth_columns(octave, -2.0, 2.0),
        wobble=wobble_columns(octave, -2.0, 2.0),
        scatter_variance=np.ones(octave.size),
        error_variance=np.full(octave.size, 0.04),
        repeat_df=np.zeros(octave.size),
        playing=1.0,
    )
    fit = model.fit(one, [], prior, np.random.default_rng(0))
    found = estimate(fit, one, 1000 * 2.0 ** octave[:30], octave[:30], one.smooth[:30], np.random.default_rng(1))
    assert np.argmin(fit.weights.own) == 47
    assert fit.weights.own[47] < 0.1
    assert abs(found.curve_db[17]) < 2.0
