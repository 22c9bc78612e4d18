"""From recordings: `notes` and `measure`."""

from collections.abc import Sequence
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from timbre_match.cli.speaking import (
    A4,
    AsJson,
    Channel,
    Notes,
    exit_for,
    family_warning,
    listening_for,
    print_json,
    progress,
    show,
)
from timbre_match.errors import TimbreMatchError, UnknownNameError

if TYPE_CHECKING:
    from timbre_match.measure.profile import Session
    from timbre_match.measure.takes import Heard, Listening


def notes(
    recordings: Annotated[
        list[Path],
        typer.Argument(metavar="RECORDING", help="Recordings to listen to; a folder stands for those in it."),
    ],
    notes: Notes = None,
    a4: A4 = 440.0,
    channel: Channel = None,
    as_json: AsJson = False,
) -> None:
    """List the held notes of recordings."""
    results = _heard_in(recordings, listening_for(notes, a4, channel))
    if as_json:
        print_json({"recordings": [_heard_as_json(heard) for heard in results]})
    else:
        from timbre_match.show.tables import held_notes_table

        for heard in results:
            if heard.recording is not None and heard.error is None:
                show(held_notes_table(heard.recording, heard.notes))
    failures = [heard.error for heard in results if heard.error is not None]
    exit_for(failures, usable=len(failures) < len(results))


def measure(
    takes: Annotated[
        list[Path],
        typer.Argument(metavar="TAKE", help="Each a recording, or a folder whose recordings together are one take."),
    ],
    out: Annotated[Path, typer.Option("--out", help="The profile to write (JSON).")],
    instrument: Annotated[str, typer.Option("--instrument", help="The instrument's name.")] = "",
    stage: Annotated[str, typer.Option("--stage", help='The state of the build, such as "in the white".')] = "",
    family: Annotated[str, typer.Option("--family", help="Violin, viola, cello, clarinet, flute ...")] = "",
    date: Annotated[
        str, typer.Option("--date", metavar="YYYY-MM-DD", help="The day of the recording, such as 2026-03-01.")
    ] = "",
    room: Annotated[str, typer.Option("--room", help='Where it was recorded, such as "workshop, by the window".')] = "",
    microphone: Annotated[
        str, typer.Option("--microphone", help="Which microphone, and where it stood. Same words for the same place.")
    ] = "",
    notes: Notes = None,
    a4: A4 = 440.0,
    channel: Channel = None,
    jobs: Annotated[int, typer.Option("--jobs", min=1, help="Recordings to measure side by side.")] = 1,
) -> None:
    """Measure takes and write the instrument's profile."""
    from timbre_match.keep.files import check_output, save_profile
    from timbre_match.measure.takes import measure_takes
    from timbre_match.show.tables import profile_summary

    session = _session(date, room, microphone)
    check_output(out, takes, kind="profile")
    measured = measure_takes(
        takes,
        listening_for(notes, a4, channel),
        instrument=instrument,
        stage=stage,
        family=family,
        session=session,
        jobs=jobs,
        progress=progress,
    )
    save_profile(measured.profile, out)
    show(profile_summary(measured.profile, (*measured.warnings, *family_warning(family))))
    show(f"Written to {out}.")
    exit_for(measured.failures, usable=True)


def _session(date: str, room: str, microphone: str) -> "Session":
    from timbre_match.measure.profile import Session

    try:
        return Session(date=date, room=room, microphone=microphone)
    except UnknownNameError as error:
        raise typer.BadParameter(str(error), param_hint="--date") from error


def _heard_in(places: Sequence[Path], listening: "Listening") -> "list[Heard]":
    """What the recordings gave, in order; a folder without any is a place that cannot be used."""
    from timbre_match.measure.takes import Heard, listen_to_all, recordings_of_take

    found: list[list[Path] | Heard] = []
    for place in places:
        try:
            found.append(recordings_of_take(place))
        except TimbreMatchError as error:
            found.append(Heard(path=place, error=error))
    paths = [path for part in found if not isinstance(part, Heard) for path in part]
    results = iter(listen_to_all(paths, listening, measure=False, progress=progress))
    return [heard for part in found for heard in ([part] if isinstance(part, Heard) else islice(results, len(part)))]


def _heard_as_json(heard: "Heard") -> dict[str, object]:
    entry: dict[str, object] = {"recording": str(heard.path)}
    if heard.recording is not None:
        entry["sample_rate_hz"] = heard.recording.sample_rate_hz
        entry["channel"] = heard.recording.channel
        entry["channel_count"] = heard.recording.channel_count
    entry["warnings"] = [] if heard.recording is None else list(heard.recording.warnings)
    if heard.error is not None:
        entry["error"] = str(heard.error)
    entry["notes"] = [
        {
            "note": note.note,
            "f0_hz": round(note.f0_hz, 6),
            "cents": round(note.cents, 4),
            "start_s": round(note.start_s, 6),
            "end_s": round(note.end_s, 6),
            "cycles": note.cycles,
            "kind": note.kind,
        }
        for note in heard.notes
    ]
    return entry
