"""The model of decay times against plain linear algebra and its own numerical slope."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from tests.compare.plucked import NOTES, plucked
from timbre_match.compare import sustain_model
from timbre_match.compare.decay_times import DecayTimes, gather_decays
from timbre_match.compare.sustain_model import FIXED, OWN, SCATTER, Prior, Rows, helmert
from timbre_match.compare.target import as_target

PRIOR = Prior(centre=np.log([0.1, 0.12, 0.15, 0.2, 0.12, 0.2]), sd=np.full(6, 0.7))


@pytest.fixture(scope="module")
def times() -> DecayTimes:
    found = gather_decays(plucked(1, notes=NOTES[:3], takes=3), as_target(plucked(2, notes=NOTES[:3], takes=2)))
    assert found is not None
    return found


def covariance_of(rows: Rows, theta: NDArray[np.float64]) -> NDArray[np.float64]:
    """Covariance of differences and contrasts together, written out in full."""
    variance = np.exp(2.0 * theta)
    effects = np.where(rows.group == FIXED, 1.0, variance[rows.group]) * rows.unit
    design = np.vstack([rows.matrix, rows.contrast_matrix])
    own = np.concatenate([np.full(rows.value.size, variance[OWN]), np.zeros(rows.contrast.size)])
    scatter = variance[SCATTER] * np.concatenate([rows.scatter, rows.contrast_scatter])
    return np.asarray((design * effects) @ design.T + np.diag(own + scatter))


@pytest.mark.parametrize("count", [1, 2, 3, 6])
def test_contrasts_are_orthonormal_and_free_of_the_mean(count: int) -> None:
    found = helmert(count)
    assert found.shape == (count - 1, count)
    assert found @ found.T == pytest.approx(np.eye(count - 1), abs=1e-12)
    assert found @ np.ones(count) == pytest.approx(np.zeros(count - 1), abs=1e-12)


def test_the_likelihood_is_that_of_the_normal_distribution(times: DecayTimes) -> None:
    rows = times.rows
    values = np.concatenate([rows.value, rows.contrast])
    sums = sustain_model._summed(rows)
    found, expected = [], []
    for theta in (PRIOR.centre, PRIOR.centre + np.array([0.4, -0.3, 0.2, 0.5, -0.6, 0.3])):
        away = (theta - PRIOR.centre) / PRIOR.sd
        found.append(sustain_model._solve(rows, sums, PRIOR, theta).log_density + 0.5 * float(away @ away))
        expected.append(stats.multivariate_normal.logpdf(values, cov=covariance_of(rows, theta)))
    # Both are the same but for a constant, which hangs on no variance.
    assert found[1] - found[0] == pytest.approx(expected[1] - expected[0], rel=1e-9)


def test_the_slope_is_that_of_the_density(times: DecayTimes) -> None:
    rows = times.rows
    sums = sustain_model._summed(rows)
    theta = PRIOR.centre + np.array([0.3, -0.2, 0.1, 0.4, -0.5, 0.2])
    one = sustain_model._solve(rows, sums, PRIOR, theta)
    slope = sustain_model._slope(rows, sums, PRIOR, theta, one)
    for place, step in enumerate(1e-5 * np.eye(6)):
        up, down = (sustain_model._solve(rows, sums, PRIOR, theta + way * step).log_density for way in (1, -1))
        assert slope[place] == pytest.approx((up - down) / 2e-5, rel=1e-5, abs=1e-5)


def test_estimates_are_the_best_linear_unbiased_predictions(times: DecayTimes) -> None:
    # At one known point of the variances: E(what is asked | values) = C(asked, values) V^-1 values.
    rows = times.rows
    theta = PRIOR.centre
    variance = np.exp(2.0 * theta)
    effects = np.where(rows.group == FIXED, 1.0, variance[rows.group]) * rows.unit * rows.instrument
    design = np.vstack([rows.matrix, rows.contrast_matrix])
    shared = (rows.matrix * effects) @ design.T
    shared[:, : rows.value.size] += variance[OWN] * np.eye(rows.value.size)
    whole = covariance_of(rows, theta)
    values = np.concatenate([rows.value, rows.contrast])
    expected = shared @ np.linalg.solve(whole, values)
    asked = (rows.matrix * effects) @ rows.matrix.T + variance[OWN] * np.eye(rows.value.size)
    expected_sd = np.sqrt(np.diag(asked - shared @ np.linalg.solve(whole, shared.T)))
    known = Prior(centre=theta, sd=np.full(6, 1e-6))
    found = sustain_model.fit(rows, known, np.random.default_rng(3))
    assert found.mean == pytest.approx(expected, abs=1e-5)
    assert found.sd == pytest.approx(expected_sd, rel=1e-4)
    assert np.std(found.harmonics, axis=0) == pytest.approx(expected_sd, rel=0.15)


def test_differences_are_means_over_the_takes_of_each_side(times: DecayTimes) -> None:
    def log_t60(seed: int, takes: int) -> NDArray[np.float64]:
        whole = plucked(seed, notes=NOTES[:3], takes=takes)
        found = [
            np.concatenate([np.log(note.ringing.t60_s) for note in take.notes if note.ringing is not None])
            for take in whole.takes
        ]
        return np.array(found)

    assert times.rows.value == pytest.approx(log_t60(1, 3).mean(axis=0) - log_t60(2, 2).mean(axis=0))
    # One contrast less than takes, on each side, of every harmonic.
    assert times.rows.contrast.size == 3 * times.rows.value.size


def test_spoilt_times_are_left_out() -> None:
    whole = plucked(1, notes=("E4",), takes=1)
    note = whole.takes[0].notes[0]
    ringing = note.ringing
    assert ringing is not None
    t60_s, error = ringing.t60_s.copy(), ringing.t60_se_s.copy()
    t60_s[0], t60_s[1], error[2] = 1e300, 1e-300, 1e300
    spoilt = replace(note, ringing=replace(ringing, t60_s=t60_s, t60_se_s=error))
    changed = replace(whole, takes=(replace(whole.takes[0], notes=(spoilt,)),))
    found = gather_decays(changed, as_target(plucked(2, notes=("E4",), takes=1)))
    assert found is not None
    assert found.k[0] == 3
    assert np.all(np.isfinite(found.rows.scatter))
