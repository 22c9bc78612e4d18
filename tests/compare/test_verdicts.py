import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from timbre_match.compare.verdicts import (
    difference_p,
    equivalence_p,
    false_discovery_threshold,
    takes_needed,
)

P_VALUES = st.lists(st.floats(0.0, 1.0), min_size=1, max_size=40)


@given(P_VALUES)
def test_discoveries_are_those_of_scipy(p: list[float]) -> None:
    threshold = false_discovery_threshold(p)
    by_threshold = (np.array(p) <= threshold) & (threshold > 0)
    by_scipy = stats.false_discovery_control(p, method="bh") <= 0.05
    # A zero among the p-values is a discovery at a threshold of zero too.
    assert np.all((by_threshold | (np.array(p) == 0)) == by_scipy)


def test_no_discovery_gives_no_threshold() -> None:
    assert false_discovery_threshold([0.2, 0.9]) == 0.0


def test_difference_p_of_the_normal_quantile() -> None:
    assert difference_p([1.959963984540054, -1.959963984540054, 0.0], 1.0) == pytest.approx([0.05, 0.05, 1.0])


def test_equivalence_fails_outside_the_margin() -> None:
    assert equivalence_p(3.5, 0.01, 3.0) > 0.5
    assert equivalence_p(-2.0, 0.1, 3.0) < 1e-6


def needed(difference: float, sd: float) -> int:
    count = takes_needed(
        np.array([difference]),
        np.array([sd**2]),
        np.array([1e9]),
        np.array([0.0]),
        takes=1.0,
        margin_db=3.0,
        threshold=0.05,
    )
    return int(count[0])


def test_takes_needed_of_a_lone_harmonic() -> None:
    # Without pooling the standard error falls as 1 / sqrt(m): 4 dB with sd 4 needs m >= (1.96 x 4 / 4)^2 = 3.84.
    assert needed(4.0, 4.0) == 4
    # 0 dB is alike where 1.645 x 4 / sqrt(m) < 3, so m > 4.81.
    assert needed(0.0, 4.0) == 5
    assert needed(3.0, 30.0) == 0
