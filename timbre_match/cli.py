"""Parse, call, print, exit code.

Heavy rooms are imported inside the commands, so that ``--help`` answers at once.
"""

import io
import json
import sys
from collections.abc import Iterable, Iterator, Sequence
from contextlib import AbstractContextManager, nullcontext
from enum import StrEnum
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer
from typer.core import TyperGroup

from timbre_match.errors import TimbreMatchError, UnknownNameError

if TYPE_CHECKING:
    from rich.console import RenderableType

    from timbre_match.measure.profile import Session
    from timbre_match.measure.takes import Heard, Listening

EXIT_ERROR = 1
EXIT_PART = 3
EXIT_INTERRUPTED = 130


class _Commands(TyperGroup):
    """The commands; an interrupted one says so, which typer alone would not."""

    def invoke(self, ctx: typer.Context) -> object:  # type: ignore[override]
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt:
            _say_interrupted()
            raise typer.Exit(EXIT_INTERRUPTED) from None


app = typer.Typer(
    name="timbre-match",
    cls=_Commands,
    help="What an instrument's notes are made of, how it differs from a target, and whether that is more than the "
    "player's hand.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)

Notes = Annotated[
    str | None, typer.Option("--notes", help='The notes that were played, such as "G3 D4 A4 E5"; settles octaves.')
]
A4 = Annotated[float, typer.Option("--a4", min=380.0, max=500.0, help="Tuning reference in Hz.")]
Channel = Annotated[
    int | None, typer.Option("--channel", min=1, help="Channel to take, from 1; by default the strongest.")
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON and nothing else on standard output.")]


class ExportFormat(StrEnum):
    """What `export` can write."""

    CSV = "csv"
    JSON = "json"
    CYCLES = "cycles"


def main() -> None:
    """Run the command line; an error that the maker can mend is printed without a traceback, exit status 1."""
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A terminal or pipe whose alphabet lacks a sign gets a question mark in its place, not a traceback.
        sys.stdout.reconfigure(errors="replace")
    try:
        app()
    except KeyboardInterrupt:
        _say_interrupted()
        sys.exit(EXIT_INTERRUPTED)
    except TimbreMatchError as error:
        _complain(error)
        sys.exit(EXIT_ERROR)


@app.callback(invoke_without_command=True)
def root(version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False) -> None:
    """Set options that go before the command."""
    if version:
        from importlib.metadata import version as installed_version

        typer.echo(f"timbre-match {installed_version('timbre-match')}")
        raise typer.Exit


@app.command()
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
    results = _heard_in(recordings, _listening(notes, a4, channel))
    if as_json:
        _print_json({"recordings": [_heard_as_json(heard) for heard in results]})
    else:
        from timbre_match.show.tables import held_notes_table

        for heard in results:
            if heard.recording is not None and heard.error is None:
                _show(held_notes_table(heard.recording, heard.notes))
    failures = [heard.error for heard in results if heard.error is not None]
    _exit_for(failures, usable=len(failures) < len(results))


@app.command()
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
        _listening(notes, a4, channel),
        instrument=instrument,
        stage=stage,
        family=family,
        session=session,
        jobs=jobs,
        progress=_progress,
    )
    save_profile(measured.profile, out)
    _show(profile_summary(measured.profile, (*measured.warnings, *_family_warning(family))))
    _show(f"Written to {out}.")
    _exit_for(measured.failures, usable=True)


@app.command()
def target(
    profiles: Annotated[list[Path], typer.Argument(metavar="PROFILE", help="Profiles to blend.")],
    name: Annotated[str, typer.Option("--name", help="The target's name.")],
    out: Annotated[Path, typer.Option("--out", help="The target to write (JSON).")],
) -> None:
    """Blend profiles into a target, with a tolerance from how far they differ among themselves."""
    from timbre_match.compare.comparison import tolerance_db
    from timbre_match.compare.target import blend
    from timbre_match.keep.files import check_output, load_profile, save_target

    check_output(out, profiles, kind="target")
    blended = blend(name, tuple(load_profile(path) for path in profiles))
    tolerance = tolerance_db(blended)
    save_target(blended, out)
    if tolerance is None:
        _show("One profile alone says nothing about how far its like may differ.")
    else:
        _show(f"The {len(profiles)} profiles differ among themselves by {tolerance:.1f} dB in tone colour.")
    _show(f"Written to {out}.")


@app.command()
def compare(
    profile: Annotated[Path, typer.Argument(metavar="PROFILE", help="The instrument's profile.")],
    target: Annotated[Path, typer.Option("--target", help="A target, or a plain profile.")],
    margin: Annotated[float, typer.Option("--margin", min=0.1, max=30.0, help="What counts as alike, dB.")] = 3.0,
    control_now: Annotated[
        Path | None,
        typer.Option("--control-now", help="Profile of an unchanged instrument, recorded with the instrument."),
    ] = None,
    control_then: Annotated[
        Path | None, typer.Option("--control-then", help="Profile of the same, recorded with the target.")
    ] = None,
    as_json: AsJson = False,
    out: Annotated[Path | None, typer.Option("--out", help="The comparison to write (JSON).")] = None,
    figures: Annotated[
        Path | None, typer.Option("--figures", help="Folder for the figures (PNG and SVG); made if missing.")
    ] = None,
) -> None:
    """Compare an instrument with a target: verdicts, body curve, regions, and what to try."""
    from timbre_match.keep.files import (
        check_output,
        comparison_to_json,
        load_profile,
        load_target,
        save_comparison,
    )
    from timbre_match.keep.writing import check_folder_place
    from timbre_match.pipeline import compare_and_advise

    if (control_now is None) != (control_then is None):
        raise typer.BadParameter(
            "a control is compared with itself: name both of its profiles", param_hint="--control-now, --control-then"
        )
    if out is not None:
        controls = [path for path in (control_now, control_then) if path is not None]
        check_output(out, [profile, target, *controls], kind="comparison")
    if figures is not None:
        check_folder_place(figures)
    measured, wanted = load_profile(profile), load_target(target)
    now, then = (None if path is None else load_profile(path) for path in (control_now, control_then))
    with _working("comparing"):
        comparison, suggestions = compare_and_advise(
            measured, wanted, margin_db=margin, control_now=now, control_then=then
        )
        if out is not None:
            save_comparison(comparison, suggestions, out)
        if figures is not None:
            from timbre_match.pipeline import write_figures

            write_figures(figures, measured, wanted, comparison)
    if as_json:
        typer.echo(comparison_to_json(comparison, suggestions))
        return
    from timbre_match.show.tables import comparison_summary, suggestions_list

    _show(comparison_summary(comparison))
    sustained = comparison.sustain is not None and bool(comparison.sustain.regions)
    if suggestions or not (comparison.regions or sustained):
        _show(suggestions_list(suggestions))
    for written in (out, figures):
        if written is not None:
            _show(f"Written to {written}.")


@app.command()
def export(
    profile: Annotated[Path, typer.Argument(metavar="PROFILE", help="The profile to export.")],
    kind: Annotated[
        ExportFormat,
        typer.Option("--format", help="csv: a table; json: the profile itself; cycles: one period per note as WAV."),
    ],
    out: Annotated[Path, typer.Option("--out", help="The file, or for cycles the folder, to write.")],
) -> None:
    """Write a profile for other programs."""
    from timbre_match.keep import export as exporting
    from timbre_match.keep.files import check_output, load_profile

    check_output(out, [profile], kind="profile" if kind is ExportFormat.JSON else None)
    write = {
        ExportFormat.CSV: exporting.export_csv,
        ExportFormat.JSON: exporting.export_json,
        ExportFormat.CYCLES: exporting.export_cycles,
    }[kind]
    write(load_profile(profile), out)
    _show(f"Written to {out}.")


@app.command()
def demo(
    out: Annotated[Path, typer.Option("--out", help="Folder for tables, figures and JSON.")] = Path("reports/demo"),
) -> None:
    """Measure and compare the instruments of the invented workshop, from the recordings that come along."""
    from timbre_match.pipeline import run_demo

    for shown in run_demo(out, progress=_progress):
        _show(shown)
    _show(f"Written to {out}.")


def _family_warning(family: str) -> tuple[str, ...]:
    from timbre_match.advise.workshop import families, workshop_family

    try:
        workshop_family(family)
    except UnknownNameError:
        return (f"No table of what to try for {family!r}; there is one for {', '.join(families())}.",)
    return ()


def _session(date: str, room: str, microphone: str) -> "Session":
    from timbre_match.measure.profile import Session

    try:
        return Session(date=date, room=room, microphone=microphone)
    except UnknownNameError as error:
        raise typer.BadParameter(str(error), param_hint="--date") from error


def _listening(notes: str | None, a4_hz: float, channel: int | None) -> "Listening":
    from timbre_match.measure.takes import Listening
    from timbre_match.units import parse_notes

    try:
        names = None if notes is None else parse_notes(notes)
    except UnknownNameError as error:
        raise typer.BadParameter(str(error), param_hint="--notes") from error
    return Listening(notes=names, a4_hz=a4_hz, channel=channel)


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
    results = iter(listen_to_all(paths, listening, measure=False, progress=_progress))
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


def _print_json(content: object) -> None:
    typer.echo(json.dumps(content, indent=1, allow_nan=False))


def _show(content: "RenderableType") -> None:
    from rich.console import Console

    Console(highlight=False, markup=False, emoji=False).print(content)


def _progress(results: "Iterable[Heard]", count: int) -> "Iterator[Heard]":
    """Show how many recordings are done, on standard error and only where a person watches."""
    if not sys.stderr.isatty():
        yield from results
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        yield from bar.track(results, total=count, description="listening")


def _working(what: str) -> AbstractContextManager[object]:
    """Show that something is going on, where a person watches."""
    if not sys.stderr.isatty():
        return nullcontext()
    from rich.console import Console

    return Console(stderr=True).status(what)


def _say_interrupted() -> None:
    typer.echo("timbre-match: interrupted; no file was left half written", err=True)


def _complain(error: TimbreMatchError) -> None:
    typer.echo(f"timbre-match: {error}", err=True)


def _exit_for(failures: Sequence[TimbreMatchError], *, usable: bool) -> None:
    for failure in failures:
        _complain(failure)
    if failures:
        raise typer.Exit(EXIT_PART if usable else EXIT_ERROR)
