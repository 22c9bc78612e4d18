"""What a maker notes about a session, and that a date is one."""

import pytest

from timbre_match.errors import UnknownNameError
from timbre_match.measure.profile import Profile, Session


# The calendar is the Gregorian one of ISO 8601: of the years that end a century, only each fourth has a 29 February.
@pytest.mark.parametrize("date", ["", "2026-03-01", "2024-02-29", "2000-02-29", "1899-12-31"])
def test_days_of_the_calendar_are_dates(date: str) -> None:
    assert Session(date=date).date == date


@pytest.mark.parametrize(
    "date",
    [
        "2023-02-29",
        "1900-02-29",
        "2026-13-01",
        "2026-00-10",
        "2026-3-1",
        "20260301",
        "2026-W09-7",
        "2026-060",
        "01.03.2026",
        "3/1/2026",
        "2026-03-01T10:00",
        " 2026-03-01",
        "２０２６-03-01",
        "yesterday",
        "\udce9",
    ],
)
def test_what_is_no_date_is_refused_with_a_remedy(date: str) -> None:
    with pytest.raises(UnknownNameError, match="is not a date") as caught:
        Session(date=date)
    assert repr(date) in caught.value.what
    assert "2026-03-01" in caught.value.remedy


def test_a_long_text_is_not_repeated_whole() -> None:
    with pytest.raises(UnknownNameError) as caught:
        Session(date="2026-03-01" * 1000)
    assert len(str(caught.value)) < 300


def test_nothing_is_noted_unless_the_maker_does() -> None:
    profile = Profile(instrument="Wren", stage="", family="", a4_hz=440.0, takes=())
    assert (profile.session.date, profile.session.room, profile.session.microphone) == ("", "", "")
