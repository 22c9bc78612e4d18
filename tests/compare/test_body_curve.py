import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from timbre_match.compare.body_curve import (
    frequency_grid,
    reference_level,
    simultaneous_factor,
    smooth_columns,
    spline_basis,
    stretches,
    wobble_columns,
)

GRID = np.geomspace(200.0, 8000.0, 128)
EVEN = np.ones(128)


@given(st.lists(st.floats(-3.0, 3.0), min_size=1, max_size=30))
def test_splines_sum_to_one(octave: list[float]) -> None:
    assert np.sum(spline_basis(octave, -3.0, 3.0, 6.0), axis=1) == pytest.approx(1.0)


def test_splines_reproduce_a_straight_line() -> None:
    # De Boor: cubic splines hold polynomials up to degree three; coefficients at the knots' averages give the line.
    octave = np.linspace(-2.0, 2.0, 50)
    basis = spline_basis(octave, -2.0, 2.0, 6.0)
    step = 4.0 / 24
    centres = -2.0 + step * (np.arange(basis.shape[1]) - 1)
    assert basis @ centres == pytest.approx(octave, abs=1e-9)


def test_columns_of_curve_and_wobble_have_unit_variance() -> None:
    octave = np.linspace(-2.0, 2.0, 400)
    assert np.mean(np.sum(smooth_columns(octave, -2.0, 2.0) ** 2, axis=1)) == pytest.approx(1.0, abs=1e-9)
    assert np.mean(np.sum(wobble_columns(octave, -2.0, 2.0) ** 2, axis=1)) == pytest.approx(1.0, abs=1e-9)


@given(st.floats(-20, 20), st.integers(0, 1000))
def test_reference_follows_a_constant(constant: float, seed: int) -> None:
    curve = np.random.default_rng(seed).normal(0, 2, GRID.size)
    plain, moved = reference_level(np.array([curve, curve + constant]), EVEN)
    assert moved == pytest.approx(plain + constant, abs=1e-6)


@given(st.integers(0, 1000))
def test_reference_is_where_the_curves_values_are_densest(seed: int) -> None:
    # A mode of the kernel density that scipy estimates from the same values with the same kernel.
    curve = np.random.default_rng(seed).normal(0, 2, GRID.size)
    weight = np.random.default_rng(seed + 1).uniform(0.2, 1.0, GRID.size)
    found = reference_level(curve[None], weight)[0]
    spread = float(np.sqrt(np.cov(curve, aweights=weight)))
    density = stats.gaussian_kde(curve, bw_method=1.5 / spread, weights=weight)
    assert density(found)[0] >= max(density(found - 0.1)[0], density(found + 0.1)[0])


@pytest.mark.parametrize("centre_hz", [400.0, 1000.0, 2500.0])
def test_a_narrow_change_does_not_move_the_rest(centre_hz: float) -> None:
    curve = np.where(np.abs(np.log2(GRID / centre_hz)) < 0.35, -5.0, 0.0)
    assert reference_level(curve[None], EVEN) == pytest.approx([0.0], abs=0.01)


def test_neither_does_a_broad_one_nor_what_is_scarcely_heard() -> None:
    broad = np.where(np.arange(GRID.size) >= 0.6 * GRID.size, -4.0, 0.0)
    assert reference_level(broad[None], EVEN) == pytest.approx([0.0], abs=0.15)
    most = np.where(np.arange(GRID.size) >= 0.3 * GRID.size, -4.0, 0.0)
    faint = np.where(most < 0, 0.1, 1.0)
    assert reference_level(most[None], faint) == pytest.approx([0.0], abs=0.1)


@pytest.mark.parametrize("depth_db", np.linspace(0.5, 4.0, 15))
def test_a_broad_change_moves_it_by_no_more_than_the_readme_says(depth_db: float) -> None:
    broad = np.where(np.arange(GRID.size) >= 0.6 * GRID.size, -depth_db, 0.0)
    assert -0.7 < reference_level(broad[None], EVEN)[0] <= 0.0


def test_one_point_is_its_own_reference() -> None:
    assert reference_level(np.array([[2.0]]), np.ones(1)) == pytest.approx([2.0])


def test_grid_spans_the_harmonics() -> None:
    grid = frequency_grid(np.array([196.0, 440.0, 9800.0]))
    assert grid[[0, -1]] == pytest.approx([196.0, 9800.0])
    assert np.max(np.diff(np.log2(grid))) <= 1 / 24 + 1e-12


def test_simultaneous_factor_of_independent_points() -> None:
    # For n independent normals the factor solves (2 Phi(z) - 1)^n = 0.95 (Sidak 1967).
    draws = np.random.default_rng(0).standard_normal((40_000, 20))
    expected = stats.norm.ppf((1 + 0.95 ** (1 / 20)) / 2)
    assert simultaneous_factor(draws, np.zeros(20), np.ones(20)) == pytest.approx(expected, abs=0.04)


def test_stretches_are_runs_off_zero_on_one_side() -> None:
    side = np.array([1, 1, 0, -1, -1, 1, -1])
    found = [(one.first, one.last) for one in stretches(side)]
    assert found == [(0, 1), (3, 4), (5, 5), (6, 6)]
    assert stretches(np.zeros(3, dtype=np.int64)) == []
