"""From a comparison to what the trade tries, ranked by what an ear would notice and how sure it is.

Regions come first. Their order is by the product of three things:

* the decibels that are sure: the edge of the 95 % interval that lies nearest to zero, so that size and certainty count
  together (a difference of 6 dB known to within 5 counts like one of 1.5 dB known to within 0.5);
* the width in ERB, the ear's own bands (Glasberg & Moore 1990);
* the ear's keenness at the region's middle: the A-weighting of IEC 61672-1 turned from level into loudness with
  Stevens's exponent of 0.3 on intensity, 10^(0.03 A), about 1 from 1 to 5 kHz, 0.6 at 300 Hz and 0.3 at 100 Hz.

Stretches of sustain stand among the regions: what is sure of a ratio of decay times is counted in margins of what
listeners did not hear, and a margin counts like 3 dB. Where no more than that margin is possible, nothing is suggested.

Single harmonics follow, and only those that differ, that no region covers, and whose interval leaves the body curve
at their frequency, that is, which stand out of their neighbours.

Three rules guard the instrument. What rests on one harmonic of one note asks for that note again and for nothing else.
Where one side of the comparison rests on a single take, no move appears that cannot be undone. And where the strings
are suspect, they come first, before anything that the ear would rank, and again no move appears that cannot be undone.
"""

import math
from collections import defaultdict
from dataclasses import dataclass

import numpy as np

from timbre_match.advise.wording import counted, hertz, sustain_in_words
from timbre_match.advise.workshop import (
    Family,
    Move,
    Practice,
    WorkshopRow,
    gather_cautions,
    strings_first,
    workshop_family,
)
from timbre_match.compare.colour import LOUDNESS_EXPONENT, erb_number
from timbre_match.compare.records import (
    Comparison,
    HarmonicDifference,
    Interval,
    Region,
    Strings,
    SustainRegion,
    SustainVerdict,
    Verdict,
)
from timbre_match.compare.sustain import INAUDIBLE
from timbre_match.errors import UnknownNameError

__all__ = ["Move", "Suggestion", "ear_weight", "suggest"]

