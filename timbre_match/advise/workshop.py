"""The table of trade practice: what a region of frequency is on a family of instruments, and what makers usually try.

The table is data, in ``advise/data``: ``moves.toml`` holds every move once, ``cautions.toml`` the cautions, and
``families/*.toml`` one file per family that names moves by their keys. A family is added by adding a file. The rows of
a family cover the audible range from 20 Hz to 20 kHz without a gap, so that every difference finds a row; the file
without a family name is the general advice for instruments that have no file of their own. Families whose notes ring
may have a second set of rows, of sustain, which say what is tried where partials ring too long or die too soon.

Each move turns one *lever* (a part or property) one *way*: ``more``, ``less``, or ``check`` where it only looks or
restores. Two moves contradict each other when they turn one lever opposite ways.
"""

import difflib
import re
import tomllib
from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files
from importlib.resources.abc import Traversable
from typing import Any, Literal, TypeVar, get_args

from timbre_match.errors import SavedFileError, UnknownNameError

AUDIBLE_LOW_HZ = 20.0
AUDIBLE_HIGH_HZ = 20000.0

COMMON_PRACTICE = "common practice, no source"

Way = Literal["more", "less", "check"]
_Thing = TypeVar("_Thing")


@dataclass(frozen=True, kw_only=True, slots=True)
class Move:
    """Something that makers try: what, whether it can be taken back, and where the advice comes from."""

    text: str
    reversible: bool
    basis: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Practice:
    """A move with the lever that it turns, the way it turns it, and the cautions that go with it."""

    move: Move
    lever: str
    way: Way
    cautions: tuple[str, ...]

    def contradicts(self, other: "Practice") -> bool:
        """Whether both turn the same lever, one up and one down."""
        return self.lever == other.lever and {self.way, other.way} == {"more", "less"}


@dataclass(frozen=True, kw_only=True, slots=True)
class WorkshopRow:
    """One region of one family.

    Attributes
    ----------
    family : str
        Family name as :func:`families` lists it; empty for general advice.
    low_hz, high_hz : float
        The region.
    name, about : str
        What the region is, in a few words and in a sentence.
    basis : str
        Where `name` and `about` come from: a published source, or "common practice, no source".
    too_strong, too_weak : tuple of Practice
        What the trade tries when the instrument has too much or too little here, reversible moves first; in a row of
        sustain, when it rings too long or not long enough.
    """

    family: str
    low_hz: float
    high_hz: float
    name: str
    about: str
    basis: str
    too_strong: tuple[Practice, ...]
    too_weak: tuple[Practice, ...]

    @property
    def cautions(self) -> tuple[str, ...]:
        """Every caution of the row's moves, each once, with the closing one at the end."""
        return gather_cautions(self.too_strong + self.too_weak)


@dataclass(frozen=True, kw_only=True, slots=True)
class Family:
    """A family's file: its name, other names for it, a remark that holds for all rows, and the rows by frequency.

    `sustain` are the rows of sustain, empty where there are none.
    """

    name: str
    aliases: tuple[str, ...]
    remark: str
    rows: tuple[WorkshopRow, ...]
    sustain: tuple[WorkshopRow, ...]


def families() -> tuple[str, ...]:
    """Names of the families that have a table of their own, in alphabetical order."""
    return tuple(sorted(name for name in _table() if name))


def workshop_family(family: str) -> Family:
    """Table of one family; of general advice where `family` is empty.

    Capitals, and hyphens or underscores in place of spaces, make no difference.

    Raises
    ------
    UnknownNameError
        If no family has this name, or more than one might be meant.
    """
    wanted = _folded(family)
    for known in _table().values():
        if wanted in {_folded(name) for name in (known.name, *known.aliases)}:
            return known
    meant = [name for name in families() if wanted in _folded(name).split()]
    raise UnknownNameError(
        f"{family!r} may mean {' or '.join(meant)}" if meant else f"there is no table for the family {family!r}",
        where="--family",
        cause="more than one family goes by that name" if meant else "the name is spelled otherwise, or new here",
        remedy=f"use one of: {', '.join(families())}; or leave the family out for general advice",
    )


