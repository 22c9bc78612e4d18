"""Parse, call, print, exit code.

Heavy rooms are imported inside the commands, so that ``--help`` answers at once.
"""

import io
import sys
from collections.abc import Callable
from typing import Annotated

import typer
from typer.core import TyperGroup

from timbre_match.cli import book, book_safety, comparing, measuring
from timbre_match.cli.speaking import EXIT_ERROR, EXIT_INTERRUPTED, complain, say_interrupted
from timbre_match.errors import TimbreMatchError


class _Commands(TyperGroup):
    """The commands; an interrupted one says so, which typer alone would not."""

    def invoke(self, ctx: typer.Context) -> object:  # type: ignore[override]
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt:
            say_interrupted()
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


def main() -> None:
    """Run the command line; an error that the maker can mend is printed without a traceback, exit status 1."""
    if isinstance(sys.stdout, io.TextIOWrapper):
        # A terminal or pipe whose alphabet lacks a sign gets a question mark in its place, not a traceback.
        sys.stdout.reconfigure(errors="replace")
    try:
        app()
    except KeyboardInterrupt:
        say_interrupted()
        sys.exit(EXIT_INTERRUPTED)
    except TimbreMatchError as error:
        complain(error)
        sys.exit(EXIT_ERROR)


@app.callback(invoke_without_command=True)
def root(version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False) -> None:
    """Set options that go before the command."""
    if version:
        from importlib.metadata import version as installed_version

        typer.echo(f"timbre-match {installed_version('timbre-match')}")
        raise typer.Exit


for command in (
    measuring.notes,
    measuring.measure,
    comparing.target,
    comparing.compare,
    comparing.export,
    comparing.demo,
):
    app.command()(command)

_book = typer.Typer(
    help="The bench book: instruments through their build stages, what was measured when, and how.",
    no_args_is_help=True,
)
app.add_typer(_book, name="book")
_of_book: dict[str, Callable[..., None]] = {
    "add": book.add,
    "log": book.log,
    "list": book.list_instruments,
    "show": book.show_instrument,
    "notes": book.notes_to_play,
    "rename": book.rename,
    "aside": book.aside,
    "remeasure": book.remeasure,
    "profile": book_safety.profile,
    "check": book_safety.check,
    "backup": book_safety.backup,
    "restore": book_safety.restore,
    "export": book_safety.export,
    "import": book_safety.take_in,
}
for name, work in _of_book.items():
    _book.command(name)(work)
