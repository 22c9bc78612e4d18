"""Profiles, targets and comparisons as JSON, versioned.

Numbers are rounded to far below what any measurement resolves, so that files stay small and can be compared: levels
and intervals to 4 decimals of a dB, standard errors, frequencies, times and phases to 6 decimals of their unit, cents
to 4, p-values to 6 significant digits. What is loaded and saved again is the same file. NaN and infinity are never
written: where a harmonic is not heard its level is null, and a floor without any noise is null too.
"""

import json
from collections.abc import Iterable
from pathlib import Path

from pydantic import ValidationError

from timbre_match.advise.suggestions import Move, Suggestion
from timbre_match.compare.records import (
    ColourDistance,
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    Region,
    Repeatability,
)
from timbre_match.compare.target import Target, as_target
from timbre_match.errors import OutputError
from timbre_match.keep import layout
from timbre_match.keep.checking import check, first_fault, read_saved, read_saved_text, refuse_format
from timbre_match.keep.recipes import Json, read_recipe, recipe_body, rounded
from timbre_match.keep.ringing import read_pluck, read_strings, read_sustain, ringing_body
from timbre_match.keep.writing import check_file_place, write_whole
from timbre_match.measure.profile import Profile, Session, Source, Take


def check_output(path: str | Path, inputs: Iterable[str | Path], *, kind: str | None) -> None:
    """Refuse a place that cannot be written, an input, or a file that is not one of `kind`.

    A `kind` is "profile", "target" or "comparison"; with None any file but an input may be replaced, and `path` may
    be a folder.

    Raises
    ------
    OutputError
        Before anything is written.
    """
    path = Path(path)
    if kind is not None:
        check_file_place(path)
    if not path.is_file():
        return
    for source in inputs:
        same = Path(source).exists() and path.samefile(source)
        if same or (Path(source).is_dir() and path.resolve().parent == Path(source).resolve()):
            raise OutputError(
                "this would be written over what it is made from",
                where=str(path),
                cause="the output has the name of an input",
                remedy="give the output a name of its own",
            )
    if kind is None:
        return
    with path.open("rb") as existing:
        start = existing.read(200).decode("utf-8", "replace")
    if f"timbre-match/{kind}" not in start:
        raise OutputError(
            f"there is a file here already, and it is no {kind}; it was left alone",
            where=str(path),
            cause="a slip in the name after --out",
            remedy="give the output a name of its own, or remove that file first",
        )


def profile_to_json(profile: Profile) -> str:
    """Text of a profile file.

    Raises
    ------
    OutputError
        If the profile holds something that a profile file cannot hold, such as a heard harmonic without a level.
    """
    return _text(layout.PROFILE_FORMAT, layout.ProfileBody, _profile_body(profile))


def save_profile(profile: Profile, path: str | Path) -> None:
    """Write a profile file, whole or not at all.

    Raises
    ------
    OutputError
        As :func:`profile_to_json`, and if `path` cannot be written.
    """
    write_whole(path, profile_to_json(profile).encode())


def load_profile(path: str | Path) -> Profile:
    """Read a profile file.

    Raises
    ------
    SavedFileError
        If it is no profile file, or something in it is missing or wrong; the message names the path inside the file.
    FileVersionError
        If it has an unknown version.
    """
    return _profile_in(*read_saved(path), str(path))


def profile_from_json(text: str, *, where: str) -> Profile:
    """Read the text of a profile file, which errors speak of as `where`.

    Raises
    ------
    SavedFileError, FileVersionError
        As :func:`load_profile`.
    """
    return _profile_in(*read_saved_text(text, where), where)


def target_to_json(target: Target) -> str:
    """Text of a target file, with its member profiles whole.

    Raises
    ------
    OutputError
        If the target holds something that a target file cannot hold.
    """
    body: Json = {"name": target.name, "members": [_profile_body(member) for member in target.members]}
    return _text(layout.TARGET_FORMAT, layout.TargetBody, body)


def save_target(target: Target, path: str | Path) -> None:
    """Write a target file, whole or not at all.

    Raises
    ------
    OutputError
        As :func:`target_to_json`, and if `path` cannot be written.
    """
    write_whole(path, target_to_json(target).encode())


