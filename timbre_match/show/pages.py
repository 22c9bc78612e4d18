"""What tables and lists for the terminal are made of; light, so that short commands start at once."""

from collections.abc import Sequence

from rich.console import RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from timbre_match.advise.wording import plain


def heading(name: str, detail: str) -> Text:
    """A line with a name in bold, and what else is to be said of it."""
    return Text.assemble((name, "bold"), f"  {detail}" if detail else "")


def frameless_table(*columns: str, left: tuple[str, ...]) -> Table:
    """Table without frame, so that it stays readable in a narrow window and in a copied text."""
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim", show_edge=False)
    for column in columns:
        table.add_column(Text(column), justify="left" if column in left else "right", overflow="fold")
    return table


def listed(sentences: Sequence[str]) -> list[RenderableType]:
    """Sentences as a list with dashes."""
    return [Padding(Text(f"- {plain(sentence, 700)}"), (0, 0, 0, 1), expand=False) for sentence in sentences]


def remarks(sentences: Sequence[str]) -> list[RenderableType]:
    """What the maker should keep in mind, under a heading of its own; nothing where there is nothing."""
    if not sentences:
        return []
    return [Text(), Text("To keep in mind", "bold"), *listed(sentences)]
