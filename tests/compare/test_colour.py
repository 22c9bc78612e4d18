import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from timbre_match.compare.colour import (
    all_bands,
    audible,
    band_differences,
    closeness,
    colour_distance,
    distance_between_takes,
    erb_number,
    loudness_over_frequency,
    mean_band_variance,
)

FREQ = np.linspace(220.0, 6600.0, 30)
LEVEL = np.asarray(-9.0 * np.log2(np.arange(1, 31)), dtype=np.float64)


def test_identical_spectra_lie_at_no_distance() -> None:
    # Plomp (1970): the distance of a spectrum to itself is 0.
    bands = [band_differences(FREQ, LEVEL, np.zeros((1, 30)))]
    assert colour_distance(bands) == pytest.approx([0.0], abs=1e-12)
    assert closeness(bands, 0.5) == pytest.approx([100.0])


@given(gain=st.floats(-60, 60), seed=st.integers(0, 200))
def test_a_gain_changes_nothing(gain: float, seed: int) -> None:
    # Plomp's distance, level-normalised, is gain-invariant.
    difference = np.random.default_rng(seed).normal(0, 4, (1, 30))
    plain, louder = ([band_differences(FREQ, LEVEL, one)] for one in (difference, difference + gain))
    assert colour_distance(louder) == pytest.approx(colour_distance(plain), abs=1e-9)
    assert closeness(louder, 3.0) == pytest.approx(closeness(plain, 3.0), abs=1e-6)


def test_loudness_is_aligned() -> None:
    difference = np.random.default_rng(3).normal(0, 5, (1, 30))
    found = band_differences(FREQ, LEVEL, difference)
    # Stevens (1957): loudness goes as power^0.3; after alignment the shares of both sides add up alike.
    aligned = found.loudness * 10.0 ** (0.03 * found.difference_db[0])
    assert np.sum(aligned) == pytest.approx(1.0)


def test_distance_grows_with_the_difference() -> None:
    shape = np.sin(FREQ / 300.0)
    found = colour_distance([band_differences(FREQ, LEVEL, np.array([2.0, 4.0, 8.0])[:, None] * shape)])
    assert np.all(np.diff(found) > 0)


def test_a_weak_harmonic_under_strong_neighbours_is_not_heard() -> None:
    # High harmonics of a low note lie many to an auditory filter; a low one stands alone in its own.
    freq = np.linspace(100.0, 4000.0, 40)
    level = np.zeros(40)
    level[30] = -40.0
    level[1] = -15.0
    heard = audible(freq, level)
    assert not heard[30]
    assert heard[1]
    assert heard[0]


def test_hidden_harmonics_do_not_count() -> None:
    freq = np.linspace(100.0, 4000.0, 40)
    level = np.zeros(40)
    level[30] = -40.0
    change = np.zeros((1, 40))
    change[0, 30] = 10.0
    assert colour_distance([band_differences(freq, level, change)])[0] < 0.05


def test_distance_between_takes_is_the_distance_of_their_difference() -> None:
    note = np.zeros(30, dtype=np.int64)
    gap = np.random.default_rng(1).normal(0, 2, 30)
    takes = np.array([LEVEL + gap / 2, LEVEL - gap / 2])
    expected = colour_distance(all_bands(note, FREQ, LEVEL, gap[None]))[0]
    assert distance_between_takes(note, FREQ, LEVEL, takes) == pytest.approx(expected)
    assert distance_between_takes(note, FREQ, LEVEL, takes[:1]) is None


def test_loudness_over_frequency_is_that_of_the_bands() -> None:
    # Stevens (1957): loudness goes as power^0.3; Glasberg & Moore (1990): bands are one ERB wide.
    note = np.zeros(30, dtype=np.int64)
    grid = np.geomspace(220.0, 6600.0, 400)
    plain = loudness_over_frequency(note, FREQ, np.zeros(30), grid)
    assert np.sum(plain) == pytest.approx(1.0)
    louder = loudness_over_frequency(note, FREQ, np.where(np.arange(30) == 3, 10.0, 0.0), grid)
    same_band = np.floor(erb_number(grid)) == np.floor(erb_number(FREQ[3]))
    gain = np.sum(louder[same_band]) / np.sum(louder[~same_band])
    assert gain == pytest.approx(10.0**0.3 * np.sum(plain[same_band]) / np.sum(plain[~same_band]))


def test_notes_count_alike_in_the_loudness() -> None:
    grid = np.geomspace(220.0, 6600.0, 400)
    two = np.repeat([0, 1], 30)
    freq, level = np.concatenate([FREQ, FREQ]), np.concatenate([LEVEL, LEVEL - 30.0])
    alone = loudness_over_frequency(two[:30], FREQ, LEVEL, grid)
    assert loudness_over_frequency(two, freq, level, grid) == pytest.approx(alone)


def test_variance_of_bands_is_that_of_their_levels() -> None:
    # To first order, so for small differences: against differences that are drawn.
    note = np.repeat([0, 1], 30)
    freq, level = np.concatenate([FREQ, 0.7 * FREQ]), np.concatenate([LEVEL, LEVEL[::-1] / 3.0])
    rng = np.random.default_rng(5)
    variance = rng.uniform(0.01, 0.1, 60)
    drawn = rng.normal(0, np.sqrt(variance), (4000, 60))
    expected = np.mean(colour_distance(all_bands(note, freq, level, drawn)) ** 2)
    # Aligning the loudness of some twenty bands a note takes one of them away.
    assert mean_band_variance(note, freq, level, np.zeros(60), variance) == pytest.approx(expected, rel=0.12)


def test_scaled_bands_lie_as_much_farther_apart() -> None:
    difference = np.random.default_rng(6).normal(0, 3, (2, 30))
    band = band_differences(FREQ, LEVEL, difference)
    assert colour_distance([band.scaled(np.array([2.0, 0.0]))]) == pytest.approx(
        [2.0 * colour_distance([band])[0], 0.0], abs=1e-12
    )
