from dataclasses import replace

import pytest

from tests.compare.simulated import dip, profile
from timbre_match.compare.comparison import tolerance_db
from timbre_match.compare.target import as_target, blend
from timbre_match.errors import ComparisonError


def test_blend_keeps_its_members_whole() -> None:
    members = (profile(1), profile(2))
    target = blend("last five", members)
    assert target.name == "last five"
    assert target.members == members


def test_a_plain_profile_is_a_target_of_one() -> None:
    one = replace(profile(1), stage="varnished")
    assert as_target(one).members == (one,)
    assert as_target(one).name == "instrument 1 varnished"
    assert as_target(as_target(one)).members == (one,)


def test_nothing_to_blend_is_said_clearly() -> None:
    with pytest.raises(ComparisonError, match="at least one profile"):
        blend("empty", ())
    with pytest.raises(ComparisonError, match="holds no note"):
        blend("silent", (profile(1), profile(2, notes=())))


def test_tolerance_grows_with_how_far_the_members_differ() -> None:
    notes = ("G3", "D4", "A4", "E5")
    alike = blend("alike", tuple(profile(seed, notes=notes) for seed in (1, 2, 3)))
    apart = blend(
        "apart",
        tuple(
            profile(seed, notes=notes, change=dip(hz, 8.0, 0.8)) for seed, hz in ((1, 500.0), (2, 1200.0), (3, 3000.0))
        ),
    )
    narrow, wide = tolerance_db(alike), tolerance_db(apart)
    assert narrow is not None
    assert wide is not None
    assert wide > 2.0 * narrow
    assert tolerance_db(blend("one", (profile(1),))) is None
