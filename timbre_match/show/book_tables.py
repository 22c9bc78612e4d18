"""What the terminal shows of the bench book. Names come from the maker's hands: made plain, never read as markup."""

from collections.abc import Sequence
from typing import TYPE_CHECKING, Final

from rich.console import Group, RenderableType
from rich.padding import Padding
from rich.text import Text

from timbre_match.advise.wording import counted, plain
from timbre_match.keep.book_records import (
    Again,
    BookedInstrument,
    BookedSession,
    BookedStage,
    Checked,
    Conditions,
    InstrumentLine,
    Logged,
    Merged,
    RecordingState,
    TargetLine,
)
from timbre_match.show.pages import frameless_table, heading, listed, remarks

if TYPE_CHECKING:
    from timbre_match.advise.recording_plan import RecordingPlan

_LISTED: Final = 20


def instruments_table(lines: Sequence[InstrumentLine], targets: Sequence[TargetLine], *, hidden: int) -> RenderableType:
    """Show the instruments of the book, the targets, and how many are set aside and not shown."""
    parts: list[RenderableType] = []
    if lines:
        rows = frameless_table(
            "instrument",
            "family",
            "stages",
            "sessions",
            "last session",
            "stage",
            left=("instrument", "family", "last session", "stage"),
        )
        for line in lines:
            rows.add_row(
                Text(plain(line.name) + (" (set aside)" if line.set_aside else "")),
                Text(plain(line.family, 24)),
                str(line.stage_count or "·"),
                str(line.session_count or "·"),
                line.last_day or "·",
                Text(plain(line.last_stage, 40)),
            )
        parts.append(rows)
    else:
        parts.append(Text("No instrument yet."))
    if hidden:
        parts.append(Text(f"{counted(hidden, 'instrument')} set aside and not shown; --all shows them.", "dim"))
    if targets:
        parts.append(Text(f"Targets: {', '.join(plain(target.name) for target in targets)}."))
    return Group(*parts)


def instrument_page(shown: BookedInstrument) -> RenderableType:
    """Show an instrument: its stages in order, and the sessions of each with their conditions and measurements."""
    details = [plain(shown.family), "set aside" if shown.set_aside else ""]
    parts: list[RenderableType] = [heading(plain(shown.name), ", ".join(word for word in details if word))]
    if shown.earlier_names:
        parts.append(Text(f"Earlier names: {', '.join(plain(name) for name in shown.earlier_names)}."))
    if plain(shown.remarks):
        parts.append(Text(plain(shown.remarks, 700)))
    if not shown.stages:
        parts.append(Text("No session yet."))
    for stage in shown.stages:
        parts += [Text(), *_stage(stage)]
    return Group(*parts)


def check_page(checked: Checked) -> RenderableType:
    """Show what a check of the book has found: damage first, then recordings, then what is not measured."""
    parts: list[RenderableType] = []
    if checked.damage:
        parts += [Text("The book is damaged", "bold"), *(_item(plain(each, 300)) for each in checked.damage[:_LISTED])]
        if checked.last_good is not None:
            good = plain(str(checked.last_good), 700)
            parts.append(Text(f'`timbre-match book restore "{good}"` puts the last good back-up in its place.'))
    else:
        rows = counted(checked.counts["sessions"], "session")
        parts.append(Text(f"The book is whole: {counted(checked.counts['instruments'], 'instrument')}, {rows}."))
    by_state: dict[str, list[RecordingState]] = {"missing": [], "altered": []}
    for state in checked.recordings:
        if state.lying != "in place":
            by_state[state.lying].append(state)
    in_place = len(checked.recordings) - sum(map(len, by_state.values()))
    if checked.recordings:
        parts.append(Text(f"{in_place} of {counted(len(checked.recordings), 'recording')} in place and unaltered."))
    for lying, title in (
        ("altered", "Altered since they were measured: their measurements stay, but cannot be made again from these"),
        ("missing", "Not where they were noted: moved, deleted, or on a drive that is not plugged in"),
    ):
        states = by_state[lying]
        if states:
            parts += [Text(), Text(title, "bold")]
            parts += [_item(f"{plain(state.place, 200)}  {_of(state.instruments)}") for state in states[:_LISTED]]
            parts += _more(len(states))
    if by_state["missing"]:
        parts.append(Text("`timbre-match book check --look-in FOLDER` finds recordings that were moved there."))
    if checked.unmeasured:
        parts += [Text(), Text("Not measured", "bold")]
        parts += [
            _item(
                f"{plain(take.file, 60)}: take {take.take_number} of the {take.role}, session {take.session_number} of "
                f"{plain(take.instrument)}, {plain(take.stage)}"
            )
            for take in checked.unmeasured[:_LISTED]
        ]
        parts += _more(len(checked.unmeasured))
        parts.append(
            Text("No note was found in them. `timbre-match book remeasure INSTRUMENT --notes ...` may find one.")
        )
    return Group(*parts)


