"""The analysis and synthesis equations against closed forms and laws, all to 1e-12 of the signal.

Closed forms: Oppenheim & Willsky, *Signals and Systems*, chapter on the Fourier series of discrete-time periodic
signals; each was summed once by hand from the analysis equation.
"""

import numpy as np
import pytest
import scipy.signal
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as npst
from numpy.typing import NDArray

from timbre_match.measure import dtfs

TOLERANCE = 1e-12

even_periods = st.integers(1, 400).map(lambda half: 2 * half)
periods = st.integers(1, 800)
unit = st.floats(-1.0, 1.0, allow_subnormal=False)


def signals(most: int = 200) -> st.SearchStrategy[NDArray[np.float64]]:
    return npst.arrays(np.float64, st.integers(1, most), elements=unit)


def close(a: NDArray[np.generic] | complex, b: NDArray[np.generic] | complex, scale: float = 1.0) -> bool:
    return bool(np.max(np.abs(np.asarray(a) - np.asarray(b)), initial=0.0) <= TOLERANCE * max(scale, 1e-300))


@given(even_periods)
def test_square(points: int) -> None:
    # Duty one half: 2 |c_k| = 4 / (N sin(pi k / N)) for odd k, 0 for even.
    k = np.arange(1, points)
    got = 2.0 * np.abs(dtfs.analyse(np.where(np.arange(points) < points // 2, 1.0, -1.0)))
    assert close(got[1:], np.where(k % 2 == 1, 4.0 / (points * np.sin(np.pi * k / points)), 0.0))
    assert close(got[0], 0.0)


@pytest.mark.parametrize(
    ("points", "expected"),
    [(64, (1.273751015, 0.425951052, 0.257222626)), (16, (1.281457724, 0.449988112, 0.300672443))],
)
def test_square_in_figures(points: int, expected: tuple[float, ...]) -> None:
    # The same closed form, evaluated elsewhere, to nine decimals.
    square = scipy.signal.square(2.0 * np.pi * (np.arange(points) + 0.5) / points)
    assert 2.0 * np.abs(dtfs.analyse(square))[[1, 3, 5]] == pytest.approx(expected, abs=6e-10)


@given(periods, st.data())
def test_pulse(points: int, data: st.DataObject) -> None:
    # M of N ones: |c_k| = |sin(pi k M / N)| / (N |sin(pi k / N)|), c_0 = M / N.
    ones = data.draw(st.integers(0, points))
    k = np.arange(1, points)
    got = dtfs.analyse((np.arange(points) < ones).astype(float))
    assert close(got[0], ones / points)
    # The angle is reduced to one turn in whole numbers first: sin of a large angle loses digits of its own.
    numerator = np.abs(np.sin(np.pi * (k * ones % points) / points))
    assert close(np.abs(got[1:]), numerator / (points * np.abs(np.sin(np.pi * k / points))))


@given(st.integers(1, 12), st.integers(1, 12), st.integers(1, 12))
def test_pulse_comb(numerator: int, denominator: int, scale: int) -> None:
    # Zeros where k M / N is a whole number and k is no multiple of N.
    ones, points = scale * min(numerator, denominator), scale * denominator
    got = np.abs(dtfs.analyse((np.arange(points) < ones).astype(float)))
    k = np.arange(1, points)
    assert close(got[1:][k * ones % points == 0], 0.0)


@given(periods)
def test_ramp(points: int) -> None:
    # n / N: c_k = -1 / (N (1 - exp(-j 2 pi k / N))), c_0 = (N - 1) / (2 N).
    k = np.arange(1, points)
    got = dtfs.analyse(np.arange(points) / points)
    assert close(got[0], (points - 1) / (2 * points))
    assert close(got[1:], -1.0 / (points * (1.0 - np.exp(-2j * np.pi * k / points))))
    assert close(np.abs(got[1:]), 1.0 / (2.0 * points * np.sin(np.pi * k / points)))


@given(periods)
def test_saw_with_midpoint(points: int) -> None:
    # 1/2 - n / N with x[0] = 0, the middle of the jump: c_k = -j cot(pi k / N) / (2 N).
    saw = 0.5 - np.arange(points) / points
    saw[0] = 0.0
    k = np.arange(1, points)
    assert close(dtfs.analyse(saw)[1:], -0.5j / (points * np.tan(np.pi * k / points)))


@given(even_periods)
def test_triangle(points: int) -> None:
    # Between +1 and -1: 2 |c_k| = 8 / (N^2 sin^2(pi k / N)) for odd k, 0 for even.
    n = np.arange(points)
    got = 2.0 * np.abs(dtfs.analyse(1.0 - 4.0 * np.minimum(n, points - n) / points))
    k = np.arange(1, points)
    assert close(got[1:], np.where(k % 2 == 1, 8.0 / (points * np.sin(np.pi * k / points)) ** 2, 0.0))
    assert close(got[0], 0.0)


@given(even_periods)
def test_energy_of_triangle_and_square(points: int) -> None:
    # Parseval with closed forms on both sides: 1 for the square, 1/3 + 8 / (3 N^2) for the triangle.
    n = np.arange(points)
    square = dtfs.analyse(np.where(n < points // 2, 1.0, -1.0))
    assert close(np.sum(np.abs(square) ** 2), 1.0)
    triangle = dtfs.analyse(1.0 - 4.0 * np.minimum(n, points - n) / points)
    assert close(np.sum(np.abs(triangle) ** 2), 1.0 / 3.0 + 8.0 / (3.0 * points**2))


@given(signals())
def test_parseval(x: NDArray[np.float64]) -> None:
    energy = float(np.mean(x**2))
    assert close(np.sum(np.abs(dtfs.analyse(x)) ** 2), energy, energy)


@given(signals())
def test_round_trip(x: NDArray[np.float64]) -> None:
    assert close(dtfs.synthesise(dtfs.analyse(x)), x, np.abs(x).max())


@given(signals())
def test_round_trip_from_coefficients(x: NDArray[np.float64]) -> None:
    coefficients = x + 1j * x[::-1]
    assert close(dtfs.analyse(dtfs.synthesise(coefficients)), coefficients, np.abs(coefficients).max())


@given(signals(), st.integers(-500, 500))
def test_time_shift_turns_phases_only(x: NDArray[np.float64], shift: int) -> None:
    # x[n - m] has coefficients a_k exp(-j 2 pi k m / N).
    points = len(x)
    a, b = dtfs.analyse(x), dtfs.analyse(np.roll(x, shift))
    turns = np.arange(points) * shift % points / points
    scale = np.abs(x).max()
    assert close(b, a * np.exp(-2j * np.pi * turns), scale)
    assert close(np.abs(b), np.abs(a), scale)


@given(signals(60), st.integers(0, 120))
def test_any_consecutive_period_gives_the_same_magnitudes(x: NDArray[np.float64], start: int) -> None:
    points = len(x)
    start %= 2 * points
    first, later = dtfs.analyse(x), dtfs.analyse(np.tile(x, 3)[start : start + points])
    assert close(np.abs(later), np.abs(first), np.abs(x).max())


@given(signals(60), st.integers(2, 8))
def test_several_periods_put_empty_bins_between_the_harmonics(x: NDArray[np.float64], count: int) -> None:
    scale = np.abs(x).max()
    block = dtfs.analyse(np.tile(x, count))
    assert close(block[::count], dtfs.analyse(x), scale)
    between = np.arange(len(block)) % count != 0
    assert close(block[between], 0.0, scale)


@given(signals(100), st.integers(-300, 300), st.integers(-5, 5))
def test_coefficients_repeat_every_n(x: NDArray[np.float64], k: int, turns: int) -> None:
    points, scale = len(x), np.abs(x).max()
    assert close(dtfs.coefficient(x, k + turns * points), dtfs.coefficient(x, k), scale)
    assert close(dtfs.coefficient(x, k), dtfs.analyse(x)[k % points], scale)


@given(signals(100))
def test_real_signals_have_mirrored_coefficients(x: NDArray[np.float64]) -> None:
    a = dtfs.analyse(x)
    assert close(a[-np.arange(len(x)) % len(x)], a.conj(), np.abs(x).max())


@given(signals(100), unit, unit)
def test_linear(x: NDArray[np.float64], p: float, q: float) -> None:
    y = x[::-1].copy()
    scale = np.abs(x).max()
    assert close(dtfs.analyse(p * x + q * y), p * dtfs.analyse(x) + q * dtfs.analyse(y), scale)


def test_rows_are_analysed_one_by_one() -> None:
    rows = np.random.default_rng(3).standard_normal((2, 3, 40))
    together = dtfs.analyse(rows)
    assert together.shape == rows.shape
    assert close(together[1, 2], dtfs.analyse(rows[1, 2]))


@pytest.mark.parametrize("equation", [dtfs.analyse, dtfs.synthesise, lambda x: dtfs.coefficient(x, 1)])
@pytest.mark.parametrize("empty", [np.float64(1.0), np.zeros(0), np.zeros((3, 0))])
def test_a_period_needs_a_point(equation: object, empty: NDArray[np.float64]) -> None:
    assert callable(equation)
    with pytest.raises(ValueError, match=r"has shape \(.*at least one point"):
        equation(empty)
