"""How much more few takes scatter than the model is told, against simulations of the tests' own."""

import numpy as np
import pytest

from timbre_match.compare.few_takes import _UNREPEATED_SCALE, claim_factor
from timbre_match.compare.repeatability import ScatterPrior


def prior(tail_df: float) -> ScatterPrior:
    return ScatterPrior(
        group="",
        centre_hz=np.ones(1),
        scale_db=np.ones(1),
        tail_df=tail_df,
        take_tilt_db=0.3,
        note_tilt_db=0.5,
        wobble_db=0.2,
    )


def test_two_single_takes_scatter_like_a_wider_student_t() -> None:
    # The sum of two Cauchy variables of scale 1 is a Cauchy variable of scale 2, where a model that adds squared scales
    # says sqrt(2): its squared scale is twice what is claimed. (Stability of the Cauchy law; any textbook.)
    assert claim_factor(prior(1.0), (1, 1), 1.0) * _UNREPEATED_SCALE == pytest.approx(2.0, rel=0.1)


def test_single_takes_under_a_normal_model_have_their_whole_variance() -> None:
    # Student t with nu degrees of freedom: variance nu / (nu - 2).
    assert claim_factor(prior(6.0), (1, 1), 1000.0) * _UNREPEATED_SCALE == pytest.approx(6.0 / 4.0, rel=0.05)


def test_many_takes_scatter_as_claimed() -> None:
    assert claim_factor(prior(4.0), (40, 40), 1000.0) == pytest.approx(1.0, abs=0.05)


def test_few_takes_scatter_more_than_many() -> None:
    factors = [claim_factor(prior(3.0), (takes, takes), 1000.0) for takes in (3, 5, 8, 16)]
    assert factors == sorted(factors, reverse=True)
    assert factors[0] > 1.3


def test_the_sides_count_as_much_as_they_scatter() -> None:
    # One take against five: the one is most of the difference. Four single takes in a target's mean count a quarter.
    one_sided = claim_factor(prior(3.0), (1, 5), 1000.0)
    assert one_sided > 1.5 * claim_factor(prior(3.0), (5, 5), 1000.0)
    assert claim_factor(prior(3.0), (5, 1, 1, 1, 1), 1000.0) < one_sided
