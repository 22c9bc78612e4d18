"""Recordings that stand on two sides of a comparison: remarked, or refused where they belong to a control."""

from dataclasses import replace

import pytest

from tests.compare.simulated import NOTES, profile
from timbre_match.compare import compare
from timbre_match.compare.same_recordings import same_recording_remarks
from timbre_match.compare.target import as_target, blend
from timbre_match.errors import ControlError
from timbre_match.measure.profile import Profile, Source

FEW = NOTES[:3]
INSTRUMENT, TARGET = profile(1, takes=2, notes=FEW), profile(2, takes=2, notes=FEW)
NOW, THEN = (replace(profile(seed, takes=2, notes=FEW), instrument="control") for seed in (3, 4))


def with_take_of(one: Profile, other: Profile) -> Profile:
    return replace(one, takes=(*one.takes, other.takes[1]))


def renamed(one: Profile) -> Profile:
    """The same recordings under other file names, and measured anew."""
    takes = tuple(
        replace(take, recordings=tuple(replace(source, file="copy.wav") for source in take.recordings))
        for take in one.takes
    )
    return replace(one, takes=takes)


@pytest.mark.parametrize(
    ("now", "then", "what"),
    [
        (NOW, NOW, "control now: the recording 3_1.wav (and 1 more) is one of control then too"),
        (NOW, with_take_of(THEN, NOW), "control now: the recording 3_2.wav is one of control then too"),
        (NOW, renamed(NOW), "is one of control then too, there named copy.wav"),
        (with_take_of(NOW, INSTRUMENT), THEN, "control now: the recording 1_2.wav is one of the instrument too"),
        (with_take_of(NOW, TARGET), THEN, "control now: the recording 2_2.wav is one of the target too"),
        (NOW, with_take_of(THEN, INSTRUMENT), "control then: the recording 1_2.wav is one of the instrument too"),
        (NOW, with_take_of(THEN, TARGET), "control then: the recording 2_2.wav is one of the target too"),
    ],
)
def test_a_control_that_shares_a_recording_is_refused(now: Profile, then: Profile, what: str) -> None:
    with pytest.raises(ControlError) as caught:
        compare(INSTRUMENT, TARGET, control_now=now, control_then=then)
    message = str(caught.value)
    assert what in message
    assert "likely cause" in message
    assert "what to do" in message


def test_a_control_that_shares_one_with_any_member_of_a_blend_is_refused() -> None:
    family = blend("family", (profile(5, notes=FEW), TARGET))
    with pytest.raises(ControlError, match="one of the target too"):
        compare(INSTRUMENT, family, control_now=NOW, control_then=with_take_of(THEN, TARGET))


def test_a_control_with_recordings_of_its_own_is_taken() -> None:
    found = compare(INSTRUMENT, TARGET, control_now=NOW, control_then=THEN)
    assert any("is subtracted" in remark for remark in found.remarks)


def test_recordings_without_a_sum_are_not_taken_for_the_same() -> None:
    def unknown(one: Profile) -> Profile:
        takes = tuple(replace(take, recordings=(Source(file="take.wav", sha256=""),)) for take in one.takes)
        return replace(one, takes=takes)

    found = compare(unknown(INSTRUMENT), unknown(TARGET), control_now=unknown(NOW), control_then=unknown(THEN))
    assert not any("same recordings" in remark for remark in found.remarks)


def test_a_profile_against_itself_is_compared_and_said_to_be_that() -> None:
    found = compare(INSTRUMENT, renamed(INSTRUMENT))
    assert found.regions == ()
    (remark,) = (remark for remark in found.remarks if "same recordings" in remark)
    assert remark.startswith("instrument and target are the same recordings")
    assert "says nothing about how well the instrument repeats" in remark


def test_recordings_on_both_sides_are_counted_and_named() -> None:
    (remark,) = same_recording_remarks(INSTRUMENT, as_target(with_take_of(TARGET, INSTRUMENT)))
    assert remark.startswith("the same recordings on both sides (1 of the instrument's 2, of the target's 3: 1_2.wav):")
    (remark,) = same_recording_remarks(INSTRUMENT, blend("family", (TARGET, INSTRUMENT)))
    assert "(2 of the instrument's 2, of the target's 4: 1_1.wav, 1_2.wav)" in remark
    many = profile(6, takes=5, notes=NOTES[:1])
    (remark,) = same_recording_remarks(many, blend("family", (TARGET, many)))
    assert "6_1.wav, 6_2.wav, 6_3.wav and 2 more)" in remark


def test_recordings_of_one_side_alone_are_not_remarked() -> None:
    assert same_recording_remarks(INSTRUMENT, as_target(TARGET)) == ()
