"""Names as the book takes them: any script, any sign, but something that can be seen."""

import unicodedata
from collections.abc import Iterable

from timbre_match.advise.wording import plain
from timbre_match.errors import UnknownNameError
from timbre_match.keep.book_records import whole_characters


def name_of(text: str, what: str) -> str:
    """Give a name as it is written down: composed characters (NFC), no spaces around it.

    Raises
    ------
    UnknownNameError
        If nothing in it can be seen.
    """
    name = unicodedata.normalize("NFC", whole_characters(text)).strip()
    if not name_key(name):
        raise UnknownNameError(
            f"the name of {what} is empty",
            cause="nothing was written, or only signs that cannot be seen",
            remedy='give a name, such as "Heron 7"',
        )
    return name


def name_key(name: str) -> str:
    """What two spellings of one name have in common: capitals, spacing and unseen signs make no difference."""
    # Control and format signs (C...) and separators (Z...) can hardly be told apart by looking.
    spaced = "".join(" " if unicodedata.category(sign)[0] in "CZ" else sign for sign in name)
    return unicodedata.normalize("NFC", " ".join(spaced.split()).casefold())


def unknown(name: str, known: Iterable[str], *, what: str, remedy: str) -> UnknownNameError:
    """Make the error for a name that the book does not have, with those that are nearly like it."""
    import difflib

    by_key = {name_key(other): other for other in known}
    near = [by_key[key] for key in difflib.get_close_matches(name_key(name), by_key, n=3, cutoff=0.6)]
    named = " or ".join(f'"{plain(other)}"' for other in near)
    return UnknownNameError(
        f'there is no {what} "{plain(name)}" in the bench book',
        cause=f"a slip in the name: did you mean {named}?" if near else "it has not been added, or has another name",
        remedy=remedy,
    )
