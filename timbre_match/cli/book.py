"""The bench book: instruments and sessions.

What keeps it safe, and moves it to another machine, is in `book_safety`.
"""

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from timbre_match.cli.speaking import (
    AsJson,
    Channel,
    Notes,
    exit_for,
    family_warning,
    notes_played,
    print_json,
    progress,
    show,
)
from timbre_match.errors import UnknownNameError

if TYPE_CHECKING:
    from timbre_match.keep.book_records import Conditions

Book = Annotated[
    Path | None,
    typer.Option(
        "--book",
        metavar="FILE",
        help="The bench book; by default that of TIMBRE_MATCH_BOOK, else the one in your data folder.",
        show_default=False,
    ),
]
Instrument = Annotated[str, typer.Argument(metavar="INSTRUMENT", help="The instrument's name in the bench book.")]
Jobs = Annotated[int, typer.Option("--jobs", min=1, help="Recordings to measure side by side.")]


def add(
    instrument: Annotated[str, typer.Argument(metavar="INSTRUMENT", help='Its name, such as "Heron 7".')],
    family: Annotated[str, typer.Option("--family", help="Violin, viola, cello, clarinet, flute ...")],
    remark: Annotated[str, typer.Option("--remark", help="What else is to be remembered of it.")] = "",
    book: Book = None,
) -> None:
    """Add an instrument; the first one begins the book."""
    from timbre_match.advise.wording import plain
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book) as opened:
        opened.add(instrument, family=family, remarks=remark)
        place = opened.place.book
    show(f'"{plain(instrument)}" is in the bench book {place}.')
    for warning in family_warning(family):
        show(warning)


def log(
    instrument: Instrument,
    takes: Annotated[
        list[Path],
        typer.Argument(metavar="TAKE", help="Each a recording, or a folder whose recordings together are one take."),
    ],
    stage: Annotated[str, typer.Option("--stage", help='The state of the build, such as "in the white".')],
    control: Annotated[
        list[Path] | None,
        typer.Option(
            "--control",
            metavar="TAKE",
            help="A take of an instrument that does not change, recorded in the same session; once for each take.",
            show_default=False,
        ),
    ] = None,
    control_name: Annotated[str, typer.Option("--control-name", help="What that instrument is called.")] = "control",
    date: Annotated[str, typer.Option("--date", metavar="YYYY-MM-DD", help="The day of the recording.")] = "",
    room: Annotated[str, typer.Option("--room", help='Where, such as "workshop, by the window".')] = "",
    microphone: Annotated[str, typer.Option("--microphone", help="Which microphone, and where it stood.")] = "",
    distance: Annotated[
        float | None, typer.Option("--distance", help="From the microphone to the instrument, metres.")
    ] = None,
    player: Annotated[str, typer.Option("--player", help="Who played.")] = "",
    bow: Annotated[str, typer.Option("--bow", help="Bow, plectrum, reed or mouthpiece.")] = "",
    strings: Annotated[str, typer.Option("--strings", help="The strings.")] = "",
    temperature: Annotated[float | None, typer.Option("--temperature", help="Of the room, degrees Celsius.")] = None,
    humidity: Annotated[float | None, typer.Option("--humidity", help="Relative, in per cent.")] = None,
    remark: Annotated[str, typer.Option("--remark", help="What else is to be remembered of the session.")] = "",
    notes: Notes = None,
    a4: Annotated[
        float | None, typer.Option("--a4", min=380.0, max=500.0, help="Tuning reference in Hz; 440 if not noted.")
    ] = None,
    channel: Channel = None,
    jobs: Jobs = 1,
    keep_audio: Annotated[
        bool, typer.Option("--keep-audio", help="Copy the recordings into the book's own folder.")
    ] = False,
    book: Book = None,
) -> None:
    """Measure the takes of a session and write it into the book, whole or not at all."""
    from timbre_match.keep.bench_book import BenchBook
    from timbre_match.show.book_tables import logged_summary

    conditions = _conditions(
        date=date,
        room=room,
        microphone=microphone,
        microphone_distance_m=distance,
        player=player,
        bow=bow,
        strings=strings,
        temperature_c=temperature,
        humidity_percent=humidity,
        a4_hz=a4,
        remarks=remark,
    )
    played = notes_played(notes)
    with BenchBook.open(book, create=False) as opened:
        logged = opened.log(
            instrument,
            takes,
            stage=stage,
            controls=control or (),
            control_name=control_name,
            conditions=conditions,
            notes=played,
            channel=channel,
            jobs=jobs,
            keep_audio=keep_audio,
            progress=progress,
        )
    show(logged_summary(logged))
    exit_for(logged.failures, usable=True)


