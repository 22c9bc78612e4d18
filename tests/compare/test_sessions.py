"""What is said where instrument, target and control were recorded in sessions that differ."""

from dataclasses import replace

import pytest

from tests.compare.simulated import NOTES, profile
from timbre_match.compare import compare
from timbre_match.compare.sessions import control_remark, session_remarks
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Session

MARCH = Session(date="2026-03-01", room="workshop", microphone="small condenser, 0.7 m")
JANUARY = Session(date="2026-01-10", room="workshop", microphone="large condenser, 1 m")
PLAIN = profile(1, takes=1, notes=NOTES[:1])


def recorded_in(session: Session) -> Profile:
    return replace(PLAIN, session=session)


def target_of(*sessions: Session) -> Target:
    return Target(name="target", members=tuple(recorded_in(session) for session in sessions))


def said(*sessions: Session, own: Session = MARCH) -> tuple[str, ...]:
    return session_remarks(recorded_in(own), target_of(*sessions))


def said_with_control(now: Session, then: Session, *members: Session) -> str:
    control = recorded_in(now), recorded_in(then)
    return control_remark(recorded_in(MARCH), target_of(*members), control, "38 harmonics of 4 notes")


def test_what_differs_is_named_with_what_it_means_and_what_helps() -> None:
    (remark,) = said(JANUARY)
    assert remark == (
        "recorded in another session than the target (date 2026-03-01 against 2026-01-10; microphone small condenser, "
        "0.7 m against large condenser, 1 m): microphone, room and player are in the difference; an instrument that "
        "has not changed, recorded in both sessions, takes them out (--control-now, --control-then)"
    )


@pytest.mark.parametrize("name", ["date", "room", "microphone"])
def test_one_thing_that_differs_is_enough(name: str) -> None:
    value = {"date": "2026-03-02", "room": "hall", "microphone": "ribbon"}[name]
    (remark,) = said(replace(MARCH, **{name: value}))
    assert f"({name} {getattr(MARCH, name)} against {value})" in remark


@pytest.mark.parametrize(
    "other",
    [
        MARCH,
        Session(),
        Session(date="2026-03-01"),
        Session(room="  WorkShop\n", microphone="Small Condenser, 0.7 M "),
        Session(date="2026-03-01", room="   "),
    ],
)
def test_what_is_the_same_or_not_noted_gives_no_remark(other: Session) -> None:
    assert said(other) == ()
    assert said(MARCH, own=other) == ()


def test_nothing_in_common_to_compare_gives_no_remark() -> None:
    assert said(Session(room="hall"), own=Session(date="2026-03-01", microphone="ribbon")) == ()


def test_members_of_a_blend_that_differ_are_counted() -> None:
    (some,) = said(MARCH, JANUARY, Session())
    assert "than 1 of the target's 3 members (date 2026-03-01 against 2026-01-10;" in some
    (all_of_them,) = said(JANUARY, JANUARY)
    assert "than the target (date" in all_of_them


def test_members_that_agree_among_themselves_are_listed_once() -> None:
    (remark,) = said(Session(room="Hall"), Session(room="hall "), Session(room="kitchen"))
    assert "(room workshop against hall, kitchen)" in remark


def test_long_lists_and_long_texts_stay_short() -> None:
    days = [Session(date=f"2026-01-{day:02}") for day in range(1, 31)]
    (remark,) = said(*days)
    assert "against 2026-01-01, 2026-01-02, 2026-01-03 and 27 more)" in remark
    (remark,) = said(Session(room="x" * 10_000), own=Session(room="y" * 10_000))
    assert len(remark) < 400
    assert "takes them out" in remark


def test_a_control_of_both_sessions_says_what_it_takes_out() -> None:
    plain = (
        "what the control (instrument 1) seems to have changed by between the sessions is subtracted, as a curve from "
        "38 harmonics of 4 notes; its uncertainty is in the intervals"
    )
    assert said_with_control(MARCH, JANUARY, JANUARY) == plain
    assert said_with_control(Session(), Session(), JANUARY) == plain


def test_a_control_of_another_session_is_named() -> None:
    elsewhere = Session(date="2026-02-14")
    now = said_with_control(elsewhere, JANUARY, JANUARY)
    assert now == (
        "the control now was not recorded in the instrument's session (date 2026-02-14 against 2026-03-01): what the "
        "control (instrument 1) seems to have changed by is subtracted all the same, as a curve from 38 harmonics of 4 "
        "notes, but there it is not the change of microphone, room and player that is in the difference; take a "
        "control from those sessions, or compare without one"
    )
    then = said_with_control(MARCH, elsewhere, JANUARY, Session(date="2025-11-30"))
    assert then.startswith(
        "the control then was recorded in another session than the target (date 2026-02-14 against 2026-01-10, "
        "2025-11-30): what"
    )


def test_a_control_that_fits_some_members_of_a_blend_says_which_share_it_does_not_fit() -> None:
    some = said_with_control(MARCH, JANUARY, Session(date="2025-11-30"), JANUARY, Session())
    assert some.startswith(
        "the control then was recorded in another session than 1 of the target's 3 members (date 2026-01-10 against "
        "2025-11-30): what"
    )


def test_exchanged_controls_are_both_named() -> None:
    remark = said_with_control(JANUARY, MARCH, JANUARY)
    assert remark.startswith("the control now was not recorded in the instrument's session (date 2026-01-10")
    assert "; the control then was recorded in another session than the target (date 2026-03-01" in remark


def test_a_comparison_carries_the_remark_and_the_control_takes_it_away() -> None:
    notes = NOTES[:3]
    instrument = replace(profile(2, takes=2, notes=notes), session=MARCH)
    target = replace(profile(3, takes=2, notes=notes), session=JANUARY)
    now = replace(profile(4, takes=2, notes=notes), instrument="control", session=MARCH)
    then = replace(profile(5, takes=2, notes=notes), instrument="control", session=JANUARY)
    across = compare(instrument, target)
    assert across.remarks[0].startswith("recorded in another session than the target")
    # The remark is all that the notes change.
    silent = compare(replace(instrument, session=Session()), target)
    assert replace(across, remarks=across.remarks[1:]) == silent
    controlled = compare(instrument, target, control_now=now, control_then=then)
    assert not any("another session" in remark or "not recorded in" in remark for remark in controlled.remarks)
    assert sum("the control" in remark for remark in controlled.remarks) == 1
    exchanged = compare(instrument, target, control_now=then, control_then=now)
    (remark,) = (remark for remark in exchanged.remarks if "the control" in remark)
    # One remark, so that none says that the sessions are taken out while another says that they are not.
    assert "not recorded in" in remark
    assert "subtracted all the same" in remark