_MOST_SUGGESTIONS = 5
_NAMED_HARMONICS = 6
_FEWEST_TAKES = 2
_MEASUREMENT = "follows from the measurement"
_ONE_TAKE = Move(
    text="Moves that cannot be undone are left out, because one side rests on a single take: record more takes of it "
    "and compare again first.",
    reversible=True,
    basis=_MEASUREMENT,
)
_STRINGS_FIRST = Move(
    text="Moves that cannot be undone are left out, because the strings are suspect: exchange them and compare again "
    "first.",
    reversible=True,
    basis=_MEASUREMENT,
)
_MARGIN_DB = 3.0
"""What a margin of decay times counts like."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Suggestion:
    """One ranked suggestion: the region it is about, its evidence in a sentence, moves (reversible first), cautions.

    `region` is None where the evidence is no region of levels: single harmonics outside every region, sustain, strings.
    """

    rank: int
    region: Region | None
    evidence: str
    moves: tuple[Move, ...]
    cautions: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, slots=True)
class _Finding:
    """Evidence in one row of the workshop table and one direction, before the moves are chosen."""

    region: Region | None
    row: WorkshopRow
    verdict: Verdict | SustainVerdict
    evidence: str
    weight: float
    pooled: bool
    """Whether it is a stretch of frequency rather than single harmonics."""
    lone_note: str = ""
    """What to play again where the evidence is one harmonic of one note; empty where it is more."""

    @property
    def practices(self) -> tuple[Practice, ...]:
        return self.row.too_strong if self.verdict in ("stronger", "longer") else self.row.too_weak

    def opposes(self, other: "_Finding") -> bool:
        """Whether both lie in one row with opposite directions.

        A single harmonic has no voice here, and several outside regions do not outvote a region.
        """
        heard_out = not self.lone_note and not other.lone_note and (not self.pooled or other.pooled)
        return heard_out and self.row == other.row and self.verdict != other.verdict


def suggest(comparison: Comparison) -> tuple[Suggestion, ...]:
    """Suggest what the trade usually tries for the differences that a comparison is sure of.

    Parameters
    ----------
    comparison : Comparison
        Its `family` picks the table of trade practice; an empty or unknown one gives general advice.

    Returns
    -------
    tuple of Suggestion
        Best rank (1) first, five at most; empty where nothing is known to differ. A finding whose moves a better rank
        has named already is left out. No two moves of the whole list contradict each
        other: within one row evidence for both directions replaces the moves, and between rows the better rank wins.
    """
    family = _family_or_general(comparison.family)
    findings = _region_findings(comparison, family.rows) + _harmonic_findings(comparison, family.rows)
    findings += _sustain_findings(comparison, family.sustain or family.rows)
    findings.sort(key=lambda finding: (not finding.pooled, -finding.weight))
    suspicion = _strings_suggestion(comparison.strings, family)
    hold_back = _hold_back(comparison, suspicion)
    accepted: list[tuple[int, Practice]] = []
    named: set[str] = set()
    suggestions: list[Suggestion] = [] if suspicion is None else [suspicion]
    for finding in findings:
        opposing = [other for other in findings if finding.opposes(other)]
        kept, moves = _moves(finding, opposing, accepted, hold_back)
        if named.issuperset(move.text for move in moves):
            continue
        rank = len(suggestions) + 1
        accepted += [(rank, one) for one in kept]
        named.update(move.text for move in moves)
        suggestions.append(
            Suggestion(
                rank=rank,
                region=finding.region,
                evidence=_in_words(finding, opposing),
                moves=tuple(sorted(moves, key=lambda move: not move.reversible)),
                cautions=(family.remark, *gather_cautions(tuple(kept))),
            )
        )
        if rank == _MOST_SUGGESTIONS:
            break
    return tuple(suggestions)


def _moves(
    finding: _Finding, opposing: list[_Finding], accepted: list[tuple[int, Practice]], hold_back: Move | None
) -> tuple[list[Practice], list[Move]]:
    """Choose the practices that stand, and all moves that the suggestion names.

    `hold_back` says why moves that cannot be undone are left out, where they are.
    """
    if finding.lone_note:
        return [], [_again(finding.lone_note)]
    if opposing:
        kept = [one for one in finding.practices if one.way == "check" and one.move.reversible]
        return kept, [_both_ways(finding.row), *(one.move for one in kept)]
    allowed = tuple(one for one in finding.practices if one.move.reversible or hold_back is None)
    kept = [one for one in allowed if not any(one.contradicts(other) for _, other in accepted)]
    moves = [one.move for one in kept] + _left_out(allowed, accepted)
    if hold_back is not None and len(allowed) < len(finding.practices):
        moves.append(hold_back)
    return kept, moves


def _hold_back(comparison: Comparison, suspicion: Suggestion | None) -> Move | None:
    scatter = comparison.repeatability
    if min(scatter.takes, scatter.target_takes) < _FEWEST_TAKES:
        return _ONE_TAKE
    return None if suspicion is None else _STRINGS_FIRST


def _strings_suggestion(strings: Strings | None, family: Family) -> Suggestion | None:
    """Strings before everything else, where inharmonicity differs or high partials alone are lost."""
    if strings is None:
        return None
    evidence = []
    differing = [one for one in strings.notes if one.differs]
    if differing:
        most = max(differing, key=lambda one: abs(math.log(one.ratio.value)))
        evidence.append(
            f"Inharmonicity, which the strings make and not the body, differs in {len(differing)} of "
            f"{counted(len(strings.notes), 'note')}, most in {most.note}: {most.ratio.value:.2f} times the target's "
            f"({most.ratio.low:.2f} to {most.ratio.high:.2f})"
        )
    if strings.dull_from_hz is not None:
        evidence.append(
            f"Only partials above {hertz(strings.dull_from_hz)} Hz are weaker or die sooner, up to the highest, as of "
            "strings that have grown old"
        )
    if not evidence:
        return None
    practice = strings_first()
    return Suggestion(
        rank=1,
        region=None,
        evidence=". ".join(evidence) + ". The strings are the first suspects.",
        moves=(practice.move,),
        cautions=(family.remark, *gather_cautions((practice,))),
    )


def _again(note: str) -> Move:
    return Move(
        text=f"Play {note} again on both sides and compare anew; change nothing on the instrument for it yet.",
        reversible=True,
        basis=_MEASUREMENT,
    )


def _both_ways(row: WorkshopRow) -> Move:
    return Move(
        text=f"Within this one resonance region ({row.name}) the evidence points both ways, stronger at one place and "
        "weaker at another: change nothing for it yet, record more takes, and measure again.",
        reversible=True,
        basis=_MEASUREMENT,
    )


def _in_words(finding: _Finding, opposing: list[_Finding]) -> str:
    """Put the evidence in sentences; with that for the other direction, whose own suggestion may be left out."""
    if finding.lone_note:
        return (
            f"{finding.evidence}. This is one harmonic of one note: how that note was played can do it as well as the "
            "instrument."
        )
    against = "".join(f". But: {other.evidence}" for other in opposing)
    return f"{finding.evidence}{against}. Here lies: {finding.row.name}. {finding.row.about} ({finding.row.basis})"


def ear_weight(freq_hz: float) -> float:
    """Relative keenness of the ear, 1 at 1 kHz: 10^(0.03 A(f)) with the A-weighting of IEC 61672-1:2013, annex E."""
    f2 = freq_hz**2
    ratio = (12194.217**2 * f2**2) / (
        (f2 + 20.598997**2)
        * math.sqrt((f2 + 107.65265**2) * (f2 + 737.86223**2))
        * (f2 + 12194.217**2)
    )  # fmt: skip
    a_db = 20.0 * math.log10(ratio) + 1.9997
    return float(10.0 ** (LOUDNESS_EXPONENT * a_db / 10.0))


def _family_or_general(name: str) -> Family:
    try:
        return workshop_family(name)
    except UnknownNameError:
        return workshop_family("")


def _region_findings(comparison: Comparison, rows: tuple[WorkshopRow, ...]) -> list[_Finding]:
    findings = []
    for region in comparison.regions:
        if region.verdict not in ("stronger", "weaker"):
            continue
        size = _towards(region.difference_db, region.verdict)
        width_erb = float(erb_number(region.high_hz) - erb_number(region.low_hz))
        middle_hz = math.sqrt(region.low_hz * region.high_hz)
        stretch = _stretch(region.low_hz, region.high_hz)
        findings.append(
            _Finding(
                region=region,
                row=_row_of(region, rows),
                verdict=region.verdict,
                evidence=f"{stretch} is {region.verdict} than the target by "
                f"{_size(size)}, seen in {counted(region.harmonics, 'harmonic')} of {counted(region.notes, 'note')}",
                weight=max(size.low, 0.0) * width_erb * ear_weight(middle_hz),
                pooled=True,
                lone_note=f"the note with a harmonic at {stretch}" if region.harmonics == 1 else "",
            )
        )
    return findings


def _harmonic_findings(comparison: Comparison, rows: tuple[WorkshopRow, ...]) -> list[_Finding]:
    groups: dict[tuple[int, Verdict], list[HarmonicDifference]] = defaultdict(list)
    for harmonic in comparison.harmonics:
        if _stands_out(harmonic, comparison):
            groups[_row_index(rows, harmonic.freq_hz), harmonic.verdict].append(harmonic)
    findings = []
    for (index, verdict), harmonics in groups.items():
        sizes = {id(harmonic): _towards(harmonic.difference_db, verdict) for harmonic in harmonics}
        harmonics.sort(key=lambda harmonic: -sizes[id(harmonic)].low)
        named = [
            f"harmonic {harmonic.k} of {harmonic.note} ({hertz(harmonic.freq_hz)} Hz) by {_size(sizes[id(harmonic)])}"
            for harmonic in harmonics[:_NAMED_HARMONICS]
        ]
        kind = "A single harmonic" if len(harmonics) == 1 else "Single harmonics"
        if len(harmonics) > _NAMED_HARMONICS:
            named.append(f"and {len(harmonics) - _NAMED_HARMONICS} more")
        findings.append(
            _Finding(
                region=None,
                row=rows[index],
                verdict=verdict,
                evidence=f"{kind} {verdict} than the target, out of step with the neighbours in frequency: "
                + ", ".join(named),
                weight=sum(max(sizes[id(harmonic)].low, 0.0) * ear_weight(harmonic.freq_hz) for harmonic in harmonics),
                pooled=False,
                lone_note=harmonics[0].note if len(harmonics) == 1 else "",
            )
        )
    return findings


def _sustain_findings(comparison: Comparison, rows: tuple[WorkshopRow, ...]) -> list[_Finding]:
    findings = []
    for region in () if comparison.sustain is None else comparison.sustain.regions:
        margins = _sure_margins(region)
        if margins is None:
            continue
        width_erb = float(erb_number(region.high_hz) - erb_number(region.low_hz))
        middle_hz = math.sqrt(region.low_hz * region.high_hz)
        findings.append(
            _Finding(
                region=None,
                row=_row_of(region, rows),
                verdict=region.verdict,
                evidence=sustain_in_words(region),
                weight=_MARGIN_DB * margins * width_erb * ear_weight(middle_hz),
                pooled=True,
            )
        )
    return findings


def _sure_margins(region: SustainRegion) -> float | None:
    """How many margins of audibility the decay times differ by for certain; None where one is more than possible."""
    if region.verdict == "longer":
        sure, possible, margin = region.ratio.low, region.ratio.high, INAUDIBLE[1]
    elif region.verdict == "shorter":
        sure, possible, margin = region.ratio.high, region.ratio.low, INAUDIBLE[0]
    else:
        return None
    return max(math.log(sure) / math.log(margin), 0.0) if math.log(possible) / math.log(margin) > 1.0 else None


def _stands_out(harmonic: HarmonicDifference, comparison: Comparison) -> bool:
    if harmonic.verdict not in ("stronger", "weaker"):
        return False
    if any(region.low_hz <= harmonic.freq_hz <= region.high_hz for region in comparison.regions):
        return False
    neighbours_db = 0.0
    if comparison.body_curve:
        neighbours_db = float(
            np.interp(
                math.log(harmonic.freq_hz),
                [math.log(point.freq_hz) for point in comparison.body_curve],
                [point.difference_db.value for point in comparison.body_curve],
            )
        )
    return not harmonic.difference_db.low <= neighbours_db <= harmonic.difference_db.high


def _left_out(practices: tuple[Practice, ...], accepted: list[tuple[int, Practice]]) -> list[Move]:
    """Say which levers are not turned here because a suggestion of better rank turns them the other way."""
    clashes: dict[int, list[str]] = defaultdict(list)
    for practice in practices:
        rank = next((rank for rank, other in accepted if practice.contradicts(other)), None)
        if rank is not None and practice.lever not in clashes[rank]:
            clashes[rank].append(practice.lever)
    return [
        Move(
            text=f"Left out here, because suggestion {rank} turns it the other way: {', '.join(levers)}. "
            f"Settle suggestion {rank} first, then measure again.",
            reversible=True,
            basis=_MEASUREMENT,
        )
        for rank, levers in clashes.items()
    ]


def _row_of(region: Region | SustainRegion, rows: tuple[WorkshopRow, ...]) -> WorkshopRow:
    """Find the row that shares the widest stretch with the region, in ERB; the region's middle settles a draw."""
    middle_hz = math.sqrt(region.low_hz * region.high_hz)

    def shared(row: WorkshopRow) -> tuple[float, bool]:
        width = float(erb_number(min(row.high_hz, region.high_hz)) - erb_number(max(row.low_hz, region.low_hz)))
        return width, row.low_hz <= middle_hz < row.high_hz

    return max(rows, key=shared)


def _row_index(rows: tuple[WorkshopRow, ...], freq_hz: float) -> int:
    return next((index for index, row in enumerate(rows) if freq_hz < row.high_hz), len(rows) - 1)


def _towards(difference_db: Interval, verdict: Verdict) -> Interval:
    """Count the difference in the direction of the verdict, so that "weaker by" is positive."""
    if verdict == "stronger":
        return difference_db
    return Interval(value=-difference_db.value, low=-difference_db.high, high=-difference_db.low)


def _size(size_db: Interval) -> str:
    return f"{size_db.value:.1f} dB ({size_db.low:.1f} to {size_db.high:.1f})"


def _stretch(low_hz: float, high_hz: float) -> str:
    return f"{hertz(low_hz)} to {hertz(high_hz)} Hz"