def gather_cautions(practices: tuple[Practice, ...]) -> tuple[str, ...]:
    """Cautions of several moves, each once, in order, ending with the playback level and the maker's judgement."""
    known = _cautions()
    gathered = dict.fromkeys(text for practice in practices for text in practice.cautions)
    return (*gathered, known["playback"], known["closing"])


def read_moves(text: str, file: str, cautions: dict[str, str]) -> dict[str, Practice]:
    """Read the moves, by key, from the text of a moves file.

    Raises
    ------
    SavedFileError
        If the text is not TOML, or a move lacks a key, has one too many, or a value of the wrong kind.
    """
    moves: dict[str, Practice] = {}
    for key, entry in _parsed(text, file).items():
        where = f"{file}, move {key!r}"
        _check_keys(entry, required={"text", "lever", "way", "reversible", "cautions"}, optional={"basis"}, where=where)
        way = entry["way"]
        if way not in get_args(Way):
            raise _broken(where, f"way is {way!r}", "use more, less or check")
        reversible = entry["reversible"]
        if not isinstance(reversible, bool):
            raise _broken(where, f"reversible is {reversible!r}", "write true or false")
        named = _names(entry, "cautions", where)
        if not reversible:
            named = (*named, "removed")
        moves[key] = Practice(
            move=Move(
                text=_words(entry, "text", where),
                reversible=reversible,
                basis=_words(entry, "basis", where) if "basis" in entry else COMMON_PRACTICE,
            ),
            lever=_words(entry, "lever", where),
            way=way,
            cautions=tuple(_named(cautions, name, "caution", where) for name in named),
        )
    return moves


def read_family(text: str, file: str, moves: dict[str, Practice]) -> Family:
    """Read a family from the text of a family file.

    Raises
    ------
    SavedFileError
        If the text is not TOML; a key is missing, unknown or of the wrong kind; a move is not in `moves`; the rows
        leave a gap between 20 Hz and 20 kHz or overlap; a move that cannot be taken back comes before one that can;
        or the moves of one direction contradict each other or are those of the other direction.
    """
    entry = _parsed(text, file)
    _check_keys(entry, required={"family", "aliases", "remark", "region"}, optional={"sustain"}, where=file)
    name = entry["family"]
    if not isinstance(name, str):
        raise _broken(file, f"family is {name!r}", "write a name in quotes")
    return Family(
        name=name,
        aliases=_names(entry, "aliases", file),
        remark=_words(entry, "remark", file),
        rows=_rows(entry["region"], "region", ("too_strong", "too_weak"), name, file, moves),
        sustain=_rows(entry["sustain"], "sustain", ("too_long", "too_short"), name, file, moves)
        if "sustain" in entry
        else (),
    )


def strings_first() -> Practice:
    """The move that comes before all others where the strings are suspected."""
    return _moves()["fresh strings of the target's set"]


def _rows(
    regions: object, kind: str, directions: tuple[str, str], family: str, file: str, moves: dict[str, Practice]
) -> tuple[WorkshopRow, ...]:
    if not isinstance(regions, list) or not regions:
        raise _broken(file, f"there is no {kind}", f"add at least one [[{kind}]]")
    rows = tuple(_row(one, family, f"{file}, {kind} {n}", moves, directions) for n, one in enumerate(regions, start=1))
    edges = [AUDIBLE_LOW_HZ, *(row.high_hz for row in rows)]
    for n, (row, edge) in enumerate(zip(rows, edges, strict=False), start=1):
        if row.low_hz != edge or not row.high_hz > row.low_hz:
            raise _broken(
                f"{file}, {kind} {n}",
                f"it runs from {row.low_hz:g} to {row.high_hz:g} Hz, but the one before ends at {edge:g} Hz",
                f"let each {kind} start where the one before ends; the first starts at 20 Hz",
            )
    if edges[-1] != AUDIBLE_HIGH_HZ:
        raise _broken(file, f"the last {kind} ends at {edges[-1]:g} Hz", "let it end at 20000 Hz")
    return rows