def load_target(path: str | Path) -> Target:
    """Read a target file; a plain profile file is a target with one member.

    Raises
    ------
    SavedFileError, FileVersionError
        As :func:`load_profile`.
    """
    return _target_in(*read_saved(path), str(path))


def target_from_json(text: str, *, where: str) -> Target:
    """Read the text of a target or profile file, which errors speak of as `where`.

    Raises
    ------
    SavedFileError, FileVersionError
        As :func:`load_profile`.
    """
    return _target_in(*read_saved_text(text, where), where)


def comparison_to_json(comparison: Comparison, suggestions: tuple[Suggestion, ...]) -> str:
    """Text of a comparison file, with what to try.

    Raises
    ------
    OutputError
        If the comparison holds something that its file cannot hold, such as an infinite interval.
    """
    distance = comparison.colour_distance
    body: Json = {
        "instrument": comparison.instrument,
        "stage": comparison.stage,
        "family": comparison.family,
        "target": comparison.target,
        "margin_db": rounded(comparison.margin_db, 4),
        "colour_distance_db": {**_interval_body(distance.distance_db), "own": rounded(distance.own_db, 4)},
        "closeness_percent": _interval_body(comparison.closeness_percent),
        "repeatability": {
            "source": comparison.repeatability.source,
            "takes": comparison.repeatability.takes,
            "target_takes": comparison.repeatability.target_takes,
        },
        "harmonics": [
            {
                "note": harmonic.note,
                "k": harmonic.k,
                "freq_hz": rounded(harmonic.freq_hz, 6),
                **_difference_body(harmonic.difference_db),
                "p": float(f"{harmonic.p:.6g}"),
                "verdict": harmonic.verdict,
                "takes_needed": harmonic.takes_needed,
            }
            for harmonic in comparison.harmonics
        ],
        "body_curve": [
            {
                "freq_hz": rounded(point.freq_hz, 6),
                **_difference_body(point.difference_db),
                "simultaneous_low_db": rounded(point.simultaneous_low_db, 4),
                "simultaneous_high_db": rounded(point.simultaneous_high_db, 4),
            }
            for point in comparison.body_curve
        ],
        "regions": [_region_body(region) for region in comparison.regions],
        "remarks": list(comparison.remarks),
        **ringing_body(comparison),
        "suggestions": [
            {
                "rank": suggestion.rank,
                "region": None if suggestion.region is None else _region_body(suggestion.region),
                "evidence": suggestion.evidence,
                "moves": [
                    {"text": move.text, "reversible": move.reversible, "basis": move.basis} for move in suggestion.moves
                ],
                "cautions": list(suggestion.cautions),
            }
            for suggestion in suggestions
        ],
    }
    return _text(layout.COMPARISON_FORMAT, layout.ComparisonBody, body)


def save_comparison(comparison: Comparison, suggestions: tuple[Suggestion, ...], path: str | Path) -> None:
    """Write a comparison file, whole or not at all.

    Raises
    ------
    OutputError
        As :func:`comparison_to_json`, and if `path` cannot be written.
    """
    write_whole(path, comparison_to_json(comparison, suggestions).encode())


def load_comparison(path: str | Path) -> tuple[Comparison, tuple[Suggestion, ...]]:
    """Read a comparison file.

    Raises
    ------
    SavedFileError, FileVersionError
        As :func:`load_profile`.
    """
    found, content = read_saved(path)
    if found != layout.COMPARISON_FORMAT:
        refuse_format(found, layout.COMPARISON_FORMAT, str(path))
    body = check(layout.ComparisonBody, content, str(path))
    comparison = Comparison(
        instrument=body.instrument,
        stage=body.stage,
        family=body.family,
        target=body.target,
        margin_db=body.margin_db,
        colour_distance=ColourDistance(
            distance_db=_interval(body.colour_distance_db), own_db=body.colour_distance_db.own
        ),
        closeness_percent=_interval(body.closeness_percent),
        repeatability=Repeatability(**body.repeatability.model_dump()),
        harmonics=tuple(
            HarmonicDifference(
                note=row.note,
                k=row.k,
                freq_hz=row.freq_hz,
                difference_db=_difference(row),
                p=row.p,
                verdict=row.verdict,
                takes_needed=row.takes_needed,
            )
            for row in body.harmonics
        ),
        body_curve=tuple(
            CurvePoint(
                freq_hz=point.freq_hz,
                difference_db=_difference(point),
                simultaneous_low_db=point.simultaneous_low_db,
                simultaneous_high_db=point.simultaneous_high_db,
            )
            for point in body.body_curve
        ),
        regions=tuple(_region(region) for region in body.regions),
        remarks=tuple(body.remarks),
        sustain=read_sustain(body.sustain),
        pluck=read_pluck(body.pluck),
        strings=read_strings(body.strings),
    )
    suggestions = tuple(
        Suggestion(
            rank=row.rank,
            region=None if row.region is None else _region(row.region),
            evidence=row.evidence,
            moves=tuple(Move(**move.model_dump()) for move in row.moves),
            cautions=tuple(row.cautions),
        )
        for row in body.suggestions
    )
    return comparison, suggestions


