"""The law of a stiff string, fitted to partials that follow it and to some that do not."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.measure.stiffness import fit_law, search_partials, stretched_hz

RATE = 44_100
K = np.arange(1, 21)


def test_standard_errors_hold_for_partials_on_the_law() -> None:
    rng = np.random.default_rng(1)
    se_hz = 0.01 * np.ones(20)
    laws = [fit_law(K, stretched_hz(K, 110.0, 1e-4) + se_hz * rng.standard_normal(20), se_hz) for _ in range(300)]
    f0 = np.array([(law.f0_hz - 110.0) / law.f0_se_hz for law in laws])
    b = np.array([(law.b - 1e-4) / law.b_se for law in laws])
    # The common scatter, estimated from twenty partials, makes some of them too careful.
    assert 0.8 < np.sqrt(np.mean(f0**2)) < 1.15
    assert 0.8 < np.sqrt(np.mean(b**2)) < 1.15


def test_a_common_scatter_is_seen_and_widens_the_errors() -> None:
    # Two cents of scatter, as a body gives; the partials themselves are known to a hundredth of that.
    rng = np.random.default_rng(2)
    off = 2.0 ** (2.0 * rng.standard_normal((300, 20)) / 1200.0)
    laws = [fit_law(K, stretched_hz(K, 110.0, 1e-4) * each, np.full(20, 1e-3)) for each in off]
    assert np.median([1200.0 / np.log(2.0) * law.scatter for law in laws]) == pytest.approx(2.0, rel=0.15)
    b = np.array([(law.b - 1e-4) / law.b_se for law in laws])
    assert 0.8 < np.sqrt(np.mean(b**2)) < 1.25


def test_partials_far_off_lose_their_say() -> None:
    freq_hz = stretched_hz(K, 110.0, 1e-4)
    freq_hz[[2, 7, 13]] *= 2.0 ** (np.array([25.0, -30.0, 18.0]) / 1200.0)
    law = fit_law(K, freq_hz, np.full(20, 0.01))
    assert law.b == pytest.approx(1e-4, rel=0.02)
    assert law.f0_hz == pytest.approx(110.0, rel=1e-4)


def test_no_inharmonicity_is_zero_within_its_error() -> None:
    rng = np.random.default_rng(3)
    for _ in range(20):
        law = fit_law(K, 110.0 * K + 0.01 * rng.standard_normal(20), np.full(20, 0.01))
        assert 0.0 <= law.b < 3.5 * law.b_se
        assert law.b_se > 0.0


def test_one_partial_says_nothing_of_b() -> None:
    law = fit_law(np.array([2]), np.array([440.0]), np.array([0.1]))
    assert (law.f0_hz, law.b) == (220.0, 0.0)
    assert np.isinf(law.b_se)


def sound(freq_hz: NDArray[np.float64], snr_db: float, seed: int) -> NDArray[np.float64]:
    rng = np.random.default_rng(seed)
    time_s = np.arange(RATE) / RATE
    tone = sum(
        np.exp(-3.0 * time_s) / np.sqrt(i + 1.0) * np.cos(2.0 * np.pi * f * time_s + rng.uniform(0.0, 6.0))
        for i, f in enumerate(freq_hz)
    )
    return np.asarray(tone + 10.0 ** (-snr_db / 20.0) * rng.standard_normal(RATE))


@pytest.mark.parametrize("b", [0.0, 1e-5, 1e-4, 1e-3, 2e-3])
@pytest.mark.parametrize("off_cents", [-45.0, 0.0, 45.0])
def test_partials_are_found_from_a_rough_fundamental(b: float, off_cents: float) -> None:
    freq_hz = stretched_hz(K, 196.0, b)
    found_hz, f0_hz = search_partials(sound(freq_hz, 20.0, 4), RATE, 196.0 * 2.0 ** (off_cents / 1200.0), 20_000.0)
    assert 1200.0 * np.log2(f0_hz / 196.0) == pytest.approx(0.0, abs=3.0)
    assert np.abs(found_hz[:20] - freq_hz).max() < 0.5


def test_missing_and_displaced_partials_do_not_lead_astray() -> None:
    keep = np.setdiff1d(np.arange(20), [3, 7, 11, 15])
    freq_hz = stretched_hz(K, 196.0, 3e-4)
    freq_hz[[0, 4]] *= 2.0 ** (12.0 / 1200.0)
    found_hz, _ = search_partials(sound(freq_hz[keep], 20.0, 5), RATE, 197.0, 20_000.0)
    assert np.abs(found_hz[[1, 2, 5, 8, 12, 16, 19]] - freq_hz[[1, 2, 5, 8, 12, 16, 19]]).max() < 0.5
