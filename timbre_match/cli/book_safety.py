"""The bench book: checked, backed up, restored, and moved to another machine."""

from pathlib import Path
from typing import Annotated

import typer

from timbre_match.cli.book import Book, Instrument
from timbre_match.cli.speaking import EXIT_ERROR, AsJson, print_json, progress, show


def check(
    look_in: Annotated[
        list[Path] | None,
        typer.Option(
            "--look-in",
            metavar="FOLDER",
            help="Look for moved recordings here, and note where they are.",
            show_default=False,
        ),
    ] = None,
    as_json: AsJson = False,
    book: Book = None,
) -> None:
    """Read the whole book, and look whether every recording is where it was, unaltered and measured.

    Exit status 1 if the book is damaged or a recording is altered or not in its place.
    """
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        checked = opened.check(look_in=look_in or (), progress=progress)
        place = opened.place.book
    if as_json:
        print_json(
            {
                "book": place,
                "sound": checked.sound,
                "damage": checked.damage,
                "last_good": checked.last_good,
                "recordings": checked.recordings,
                "unmeasured": checked.unmeasured,
                "rows": checked.counts,
            }
        )
    else:
        from timbre_match.show.book_tables import check_page

        show(check_page(checked))
    if not checked.sound:
        raise typer.Exit(EXIT_ERROR)


def backup(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The back-up to write, best on another drive.")],
    book: Book = None,
) -> None:
    """Write the whole book to a file, checked, and the recordings that it keeps to a folder beside it."""
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        counts = opened.backup(file)
    show(f"{_counted(counts)} written to {file}, and checked.")


def restore(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="A back-up that `book backup` or the program made.")],
    book: Book = None,
) -> None:
    """Put a back-up in the place of the book; the book that was there stays beside it under a dated name."""
    from timbre_match.keep.bench_book import BenchBook

    counts, replaced = BenchBook.restore(file, book)
    show(f"{_counted(counts)} restored from {file}, and checked.")
    if replaced is not None:
        show(f"The book that was there is {replaced} now.")


def export(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The file to write (JSON).")],
    instrument: Annotated[
        list[str] | None,
        typer.Option(
            "--instrument",
            metavar="NAME",
            help="This instrument alone; may be given more than once. By default all, and the targets.",
            show_default=False,
        ),
    ] = None,
    book: Book = None,
) -> None:
    """Write instruments with their sessions and profiles for the bench book on another machine."""
    from timbre_match.keep.bench_book import BenchBook

    with BenchBook.open(book, create=False) as opened:
        opened.export(file, instruments=instrument or ())
    show(f"Written to {file}.")


def take_in(
    files: Annotated[
        list[Path],
        typer.Argument(metavar="FILE", help="What `book export` wrote on another machine, or a profile or target."),
    ],
    book: Book = None,
) -> None:
    """Take in another machine's book, or profiles and targets; what is known already is not doubled."""
    from timbre_match.keep.bench_book import BenchBook
    from timbre_match.show.book_tables import merged_summary

    with BenchBook.open(book) as opened:
        for file in files:
            show(merged_summary(file.name, opened.take_in(file)))


def profile(
    instrument: Instrument,
    out: Annotated[Path, typer.Option("--out", help="The profile to write (JSON).")],
    stage: Annotated[str, typer.Option("--stage", help="By default the last one.")] = "",
    session: Annotated[
        int | None, typer.Option("--session", min=1, help="By its number in `book show`; by default the last one.")
    ] = None,
    control: Annotated[bool, typer.Option("--control", help="That of the session's control.")] = False,
    book: Book = None,
) -> None:
    """Write the profile of a session to a file, for `compare` and the other commands."""
    from timbre_match.keep.bench_book import BenchBook
    from timbre_match.keep.files import check_output, save_profile

    check_output(out, [], kind="profile")
    with BenchBook.open(book, create=False) as opened:
        found = opened.profile(instrument, stage=stage, session=session, role="control" if control else "instrument")
    save_profile(found, out)
    show(f"Written to {out}.")


def _counted(counts: dict[str, int]) -> str:
    from timbre_match.advise.wording import counted

    return f"{counted(counts['instruments'], 'instrument')} and {counted(counts['sessions'], 'session')}"
