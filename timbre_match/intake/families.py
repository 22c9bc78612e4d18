"""Which families of instruments hold their notes, and which let them ring."""

import re

from timbre_match.intake.notes import NoteKind

_RINGING = frozenset(
    {
        *("guitar", "guitars", "mandolin", "mandola", "harp", "piano", "banjo", "ukulele", "lute", "theorbo", "zither"),
        *("harpsichord", "clavichord", "virginal", "spinet", "psaltery", "dulcimer", "cittern", "bouzouki", "oud"),
        *("kantele", "lyre", "balalaika", "charango", "cavaquinho", "sitar", "koto", "kora", "saz", "vihuela", "tiple"),
    }
)
_HELD = frozenset(
    {
        *("violin", "viola", "cello", "violoncello", "contrabass", "viol", "gamba", "fiddle", "nyckelharpa"),
        *("clarinet", "flute", "oboe", "bassoon", "contrabassoon", "saxophone", "recorder", "shawm", "bagpipe"),
        *(
            "trumpet",
            "horn",
            "trombone",
            "tuba",
            "cornet",
            "flugelhorn",
            "euphonium",
            "organ",
            "harmonium",
            "accordion",
        ),
    }
)


def kind_of_family(family: str) -> NoteKind | None:
    """How an instrument of this family sounds its notes, as far as its name tells; None where it does not.

    Any word of the name decides: "classical guitar", "steel-string guitar" and "Guitar" all ring.
    """
    words = set(re.split(r"[^a-z]+", family.lower()))
    ringing, held = bool(words & _RINGING), bool(words & _HELD)
    if ringing == held:
        return None
    return "ringing" if ringing else "held"