def plan_page(plan: "RecordingPlan") -> RenderableType:
    """Show which notes to play, and how."""
    parts: list[RenderableType] = [heading(plain(plan.family) or "Any instrument", counted(plan.takes, "take"))]
    if plan.notes:
        parts += [Text(" ".join(plan.notes)), Text(f'For the command line: --notes "{" ".join(plan.notes)}"', "dim")]
    parts += [Text(), *listed(plan.points), Text(), Text(f"Basis: {plan.basis}.", "dim")]
    return Group(*parts)


def _stage(stage: BookedStage) -> list[RenderableType]:
    rows = frameless_table(
        "session", "day", "takes", "notes", "control", "conditions", left=("day", "control", "conditions")
    )
    for session in stage.sessions:
        controls = session.measurements_of("control")
        measured = session.measurements_of("instrument")
        again = f" (measured {len(measured)} times)" if len(measured) > 1 else ""
        rows.add_row(
            str(session.number),
            session.day if session.conditions.date else f"{session.day} logged",
            str(len(session.takes_of("instrument"))),
            str(measured[-1].note_count) if measured else "none",
            Text(plain(controls[-1].instrument, 24) if controls else "·"),
            Text(_conditions(session) + again),
        )
    return [heading(plain(stage.name), counted(len(stage.sessions), "session")), rows]


def _conditions(session: BookedSession) -> str:
    return "; ".join((["set aside"] if session.set_aside else []) + conditions_in_words(session.conditions)) or "·"


def conditions_in_words(conditions: Conditions) -> list[str]:
    """What was noted of a session's conditions, each in a few words."""
    distance, a4 = conditions.microphone_distance_m, conditions.a4_hz
    words = [
        conditions.room,
        ", ".join(part for part in (conditions.microphone, f"{distance:g} m" if distance is not None else "") if part),
        f"player {conditions.player}" if conditions.player else "",
        conditions.bow,
        f"strings {conditions.strings}" if conditions.strings else "",
        f"{conditions.temperature_c:g} °C" if conditions.temperature_c is not None else "",
        f"{conditions.humidity_percent:g} % humidity" if conditions.humidity_percent is not None else "",
        f"a4 {a4:g} Hz" if a4 is not None else "",
        conditions.remarks,
    ]
    return [plain(word, 80) for word in words if plain(word)]


def _of(instruments: Sequence[str]) -> str:
    return f"({', '.join(plain(name, 40) for name in instruments[:3])})" if instruments else ""


def _more(count: int) -> list[RenderableType]:
    return [Text(f"and {count - _LISTED} more; --json lists all")] if count > _LISTED else []


def _item(text: str) -> RenderableType:
    return Padding(Text(f"- {text}"), (0, 0, 0, 1), expand=False)


def logged_summary(logged: Logged) -> RenderableType:
    """Show a session that was just written down."""
    session = logged.session
    takes, controls = session.takes_of("instrument"), session.takes_of("control")
    notes = session.measurements_of("instrument")[-1].note_count
    parts: list[RenderableType] = [
        heading(plain(logged.instrument), f"{plain(logged.stage)}, session {session.number}"),
        Text(
            f"{counted(len(takes), 'take')}, {counted(notes, 'note')}"
            + (f"; {counted(len(controls), 'take')} of the control" if controls else "; no control")
            + ". It is in the bench book."
        ),
    ]
    if not controls:
        parts.append(
            Text("Without a control, what changes from session to session contains microphone, room and player.", "dim")
        )
    return Group(*parts, *remarks(logged.warnings))


def again_summary(again: Again) -> RenderableType:
    """Show what was measured anew."""
    return Group(
        Text(f"{counted(again.measurements, 'measurement')} made anew; the earlier ones stay in the bench book."),
        *remarks(again.warnings),
    )


def merged_summary(file: str, merged: Merged) -> RenderableType:
    """Show what came in from a file."""
    came = ", ".join(
        counted(number, thing)
        for number, thing in (
            (merged.instruments, "instrument"),
            (merged.sessions, "session"),
            (merged.measurements, "measurement"),
            (merged.targets, "target"),
        )
        if number
    )
    parts: list[RenderableType] = [Text(f"{plain(file)}: {came or 'nothing'} new, {merged.known} known already.")]
    parts += [
        Text(f'Another "{plain(before)}" is in the book, so the one that came in is called "{plain(name)}".')
        for before, name in merged.renamed
    ]
    return Group(*parts)
