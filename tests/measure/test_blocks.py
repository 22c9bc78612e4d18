"""Blocks of cycles: harmonics on every P-th bin, the floor between them."""

import numpy as np
import pytest
from numpy.typing import NDArray

from timbre_match.measure.blocks import analyse_blocks

POINTS = 64


def cycles_of(count: int, amplitudes: list[float], noise: float = 0.0, seed: int = 41) -> NDArray[np.float64]:
    n = np.arange(count * POINTS)
    wave = sum(a * np.cos(2.0 * np.pi * (k + 1) * n / POINTS + k) for k, a in enumerate(amplitudes))
    return np.asarray(wave + noise * np.random.default_rng(seed).standard_normal(len(n))).reshape(count, POINTS)


@pytest.mark.parametrize("count", [4, 6, 9, 13, 40, 400])
def test_harmonics_of_a_periodic_signal_are_exact(count: int) -> None:
    # Rectangular and Hann blocks alike: on its own bin a line has gain 1, and whole multiples of a block leak nothing.
    amplitudes = [1.0, 0.1, 0.01, 0.5]
    blocks = analyse_blocks(cycles_of(count, amplitudes), 6, 220.0)
    expected = np.array([*amplitudes, 0.0, 0.0]) / 2.0 * np.exp(1j * np.array([0, 1, 2, 3, 0, 0]))
    # Blocks begin on whole or, overlapping by half, on whole cycles again: every block has the same phases.
    assert np.abs(blocks.harmonics - expected).max() < 1e-12
    assert blocks.floor_power.max() < 1e-24


@pytest.mark.parametrize(("count", "f0_hz"), [(12, 220.0), (40, 220.0), (200, 220.0), (2000, 2000.0)])
def test_floor_is_that_of_the_noise(count: int, f0_hz: float) -> None:
    """White noise of variance s^2 puts s^2 sum(w^2) / sum(w)^2 into a bin (Welch 1967), whatever else is there."""
    noise = 0.1
    found, freedom = [], 0.0
    for seed in range(40):
        blocks = analyse_blocks(cycles_of(count, [1.0, 0.5, 0.25], noise, seed), 20, f0_hz)
        found.append(float(blocks.floor_power.mean()))
        freedom = blocks.floor_freedom
    # The window is known by its equivalent noise bandwidth over the block: 1.5 bins for Hann (Harris 1978).
    per_block = min(max(6, 2 * round(0.1 * f0_hz / 2)), 2 * (count // 4))
    expected = noise**2 * 1.5 / (per_block * POINTS)
    assert freedom > 3.0
    assert np.mean(found) == pytest.approx(expected, rel=0.06)


def test_variance_factors_are_those_of_simulated_noise() -> None:
    linear, square = [], []
    for seed in range(400):
        blocks = analyse_blocks(cycles_of(40, [0.0], 1.0, seed), 25, 220.0)
        linear.append(np.abs(blocks.harmonics.mean(axis=0)) ** 2)
        square.append((np.abs(blocks.harmonics) ** 2).mean(axis=0))
    one = float(np.mean(square))
    # 10,000 values each: the mean of squares is known to 1 %, a variance to 2 %.
    assert float(np.mean(linear)) / one == pytest.approx(blocks.linear_gain, rel=0.05)
    assert float(np.var(square)) / one**2 == pytest.approx(blocks.square_gain, rel=0.08)


def power_of_blocks(cycles: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray((np.abs(analyse_blocks(cycles, 4, 220.0).harmonics) ** 2).sum(axis=1))


def test_a_bow_change_is_left_out() -> None:
    cycles = cycles_of(400, [1.0, 0.5])
    whole = power_of_blocks(cycles)
    cycles[180:220] *= 0.05
    kept = power_of_blocks(cycles)
    # Blocks of 22 cycles, overlapping by half: the two that lie inside the 40 cycles are gone, whole ones all remain.
    assert len(whole) - 5 <= len(kept) <= len(whole) - 2
    assert kept.min() > 10.0**-0.6 * np.median(whole)
    assert np.sum(kept > 0.999 * np.median(whole)) >= len(whole) - 6


def test_a_note_that_swells_is_kept_whole() -> None:
    cycles = cycles_of(400, [1.0, 0.5])
    whole = power_of_blocks(cycles)
    # More than a quarter of the note is no bow change.
    cycles[:150] *= 0.05
    assert len(power_of_blocks(cycles)) == len(whole)
