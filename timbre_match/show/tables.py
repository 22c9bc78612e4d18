"""What the terminal shows: held notes, a profile, a comparison, suggestions.

Each function returns something that a rich console prints, at 60 columns as well as at 200, with colour or without.
Names come from the user's files and hands: they are made plain and never read as markup.
"""

import io
import math
from collections import Counter
from collections.abc import Iterable, Sequence
from typing import Final

import numpy as np
from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.text import Text

from timbre_match.advise.suggestions import Suggestion
from timbre_match.advise.wording import counted, hertz, sustain_in_words
from timbre_match.compare.records import Comparison, Sustain, SustainVerdict, Verdict
from timbre_match.intake.notes import HeldNote
from timbre_match.intake.recording import Recording
from timbre_match.measure.profile import Profile
from timbre_match.measure.recipe import Recipe
from timbre_match.show.marks import (
    SIGN,
    SUSTAIN_SIGN,
    SUSTAIN_VERDICTS,
    VERDICTS,
    plain,
    ratio_interval,
    signed_interval,
)
from timbre_match.show.pages import frameless_table, heading, remarks

_COLOUR: Final[dict[Verdict, str]] = {"stronger": "yellow", "weaker": "cyan", "alike": "green", "unsettled": "default"}
_SUSTAIN_COLOUR: Final[dict[SustainVerdict, str]] = {
    "longer": "yellow",
    "shorter": "cyan",
    "alike": "green",
    "unsettled": "default",
}
_LISTED_HARMONICS: Final = 12
_RELATIVE: Final = (
    "All differences are relative: zero is the level on which most of what is heard agrees. Where much of the range "
    "differs, what the zero is becomes unsure, and the intervals say so."
)
_INAUDIBLE: Final = (
    "Alike means no more than 25 % shorter or 40 % longer, which listeners did not hear in a published test."
)
_SOURCE_WORDS: Final = {
    "takes": "the takes themselves",
    "prior": "published figures, because a single take cannot show it",
    "both": "the takes together with published figures",
}


def as_text(contents: Iterable[RenderableType], width: int = 100) -> str:
    """Print what the functions below return to plain text of `width` columns, without colour."""
    page = io.StringIO()
    console = Console(file=page, width=width, color_system=None, highlight=False, markup=False, emoji=False)
    for content in contents:
        console.print(content)
    return page.getvalue()


def held_notes_table(recording: Recording, notes: Sequence[HeldNote]) -> RenderableType:
    """Show the held notes of one recording, with its faults."""
    parts: list[RenderableType] = [
        heading(
            plain(recording.file),
            f"{recording.sample_rate_hz / 1000:g} kHz, channel {recording.channel} of {recording.channel_count}",
        )
    ]
    if notes:
        table = frameless_table("note", "Hz", "cents", "from s", "to s", "cycles", "kind", left=("note", "kind"))
        for held in notes:
            table.add_row(
                Text(plain(held.note, 8)),
                f"{held.f0_hz:.2f}",
                f"{held.cents:+.1f}",
                f"{held.start_s:.2f}",
                f"{held.end_s:.2f}",
                str(held.cycles),
                held.kind,
            )
        parts.append(table)
    else:
        parts.append(Text("No held note."))
    return Group(*parts, *remarks(recording.warnings))


def profile_summary(profile: Profile, warnings: Sequence[str] = ()) -> RenderableType:
    """Show the notes of every take of a profile: pitch, length, harmonics heard, and their typical standard error.

    Parameters
    ----------
    profile : Profile
    warnings : sequence of str
        What was wrong with its recordings.
    """
    name = plain(profile.instrument) or "Unnamed instrument"
    details = [plain(profile.stage), plain(profile.family), counted(len(profile.takes), "take")]
    parts: list[RenderableType] = [heading(name, ", ".join(word for word in details if word))]
    session = profile.session
    noted = [plain(word) for word in (session.date, session.room, session.microphone) if word]
    if noted:
        parts.append(Text(f"Recorded: {', '.join(noted)}."))
    for number, take in enumerate(profile.takes, start=1):
        files = ", ".join(plain(source.file, 40) for source in take.recordings[:3])
        more = f" and {len(take.recordings) - 3} more" if len(take.recordings) > 3 else ""
        parts.append(heading(f"Take {number}", files + more))
        rings = any(recipe.ringing is not None for recipe in take.notes)
        ringing = ("rings s", "B") if rings else ()
        table = frameless_table("note", "Hz", "cents", "cycles", "heard", "error dB", *ringing, left=("note",))
        for recipe in take.notes:
            table.add_row(
                Text(plain(recipe.note, 8)),
                f"{recipe.f0_hz:.2f}",
                f"{recipe.cents:+.1f}",
                str(recipe.cycles),
                f"{int(recipe.heard.sum())} of {recipe.k.size}",
                _typical_error(recipe),
                *(_ringing_cells(recipe) if rings else ()),
            )
        parts.append(table)
    legend = "heard: harmonics above the noise. error: the middle standard error of their levels."
    if any(recipe.ringing is not None for take in profile.takes for recipe in take.notes):
        legend += " rings: time in which the strongest partial falls by 60 dB. B: inharmonicity, in millionths."
    parts.append(Text(legend, "dim"))
    return Group(*parts, *remarks(warnings))


