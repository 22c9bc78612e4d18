"""What playing alone makes of the curve, against the covariance of the values carried through the fit."""

from dataclasses import replace

import numpy as np
import pytest

from tests.compare.test_model import THETA, parts, row, solved
from timbre_match.compare.estimates import _played_effects


def test_effects_of_playing_alone_are_those_of_fits_to_playing_alone() -> None:
    one = row(3)
    # The fit is linear in the values, so those of the unit vectors are the columns of its matrix.
    fit = np.array([solved(replace(one, value_db=unit)).shared for unit in np.eye(one.value_db.size)]).T
    _, own, rest = parts(one, THETA)
    expected = fit @ (own + rest) @ fit.T
    drawn = np.cov(_played_effects(solved(one), one, np.random.default_rng(0), 200_000).T)
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    assert drawn / scale == pytest.approx(expected / scale, abs=0.02)