def _row(
    region: object, family: str, where: str, moves: dict[str, Practice], directions: tuple[str, str]
) -> WorkshopRow:
    entry = _check_keys(
        region, required={"low_hz", "high_hz", "name", "about", "basis", *directions}, optional=set(), where=where
    )
    found = []
    for direction in directions:
        place = f"{where}, {direction}"
        practices = tuple(_named(moves, key, "move", place) for key in _names(entry, direction, where))
        if not practices:
            raise _broken(place, "there is no move", "name at least one")
        order = [practice.move.reversible for practice in practices]
        if order != sorted(order, reverse=True):
            raise _broken(place, "a move that cannot be taken back comes before one that can", "put it last")
        if any(one.contradicts(other) for one in practices for other in practices):
            raise _broken(place, "two moves turn the same lever opposite ways", "drop one of them")
        found.append(practices)
    more, less = found
    if {practice for practice in more if practice.way != "check"}.intersection(less):
        much, little = (direction.replace("_", " ") for direction in directions)
        raise _broken(where, f"the same move is given for {much} and for {little}", "drop one of them")
    return WorkshopRow(
        family=family,
        low_hz=_frequency(entry, "low_hz", where),
        high_hz=_frequency(entry, "high_hz", where),
        name=_words(entry, "name", where),
        about=_words(entry, "about", where),
        basis=_words(entry, "basis", where),
        too_strong=more,
        too_weak=less,
    )


@lru_cache(maxsize=1)
def _table() -> dict[str, Family]:
    sources = sorted((_data() / "families").iterdir(), key=lambda source: source.name)
    read = [
        read_family(source.read_text(encoding="utf-8"), source.name, _moves())
        for source in sources
        if source.name.endswith(".toml")
    ]
    return {family.name: family for family in read}


@lru_cache(maxsize=1)
def _moves() -> dict[str, Practice]:
    return read_moves((_data() / "moves.toml").read_text(encoding="utf-8"), "moves.toml", _cautions())


@lru_cache(maxsize=1)
def _cautions() -> dict[str, str]:
    entry = _parsed((_data() / "cautions.toml").read_text(encoding="utf-8"), "cautions.toml")
    return {key: _words(entry, key, "cautions.toml") for key in entry}


def _data() -> Traversable:
    return files("timbre_match") / "advise" / "data"


def _folded(name: str) -> str:
    return " ".join(re.split(r"[\s_-]+", name.strip().casefold()))


def _parsed(text: str, file: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise _broken(file, f"it is not TOML: {error}", "mend the place that is named") from error


def _check_keys(entry: object, *, required: set[str], optional: set[str], where: str) -> dict[str, Any]:
    if not isinstance(entry, dict):
        raise _broken(where, f"it is {entry!r}, not a table of keys", f"write the keys {', '.join(sorted(required))}")
    for key in sorted(required - entry.keys()):
        raise _broken(where, f"the key {key!r} is missing", "add it")
    for key in sorted(entry.keys() - required - optional):
        raise _broken(where, f"the key {key!r} is not known", f"use {', '.join(sorted(required | optional))}")
    return entry


def _words(entry: dict[str, Any], key: str, where: str) -> str:
    value = entry[key]
    if not isinstance(value, str) or not value.strip():
        raise _broken(where, f"{key} is {value!r}", "write words in quotes")
    return value


def _names(entry: dict[str, Any], key: str, where: str) -> tuple[str, ...]:
    value = entry[key]
    if not isinstance(value, list) or not all(isinstance(name, str) for name in value):
        raise _broken(where, f"{key} is {value!r}", "write a list of names in quotes")
    return tuple(value)


def _frequency(entry: dict[str, Any], key: str, where: str) -> float:
    value = entry[key]
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise _broken(where, f"{key} is {value!r}", "write a frequency in Hz")
    return float(value)


def _named(known: dict[str, _Thing], name: str, kind: str, where: str) -> _Thing:
    if name not in known:
        near = difflib.get_close_matches(name, known, n=3)
        hint = f"did you mean {' or '.join(map(repr, near))}?" if near else f"add the {kind} first"
        raise _broken(where, f"the {kind} {name!r} is not known", hint)
    return known[name]


def _broken(where: str, what: str, remedy: str) -> SavedFileError:
    return SavedFileError(what, where=where, cause="the workshop table was edited by hand", remedy=remedy)