def comparison_summary(comparison: Comparison) -> RenderableType:
    """Show the verdict of a comparison: in words first, then regions, harmonics, notes, remarks."""
    name = plain(comparison.instrument) or "Unnamed instrument"
    stage = f", {plain(comparison.stage)}" if plain(comparison.stage) else ""
    parts: list[RenderableType] = [
        heading(f"{name}{stage}", f"against {plain(comparison.target) or 'the target'}"),
        Text(_colour_sentence(comparison)),
        Text(_RELATIVE),
        Text(_closeness_sentence(comparison)),
        Text(_scatter_sentence(comparison)),
        *_regions(comparison),
        *_differing_harmonics(comparison),
        *_verdict_counts(comparison),
        *_sustain(comparison.sustain),
    ]
    return Group(*parts, *remarks(comparison.remarks))


def suggestions_list(suggestions: Sequence[Suggestion]) -> RenderableType:
    """Show suggestions in order of rank; moves that a better rank has named, and cautions, stand only once."""
    if not suggestions:
        return Text("Nothing is known to differ, so there is nothing to suggest.")
    parts: list[RenderableType] = []
    listed: dict[str, int] = {}
    for suggestion in suggestions:
        sign = SIGN[suggestion.region.verdict] if suggestion.region else "·"
        parts += [Text(), Text(f"{suggestion.rank}  {sign}  {plain(suggestion.evidence, 1500)}", "bold")]
        for move in suggestion.moves:
            if move.text not in listed:
                way_back = "" if move.reversible else "No way back: "
                parts.append(Padding(Text(f"- {way_back}{plain(move.text, 600)}"), (0, 0, 0, 3), expand=False))
        again = sorted({listed[move.text] for move in suggestion.moves if move.text in listed})
        if again:
            count = sum(move.text in listed for move in suggestion.moves)
            places = " and ".join(map(str, again))
            parts.append(
                Padding(
                    Text(f"- and {counted(count, 'move')} named under {places} already"), (0, 0, 0, 3), expand=False
                )
            )
        for move in suggestion.moves:
            listed.setdefault(move.text, suggestion.rank)
    bases = ", ".join(sorted({move.basis for suggestion in suggestions for move in suggestion.moves}))
    parts += [Text(), Text(f"Where the moves come from: {plain(bases, 600)}."), Text(), Text("Take care", "bold")]
    parts += [
        Padding(Text(f"- {plain(caution, 600)}"), (0, 0, 0, 3), expand=False) for caution in _cautions_once(suggestions)
    ]
    return Group(*parts)


def _colour_sentence(comparison: Comparison) -> str:
    distance = comparison.colour_distance
    value = distance.distance_db
    own = (
        "how far single takes of yours lie apart is not known yet"
        if distance.own_db is None
        else f"single takes of yours lie {distance.own_db:.1f} dB apart"
    )
    return (
        f"Colour distance {value.value:.1f} dB ({value.low:.1f} to {value.high:.1f}) "
        f"between the averages of the takes; {own}."
    )


def _closeness_sentence(comparison: Comparison) -> str:
    share = comparison.closeness_percent
    return (
        f"Closeness {share.value:.0f} % ({share.low:.0f} to {share.high:.0f}): "
        f"that share of the loudness lies within {comparison.margin_db:g} dB of the target."
    )


def _scatter_sentence(comparison: Comparison) -> str:
    scatter = comparison.repeatability
    return (
        f"From {counted(scatter.takes, 'take')} against {scatter.target_takes} of the target; "
        f"what changes from take to take is judged by {_SOURCE_WORDS[scatter.source]}."
    )


def _regions(comparison: Comparison) -> list[RenderableType]:
    if not comparison.regions:
        return [Text(), Text("No stretch of frequency is known to differ.", "bold")]
    table = frameless_table("", "from", "to", "difference dB", "harmonics", "notes", left=("",))
    for region in sorted(comparison.regions, key=lambda region: region.low_hz):
        table.add_row(
            _sign(region.verdict),
            f"{hertz(region.low_hz)} Hz",
            f"{hertz(region.high_hz)} Hz",
            signed_interval(region.difference_db),
            str(region.harmonics),
            str(region.notes),
        )
    return [Text(), Text("Stretches of frequency that differ", "bold"), table]


