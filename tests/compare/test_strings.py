"""What speaks of the strings: another inharmonicity, and a loss of high partials with nothing below."""

import math
from dataclasses import replace

import numpy as np
import pytest

from tests.compare.plucked import NOTES, Array, plucked
from tests.compare.simulated import profile as held_profile
from timbre_match.compare import compare
from timbre_match.compare.records import Interval, Region, Strings
from timbre_match.compare.strings import compare_strings
from timbre_match.compare.target import as_target
from timbre_match.measure.profile import Profile


def strings_of(instrument: Profile, target: Profile) -> tuple[Strings, tuple[str, ...]]:
    found, remarks = compare_strings(instrument, as_target(target), (), (), None)
    assert found is not None
    return found, remarks


def with_b(whole: Profile, note: str, b: float, error: float) -> Profile:
    """The profile with another inharmonicity of one note."""
    takes = []
    for take in whole.takes:
        recipes = []
        for recipe in take.notes:
            ringing = recipe.ringing
            assert ringing is not None
            if recipe.note == note:
                ringing = replace(ringing, inharmonicity_b=b, inharmonicity_se=error)
            recipes.append(replace(recipe, ringing=ringing))
        takes.append(replace(take, notes=tuple(recipes)))
    return replace(whole, takes=tuple(takes))


def test_another_gauge_is_seen_in_the_inharmonicity() -> None:
    # B of plain steel strings goes as d^4 / T, and T as d^2 at one pitch (Fletcher 1964): 0.012 in place of 0.011 inch
    # makes it (12/11)^2 = 1.19 times as much.
    found, remarks = strings_of(plucked(1, b=4e-5 * (12 / 11) ** 2), plucked(2, b=4e-5))
    assert all(one.differs for one in found.notes)
    assert all(one.ratio.value == pytest.approx((12 / 11) ** 2, rel=1e-6) for one in found.notes)
    assert any("strings are not the same" in remark for remark in remarks)


def test_the_same_strings_are_no_suspects() -> None:
    found, remarks = strings_of(plucked(1), plucked(2))
    assert not any(one.differs for one in found.notes)
    assert remarks == ()


def test_an_inharmonicity_within_its_error_is_no_suspect() -> None:
    found, remarks = strings_of(with_b(plucked(1), "E4", 6e-5, 1.9e-5), plucked(2))
    assert not any(one.differs for one in found.notes)
    assert remarks == ()
    lost, _ = strings_of(with_b(plucked(1), "E4", 0.0, 1e-6), plucked(2))
    assert "E4" not in {one.note for one in lost.notes}
    unknown, _ = strings_of(with_b(plucked(1), "E4", 6e-5, math.nan), plucked(2))
    assert "E4" not in {one.note for one in unknown.notes}


def test_held_notes_have_no_strings_to_suspect() -> None:
    assert compare_strings(held_profile(1), as_target(held_profile(2)), (), (), None) == (None, ())


def dull(freq_hz: Array) -> Array:
    """A loss that sets in above 2 kHz."""
    return np.asarray(-9.0 * np.clip(np.log2(freq_hz / 1800.0), 0.0, 0.7))


def test_a_loss_of_high_partials_alone_is_laid_to_the_strings() -> None:
    found = compare(plucked(1, level=dull, level_scatter_db=0.7), plucked(2, level_scatter_db=0.7))
    assert found.strings is not None
    assert found.strings.dull_from_hz is not None
    assert 1500.0 < found.strings.dull_from_hz < 3000.0
    assert any("old strings" in remark for remark in found.remarks)


def region(low_hz: float, high_hz: float, value: float) -> Region:
    return Region(
        low_hz=low_hz,
        high_hz=high_hz,
        difference_db=Interval(value=value, low=value - 1.0, high=value + 1.0),
        verdict="stronger" if value > 0 else "weaker",
        harmonics=9,
        notes=6,
    )


@pytest.mark.parametrize(
    ("regions", "expected"),
    [
        ((region(2500.0, 5000.0, -4.0),), 2500.0),
        ((region(2500.0, 3000.0, -4.0),), None),  # does not reach the top
        ((region(2500.0, 5000.0, 4.0),), None),  # a gain
        ((region(600.0, 5000.0, -4.0),), None),  # reaches down to where the body speaks
        ((region(300.0, 400.0, -4.0), region(2500.0, 5000.0, -4.0)), None),  # something below differs too
    ],
)
def test_only_a_loss_that_reaches_the_top_and_stands_alone_is_the_strings(
    regions: tuple[Region, ...], expected: float | None
) -> None:
    curve = compare(plucked(1, notes=NOTES[:2]), plucked(2, notes=NOTES[:2])).body_curve
    assert curve[-1].freq_hz > 2000.0
    top = replace(curve[-1], freq_hz=5000.0)
    found, _ = compare_strings(plucked(1), as_target(plucked(2)), regions, (*curve[:-1], top), None)
    assert found is not None
    assert found.dull_from_hz == expected
