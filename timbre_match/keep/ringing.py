"""What a comparison says of ringing notes, as JSON and back.

Ratios and pluck points are kept to 6 decimals, inharmonicity to 12, p-values to 6 significant digits.
"""

from dataclasses import fields

from timbre_match.compare.records import (
    Comparison,
    Interval,
    PluckNote,
    PluckPoint,
    SetApart,
    StringNote,
    Strings,
    Sustain,
    SustainHarmonic,
    SustainNote,
    SustainPoint,
    SustainRegion,
)
from timbre_match.keep import layout
from timbre_match.keep.recipes import Json, rounded

_DIGITS = {"b": 12, "target_b": 12}


def ringing_body(comparison: Comparison) -> Json:
    """The keys `sustain`, `pluck` and `strings`, each only where there is something to say.

    A comparison of held notes has none of them.
    """
    body: Json = {}
    if comparison.sustain is not None:
        sustain = comparison.sustain
        body["sustain"] = {
            "source": sustain.source,
            "harmonics": [_flat(one) for one in sustain.harmonics],
            "notes": [_flat(one) for one in sustain.notes],
            "curve": [_flat(one) for one in sustain.curve],
            "regions": [_flat(one) for one in sustain.regions],
            "apart": [_flat(one) for one in sustain.apart],
        }
    if comparison.pluck:
        body["pluck"] = [
            {
                "note": one.note,
                "instrument": [None if point is None else _flat(point) for point in one.instrument],
                "target": [None if point is None else _flat(point) for point in one.target],
                "differs": one.differs,
                "taken_out": one.taken_out,
                "set_aside": list(one.set_aside),
            }
            for one in comparison.pluck
        ]
    if comparison.strings is not None:
        strings = comparison.strings
        body["strings"] = {
            "notes": [_flat(one) for one in strings.notes],
            "dull_from_hz": rounded(strings.dull_from_hz, 6),
        }
    return body


def read_sustain(body: layout.SustainLayout | None) -> Sustain | None:
    """The record of a `sustain` key."""
    if body is None:
        return None
    return Sustain(
        source=body.source,
        harmonics=tuple(
            SustainHarmonic(
                note=row.note, k=row.k, freq_hz=row.freq_hz, ratio=_ratio(row), p=row.p, verdict=row.verdict
            )
            for row in body.harmonics
        ),
        notes=tuple(
            SustainNote(note=row.note, ratio=_ratio(row), p=row.p, verdict=row.verdict, harmonics=row.harmonics)
            for row in body.notes
        ),
        curve=tuple(
            SustainPoint(
                freq_hz=row.freq_hz,
                ratio=_ratio(row),
                simultaneous_low=row.simultaneous_low,
                simultaneous_high=row.simultaneous_high,
            )
            for row in body.curve
        ),
        regions=tuple(
            SustainRegion(
                low_hz=row.low_hz,
                high_hz=row.high_hz,
                ratio=_ratio(row),
                verdict=row.verdict,
                harmonics=row.harmonics,
                notes=row.notes,
            )
            for row in body.regions
        ),
        apart=tuple(SetApart(**row.model_dump()) for row in body.apart),
    )


def read_pluck(body: list[layout.PluckNoteLayout]) -> tuple[PluckNote, ...]:
    """The records of a `pluck` key."""
    return tuple(
        PluckNote(
            note=row.note,
            instrument=_points(row.instrument),
            target=_points(row.target),
            differs=row.differs,
            taken_out=row.taken_out,
            set_aside=tuple(row.set_aside),
        )
        for row in body
    )


def read_strings(body: layout.StringsLayout | None) -> Strings | None:
    """The record of a `strings` key."""
    if body is None:
        return None
    return Strings(
        notes=tuple(
            StringNote(note=row.note, b=row.b, target_b=row.target_b, ratio=_ratio(row), p=row.p, differs=row.differs)
            for row in body.notes
        ),
        dull_from_hz=body.dull_from_hz,
    )


def _points(body: list[layout.PluckPointLayout | None]) -> tuple[PluckPoint | None, ...]:
    return tuple(None if point is None else PluckPoint(beta=point.beta, se=point.se) for point in body)


def _ratio(
    row: layout.SustainHarmonicLayout
    | layout.SustainNoteLayout
    | layout.SustainPointLayout
    | layout.SustainRegionLayout
    | layout.StringNoteLayout,
) -> Interval:
    return Interval(value=row.ratio, low=row.low, high=row.high)


def _flat(
    record: SustainHarmonic | SustainNote | SustainPoint | SustainRegion | SetApart | PluckPoint | StringNote,
) -> Json:
    """One record as keys, its ratio as `ratio`, `low` and `high`."""
    body: Json = {}
    for field in fields(record):
        value = getattr(record, field.name)
        if isinstance(value, Interval):
            body |= {"ratio": rounded(value.value, 6), "low": rounded(value.low, 6), "high": rounded(value.high, 6)}
        elif field.name == "p":
            body["p"] = float(f"{value:.6g}")
        elif isinstance(value, float):
            body[field.name] = rounded(value, _DIGITS.get(field.name, 6))
        else:
            body[field.name] = value
    return body