def _differing_harmonics(comparison: Comparison) -> list[RenderableType]:
    differing = [harmonic for harmonic in comparison.harmonics if harmonic.verdict in ("stronger", "weaker")]
    if not differing:
        return [Text(), Text("No single harmonic is known to differ.", "bold")]
    differing.sort(key=lambda harmonic: -abs(harmonic.difference_db.value))
    table = frameless_table("", "note", "harmonic", "at", "difference dB", left=("", "note"))
    for harmonic in differing[:_LISTED_HARMONICS]:
        table.add_row(
            _sign(harmonic.verdict),
            Text(plain(harmonic.note, 8)),
            str(harmonic.k),
            f"{hertz(harmonic.freq_hz)} Hz",
            signed_interval(harmonic.difference_db),
        )
    parts: list[RenderableType] = [
        Text(),
        Text("Harmonics that differ, the largest first (each leans on its neighbours in frequency)", "bold"),
        table,
    ]
    if len(differing) > _LISTED_HARMONICS:
        parts.append(Text(f"and {len(differing) - _LISTED_HARMONICS} more"))
    return parts


def _verdict_counts(comparison: Comparison) -> list[RenderableType]:
    by_note: dict[str, Counter[Verdict]] = {}
    for harmonic in comparison.harmonics:
        by_note.setdefault(harmonic.note, Counter())[harmonic.verdict] += 1
    table = frameless_table("note", *(f"{SIGN[verdict]} {verdict}" for verdict in VERDICTS), left=("note",))
    for note, counts in by_note.items():
        table.add_row(Text(plain(note, 8)), *(str(counts[verdict]) if counts[verdict] else "·" for verdict in VERDICTS))
    return [Text(), Text("Harmonics of each note, instrument against target", "bold"), table]


def _sustain(sustain: Sustain | None) -> list[RenderableType]:
    """Say in words where notes ring longer or shorter, then show it note by note."""
    if sustain is None:
        return []
    parts: list[RenderableType] = [Text(), Text("Sustain: how long partials ring, against the target", "bold")]
    for region in sorted(sustain.regions, key=lambda region: region.low_hz):
        parts.append(Text.assemble(_sustain_sign(region.verdict), f" {sustain_in_words(region)}."))
    if not sustain.regions:
        parts.append(Text("No stretch of frequency is known to ring longer or shorter."))
    counts = Counter(one.verdict for one in sustain.harmonics)
    told = ", ".join(f"{counts[verdict]} {verdict}" for verdict in SUSTAIN_VERDICTS)
    parts.append(Text(f"{counted(len(sustain.harmonics), 'single partial')}: {told}. {_INAUDIBLE}"))
    table = frameless_table("", "note", "decay time, times the target's", "partials", left=("", "note"))
    for note in sustain.notes:
        table.add_row(
            _sustain_sign(note.verdict), Text(plain(note.note, 8)), ratio_interval(note.ratio), str(note.harmonics)
        )
    return [*parts, Text(), Text("Sustain of each note", "bold"), table]


def _typical_error(recipe: Recipe) -> str:
    errors = recipe.se_db[recipe.heard]
    middle = float(np.median(errors)) if errors.size else math.nan
    return f"{middle:.2f}" if math.isfinite(middle) else "·"


def _ringing_cells(recipe: Recipe) -> tuple[str, str]:
    """Decay time of the strongest partial, and inharmonicity; dots where there is none."""
    ringing = recipe.ringing
    if ringing is None or not recipe.heard.any():
        return "·", "·"
    time_s = float(ringing.t60_s[int(np.nanargmax(recipe.level_db))])
    return f"{time_s:.1f}" if math.isfinite(time_s) else "·", f"{1e6 * ringing.inharmonicity_b:.0f}"


def _cautions_once(suggestions: Sequence[Suggestion]) -> list[str]:
    """Every caution once, in order of first mention, with the one that closes each list at the very end."""
    closing = {suggestion.cautions[-1]: None for suggestion in suggestions if suggestion.cautions}
    others = {caution: None for suggestion in suggestions for caution in suggestion.cautions if caution not in closing}
    return [*others, *closing]


def _sign(verdict: Verdict) -> Text:
    return Text(SIGN[verdict], _COLOUR[verdict])


def _sustain_sign(verdict: SustainVerdict) -> Text:
    return Text(SUSTAIN_SIGN[verdict], _SUSTAIN_COLOUR[verdict])