def _profile_in(found: str, content: object, where: str) -> Profile:
    if found != layout.PROFILE_FORMAT:
        refuse_format(found, layout.PROFILE_FORMAT, where)
    return _profile(check(layout.ProfileBody, content, where))


def _target_in(found: str, content: object, where: str) -> Target:
    if found == layout.PROFILE_FORMAT:
        return as_target(_profile(check(layout.ProfileBody, content, where)))
    if found != layout.TARGET_FORMAT:
        refuse_format(found, f"{layout.TARGET_FORMAT} or {layout.PROFILE_FORMAT}", where)
    body = check(layout.TargetBody, content, where)
    return Target(name=body.name, members=tuple(_profile(member) for member in body.members))


def _text(name: str, body_layout: type[layout.Layout], body: Json) -> str:
    """JSON of a body under its head, checked by the same layout that will read it."""
    try:
        body_layout.model_validate(body)
    except ValidationError as error:
        raise OutputError(f"the {name.partition('/')[2]} cannot be saved: {first_fault(error)}") from error
    head: Json = {"format": name, "version": layout.VERSION}
    return json.dumps(head | body, allow_nan=False, separators=(",", ":")) + "\n"


def _profile_body(profile: Profile) -> Json:
    return {
        "instrument": profile.instrument,
        "stage": profile.stage,
        "family": profile.family,
        "a4_hz": rounded(profile.a4_hz, 6),
        "session": {
            "date": profile.session.date,
            "room": profile.session.room,
            "microphone": profile.session.microphone,
        },
        "takes": [
            {
                "recordings": [{"file": source.file, "sha256": source.sha256} for source in take.recordings],
                "notes": [recipe_body(recipe) for recipe in take.notes],
            }
            for take in profile.takes
        ],
    }


def _profile(body: layout.ProfileBody) -> Profile:
    return Profile(
        instrument=body.instrument,
        stage=body.stage,
        family=body.family,
        a4_hz=body.a4_hz,
        takes=tuple(
            Take(
                recordings=tuple(Source(file=source.file, sha256=source.sha256) for source in take.recordings),
                notes=tuple(read_recipe(note) for note in take.notes),
            )
            for take in body.takes
        ),
        session=Session(**body.session.model_dump()),
    )


def _interval_body(interval: Interval) -> Json:
    return {
        "value": rounded(interval.value, 4),
        "low": rounded(interval.low, 4),
        "high": rounded(interval.high, 4),
    }


def _interval(body: layout.IntervalLayout) -> Interval:
    return Interval(value=body.value, low=body.low, high=body.high)


def _difference_body(interval: Interval) -> Json:
    return {
        "difference_db": rounded(interval.value, 4),
        "low_db": rounded(interval.low, 4),
        "high_db": rounded(interval.high, 4),
    }


def _difference(body: layout.DifferenceLayout | layout.CurvePointLayout | layout.RegionLayout) -> Interval:
    return Interval(value=body.difference_db, low=body.low_db, high=body.high_db)


def _region_body(region: Region) -> Json:
    return {
        "low_hz": rounded(region.low_hz, 6),
        "high_hz": rounded(region.high_hz, 6),
        **_difference_body(region.difference_db),
        "verdict": region.verdict,
        "harmonics": region.harmonics,
        "notes": region.notes,
    }


def _region(body: layout.RegionLayout) -> Region:
    return Region(
        low_hz=body.low_hz,
        high_hz=body.high_hz,
        difference_db=_difference(body),
        verdict=body.verdict,
        harmonics=body.harmonics,
        notes=body.notes,
    )
