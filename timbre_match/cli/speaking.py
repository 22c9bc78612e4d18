"""What the commands share: options, what they print and where, and how they end."""

import dataclasses
import json
import sys
import unicodedata
from collections.abc import Iterable, Iterator, Sequence
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, TypeVar

import typer

from timbre_match.errors import TimbreMatchError, UnknownNameError

if TYPE_CHECKING:
    from rich.console import RenderableType

    from timbre_match.measure.takes import Listening

_Thing = TypeVar("_Thing")

EXIT_ERROR = 1
EXIT_PART = 3
EXIT_INTERRUPTED = 130

Notes = Annotated[
    str | None, typer.Option("--notes", help='The notes that were played, such as "G3 D4 A4 E5"; settles octaves.')
]
A4 = Annotated[float, typer.Option("--a4", min=380.0, max=500.0, help="Tuning reference in Hz.")]
Channel = Annotated[
    int | None, typer.Option("--channel", min=1, help="Channel to take, from 1; by default the strongest.")
]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON and nothing else on standard output.")]


def listening_for(notes: str | None, a4_hz: float, channel: int | None) -> "Listening":
    """Turn options into how recordings are to be read; a note that does not exist is wrong usage."""
    from timbre_match.measure.takes import Listening

    return Listening(notes=notes_played(notes), a4_hz=a4_hz, channel=channel)


def notes_played(notes: str | None) -> tuple[str, ...] | None:
    """Turn the option into names; a note that does not exist is wrong usage."""
    from timbre_match.units import parse_notes

    try:
        return None if notes is None else parse_notes(notes)
    except UnknownNameError as error:
        raise typer.BadParameter(str(error), param_hint="--notes") from error


def family_warning(family: str) -> tuple[str, ...]:
    """Say so where there is no table of what to try for a family."""
    from timbre_match.advise.workshop import families, workshop_family

    try:
        workshop_family(family)
    except UnknownNameError:
        return (f"No table of what to try for {family!r}; there is one for {', '.join(families())}.",)
    return ()


def print_json(content: object) -> None:
    """Print JSON, and nothing else on standard output."""
    typer.echo(json.dumps(content, indent=1, allow_nan=False, default=_as_json))


def _as_json(thing: object) -> object:
    """Records as groups of keys, and paths as text."""
    if dataclasses.is_dataclass(thing) and not isinstance(thing, type):
        return {field.name: getattr(thing, field.name) for field in dataclasses.fields(thing)}
    if isinstance(thing, Path):
        return str(thing)
    raise TypeError(f"{type(thing).__name__} is nothing that JSON knows")


def show(content: "RenderableType") -> None:
    """Print something that the room `show` made; no text in it is read as markup."""
    from rich.console import Console

    Console(highlight=False, markup=False, emoji=False).print(content)


def progress(results: Iterable[_Thing], count: int) -> Iterator[_Thing]:
    """Show how many recordings are done, on standard error and only where a person watches."""
    if not sys.stderr.isatty():
        yield from results
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        yield from bar.track(results, total=count, description="listening")


def working(what: str) -> AbstractContextManager[object]:
    """Show that something is going on, where a person watches."""
    if not sys.stderr.isatty():
        return nullcontext()
    from rich.console import Console

    return Console(stderr=True).status(what)


def say_interrupted() -> None:
    """Say that Ctrl-C has ended the command."""
    typer.echo("timbre-match: interrupted; no file was left half written", err=True)


def complain(error: TimbreMatchError) -> None:
    """Print an error to standard error."""
    typer.echo(f"timbre-match: {inert(str(error))}", err=True)


def inert(text: str) -> str:
    """Text of several lines without the signs that steer a terminal or turn the direction of writing."""
    return "".join(
        " " if sign != "\n" and unicodedata.category(sign) in ("Cc", "Cf", "Zl", "Zp") else sign for sign in text
    )


def exit_for(failures: Sequence[TimbreMatchError], *, usable: bool) -> None:
    """List what could not be used, and end with the status for it: 3 where something could be, else 1."""
    for failure in failures:
        complain(failure)
    if failures:
        raise typer.Exit(EXIT_PART if usable else EXIT_ERROR)
