"""Published worked examples of the statistics that the comparison rests on."""

import math

import numpy as np
import pytest

from timbre_match.compare.repeatability import fit_variance_prior, moderated_variance
from timbre_match.compare.verdicts import equivalence_p, false_discovery_threshold

# Benjamini & Hochberg (1995), p. 295: fifteen p-values of a trial of thrombolysis.
TRIAL_P = [
    *(0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459),
    *(0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0),
]


@pytest.mark.parametrize(("rate", "discoveries"), [(0.05, 4), (0.10, 9)])
def test_false_discovery_rate_of_the_trial(rate: float, discoveries: int) -> None:
    threshold = false_discovery_threshold(TRIAL_P, rate)
    assert np.sum(np.array(TRIAL_P) <= threshold) == discoveries


def test_the_fourth_of_the_trial_counts_from_its_adjusted_value_on() -> None:
    # Benjamini & Hochberg (1995): 15 x 0.0095 / 4 = 0.035625.
    assert false_discovery_threshold(TRIAL_P, 0.03563) == 0.0095
    assert false_discovery_threshold(TRIAL_P, 0.03562) == 0.0019


def test_the_order_given_does_not_matter() -> None:
    shuffled = np.random.default_rng(0).permutation(TRIAL_P)
    assert false_discovery_threshold(shuffled) == false_discovery_threshold(TRIAL_P)


def test_variance_prior() -> None:
    # Smyth (2004), the algorithm as in the public code of its author's package; numbers computed with it.
    variances = [0.5, 1.2, 0.8, 2.5, 4.0, 0.3, 1.0, 1.7, 0.9, 6.0]
    prior_df, prior_variance = fit_variance_prior(variances, 4)
    assert prior_df == pytest.approx(10.930257, abs=1e-6)
    assert prior_variance == pytest.approx(1.543820, abs=1e-6)
    moderated = moderated_variance(variances, 4, prior_df=prior_df, prior_variance=prior_variance)
    assert moderated[-1] == pytest.approx(2.737686, abs=1e-6)


def test_variance_prior_is_infinite_where_variances_agree() -> None:
    # The same author's package uses the mean there since 2017.
    prior_df, prior_variance = fit_variance_prior([1.0, 1.1, 0.9, 1.05], 4)
    assert math.isinf(prior_df)
    assert prior_variance == pytest.approx(1.0125)


def test_two_one_sided_tests() -> None:
    # Schuirmann (1987): d = 0.2, se = 0.3, 18 degrees of freedom, margin 1: t = 4 and -2.6667, p the larger one.
    assert equivalence_p(0.2, 0.3, 1.0, 18) == pytest.approx(0.007862, abs=1e-6)
    # The rule's other face: p <= 5 % exactly where the 90 % interval [-0.3202, 0.7202] lies within the margin.
    assert equivalence_p(0.2, 0.3, 0.7202, 18) == pytest.approx(0.05, abs=1e-4)
