"""Families that hold their notes, and families that let them ring."""

import pytest

from timbre_match.advise.workshop import families
from timbre_match.intake.families import kind_of_family


@pytest.mark.parametrize(
    ("family", "kind"),
    [
        *(
            (name, "ringing")
            for name in ("classical guitar", "Steel-string guitar", "MANDOLIN", "concert harp", "piano")
        ),
        *((name, "held") for name in ("violin", "Viola da gamba", "bass clarinet", "french-horn")),
        *((name, None) for name in ("", "double bass", "hurdy-gurdy", "violin and guitar")),
    ],
)
def test_any_word_of_the_name_decides(family: str, kind: str | None) -> None:
    assert kind_of_family(family) == kind


def test_every_family_of_the_workshop_table_is_known() -> None:
    kinds = {name: kind_of_family(name) for name in families()}
    assert None not in kinds.values()
    plucked_or_struck = {"classical guitar", "steel-string guitar", "mandolin", "harp", "piano"}
    assert {name for name, kind in kinds.items() if kind == "ringing"} == plucked_or_struck