def remeasure(
    instrument: Instrument,
    stage: Annotated[str, typer.Option("--stage", help="This stage alone; by default all of them.")] = "",
    notes: Notes = None,
    channel: Channel = None,
    jobs: Jobs = 1,
    book: Book = None,
) -> None:
    """Measure the recordings of logged sessions anew; the earlier measurements stay in the book."""
    from timbre_match.keep.bench_book import BenchBook
    from timbre_match.show.book_tables import again_summary

    played = notes_played(notes)
    with BenchBook.open(book, create=False) as opened:
        again = opened.measure_again(
            instrument, stage=stage, notes=played, channel=channel, jobs=jobs, progress=progress
        )
    show(again_summary(again))
    exit_for(again.failures, usable=again.measurements > 0)


def list_instruments(
    all_of_them: Annotated[bool, typer.Option("--all", help="Those set aside too.")] = False,
    as_json: AsJson = False,
    book: Book = None,
) -> None:
    """List the instruments and the targets of the book."""
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        every, targets, place = opened.list(all_of_them=True), opened.targets(), opened.place.book
    lines = [line for line in every if all_of_them or not line.set_aside]
    if as_json:
        print_json({"book": place, "instruments": lines, "targets": targets})
        return
    from timbre_match.show.book_tables import instruments_table

    show(instruments_table(lines, targets, hidden=len(every) - len(lines)))


def show_instrument(instrument: Instrument, as_json: AsJson = False, book: Book = None) -> None:
    """Show an instrument: its stages, sessions, conditions and measurements."""
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        shown = opened.show(instrument)
    if as_json:
        print_json(shown)
        return
    from timbre_match.show.book_tables import instrument_page

    show(instrument_page(shown))


def rename(
    instrument: Instrument,
    name: Annotated[str, typer.Argument(metavar="NAME", help="Its new name; the book remembers the old one.")],
    book: Book = None,
) -> None:
    """Give an instrument another name."""
    from timbre_match.advise.wording import plain
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        opened.rename(instrument, name)
    show(f'"{plain(instrument)}" is called "{plain(name)}" now.')


def aside(
    instrument: Instrument,
    session: Annotated[
        int | None, typer.Option("--session", min=1, help="This session alone, by its number in `book show`.")
    ] = None,
    back: Annotated[bool, typer.Option("--back", help="Bring it back.")] = False,
    book: Book = None,
) -> None:
    """Set an instrument or a session aside: it stays in the book, but is not listed and not counted."""
    from timbre_match.advise.wording import plain
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        opened.set_aside(instrument, session=session, aside=not back)
    what = f'"{plain(instrument)}"' if session is None else f'Session {session} of "{plain(instrument)}"'
    show(f"{what} is back." if back else f"{what} is set aside; --back brings it back.")


def notes_to_play(
    family: Annotated[str, typer.Argument(metavar="FAMILY", help="Violin, viola, cello, clarinet, flute ...")],
    as_json: AsJson = False,
) -> None:
    """Say which notes to play for a session, and how to record them."""
    from timbre_match.advise.recording_plan import recording_plan

    plan = recording_plan(family)
    if as_json:
        print_json(plan)
        return
    from timbre_match.show.book_tables import plan_page

    show(plan_page(plan))


def _conditions(**noted: "str | float | None") -> "Conditions":
    """Conditions from options; one that cannot be is wrong usage."""
    from timbre_match.keep.book_records import Conditions

    try:
        return Conditions(**noted)  # type: ignore[arg-type]  # each option has the type of its field
    except UnknownNameError as error:
        raise typer.BadParameter(str(error)) from error
