"""The sampler against posteriors known in closed form or by quadrature, and its heavy tails."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import integrate

from timbre_match.compare import model, sampling
from timbre_match.compare.body_curve import smooth_columns, wobble_columns
from timbre_match.compare.estimates import Estimates, estimate

Array = NDArray[np.float64]
OCTAVE = np.tile(np.linspace(-2, 2, 30), 4)
PRIOR = model.Prior(centre=np.log([1.0, 1.0, 1.0, 0.3, 0.5, 0.2]), precision=np.eye(6) / 0.5**2)


def row(value: Array, scatter_df: float = 4.0) -> model.Row:
    playing = model.playing_columns(OCTAVE, wobble_columns(OCTAVE, -2.0, 2.0), 1.0)
    return model.Row(
        value_db=value,
        note=np.repeat(np.arange(4), 30),
        octave=OCTAVE,
        shared=model.with_curve(playing, OCTAVE, smooth_columns(OCTAVE, -2.0, 2.0)),
        note_playing=np.ones(4),
        own=True,
        scatter_variance=np.ones(OCTAVE.size),
        scatter_df=np.full(OCTAVE.size, scatter_df),
        error_variance=np.full(OCTAVE.size, 0.04),
    )


def estimated(one: model.Row) -> Estimates:
    solutions = sampling.sample(one, PRIOR, np.random.default_rng(0))
    grid = OCTAVE[:30]
    return estimate(
        solutions, one, grid, smooth_columns(grid, -2.0, 2.0), np.ones(grid.size), np.random.default_rng(1),
        harmonics=OCTAVE.size,
    )  # fmt: skip


def test_an_odd_harmonic_does_not_bend_the_curve() -> None:
    value = np.random.default_rng(6).normal(0, 1, OCTAVE.size)
    value[47] += 25.0
    found = estimated(row(value))
    assert abs(found.curve_db[17]) < 2.0
    # Nothing tells whether it is the harmonic's own or scatter: its interval holds both.
    assert 5.0 < found.harmonic_db[47] < 20.0
    assert found.harmonic_sd_db[47] > 5.0


def test_repeats_decide_whether_an_odd_harmonic_is_scatter() -> None:
    value = np.random.default_rng(6).normal(0, 1, OCTAVE.size)
    value[47] += 12.0
    known, unknown = (estimated(row(value, df)).harmonic_db[47] for df in (100.0, 3.0))
    assert known > unknown + 1.0


def test_a_lone_strong_bump_keeps_its_size() -> None:
    bump = -6.0 * 2.0 ** (-((2.0 * OCTAVE / 0.6) ** 2))
    found = estimated(row(bump + np.random.default_rng(3).normal(0, 0.7, OCTAVE.size)))
    near = int(np.argmin(np.abs(OCTAVE[:30])))
    assert found.curve_db[near] == pytest.approx(bump[near], abs=3 * found.curve_sd_db[near])
    assert found.curve_db[near] < -4.5


def test_precisions_follow_their_gamma_distribution() -> None:
    drawn = sampling._precisions(np.full(200_000, 3.0), 4.0, np.random.default_rng(0))
    # Gamma with shape (df + 1) / 2 and rate (df + square) / 2 (West 1987).
    assert np.mean(drawn) == pytest.approx(5 / 7, rel=0.01)
    assert np.var(drawn) == pytest.approx(2 * 5 / 7**2, rel=0.02)


def test_a_parameter_follows_its_conditional_distribution() -> None:
    prior = model.Prior(centre=np.zeros(6), precision=np.eye(6) / 0.5**2)
    count, square = np.array([3.0, 0, 0, 0, 0, 0]), np.array([12.0, 0, 0, 0, 0, 0])
    rng = np.random.default_rng(0)
    drawn = np.array([sampling._parameters(prior, np.zeros(6), count, square, rng) for _ in range(4000)])

    def density(x: float) -> float:
        return float(np.exp(-3.0 * x - 6.0 * np.exp(-2.0 * x) - 0.5 * x**2 / 0.5**2))

    mass = integrate.quad(density, -3, 3)[0]
    mean = integrate.quad(lambda x: x * density(x), -3, 3)[0] / mass
    square_mean = integrate.quad(lambda x: x * x * density(x), -3, 3)[0] / mass
    sd = np.sqrt(square_mean - mean**2)
    assert np.mean(drawn[:, 0]) == pytest.approx(mean, abs=5 * sd / np.sqrt(4000))
    assert np.std(drawn[:, 0]) == pytest.approx(sd, rel=0.06)
    assert np.std(drawn[:, 1]) == pytest.approx(0.5, rel=0.06)
