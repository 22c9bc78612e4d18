"""From a comparison to what the trade tries, ranked by what an ear would notice and how sure it is.

Regions come first. Their order is by the product of three things:

* the decibels that are sure: the edge of the 95 % interval that lies nearest to zero, so that size and certainty count
  together (a difference of 6 dB known to within 5 counts like one of 1.5 dB known to within 0.5);
* the width in ERB, the ear's own bands (Glasberg & Moore 1990);
* the ear's keenness at the region's middle: the A-weighting of IEC 61672-1 turned from level into loudness with
  Stevens's exponent of 0.3 on intensity, 10^(0.03 A), about 1 from 1 to 5 kHz, 0.6 at 300 Hz and 0.3 at 100 Hz.

Single harmonics follow, and only those that differ, that no region covers, and whose interval leaves the body curve
at their frequency, that is, which stand out of their neighbours.
"""

import math
from collections import defaultdict
from dataclasses import dataclass

import numpy as np

from timbre_match.advise.wording import counted, hertz
from timbre_match.advise.workshop import (
    Family,
    Move,
    Practice,
    WorkshopRow,
    gather_cautions,
    workshop_family,
)
from timbre_match.compare.colour import LOUDNESS_EXPONENT, erb_number
from timbre_match.compare.records import Comparison, HarmonicDifference, Interval, Region, Verdict
from timbre_match.errors import UnknownNameError

__all__ = ["Move", "Suggestion", "suggest"]

_NAMED_HARMONICS = 6
_MEASUREMENT = "follows from the measurement"
_BOTH_WAYS = Move(
    text="Within this one resonance region the evidence points both ways, stronger at one place and weaker at another: "
    "change nothing for it yet, record more takes, and measure again.",
    reversible=True,
    basis=_MEASUREMENT,
)


@dataclass(frozen=True, kw_only=True, slots=True)
class Suggestion:
    """One ranked suggestion: the region it is about, its evidence in a sentence, moves (reversible first), cautions.

    `region` is None where the evidence is single harmonics outside every region.
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
    verdict: Verdict
    evidence: str
    weight: float

    @property
    def practices(self) -> tuple[Practice, ...]:
        return self.row.too_strong if self.verdict == "stronger" else self.row.too_weak

    def opposes(self, other: "_Finding") -> bool:
        """Whether both lie in one row with opposite directions; a lone harmonic does not outvote a region."""
        heard_out = self.region is None or other.region is not None
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
        Best rank (1) first; empty where nothing is known to differ. No two moves of the whole list contradict each
        other: within one row evidence for both directions replaces the moves, and between rows the better rank wins.
    """
    family = _family_or_general(comparison.family)
    findings = _region_findings(comparison, family.rows) + _harmonic_findings(comparison, family.rows)
    findings.sort(key=lambda finding: (finding.region is None, -finding.weight))
    accepted: list[tuple[int, Practice]] = []
    suggestions = []
    for rank, finding in enumerate(findings, start=1):
        if any(finding.opposes(other) for other in findings):
            kept = [one for one in finding.practices if one.way == "check" and one.move.reversible]
            moves = [_BOTH_WAYS, *(one.move for one in kept)]
        else:
            kept = [one for one in finding.practices if not any(one.contradicts(other) for _, other in accepted)]
            moves = [one.move for one in kept]
            moves += _left_out(finding.practices, accepted)
        accepted += [(rank, one) for one in kept]
        suggestions.append(
            Suggestion(
                rank=rank,
                region=finding.region,
                evidence=f"{finding.evidence}. {_what_lies_here(finding.row)}",
                moves=tuple(sorted(moves, key=lambda move: not move.reversible)),
                cautions=(family.remark, *gather_cautions(tuple(kept))),
            )
        )
    return tuple(suggestions)


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
        findings.append(
            _Finding(
                region=region,
                row=_row_of(region, rows),
                verdict=region.verdict,
                evidence=f"{_stretch(region.low_hz, region.high_hz)} is {region.verdict} than the target by "
                f"{_size(size)}, seen in {counted(region.harmonics, 'harmonic')} of {counted(region.notes, 'note')}",
                weight=max(size.low, 0.0) * width_erb * ear_weight(middle_hz),
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
        if len(harmonics) > _NAMED_HARMONICS:
            named.append(f"and {len(harmonics) - _NAMED_HARMONICS} more")
        findings.append(
            _Finding(
                region=None,
                row=rows[index],
                verdict=verdict,
                evidence=f"Single harmonics {verdict} than the target that stand out of their neighbours: "
                + ", ".join(named),
                weight=sum(max(sizes[id(harmonic)].low, 0.0) * ear_weight(harmonic.freq_hz) for harmonic in harmonics),
            )
        )
    return findings


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


def _row_of(region: Region, rows: tuple[WorkshopRow, ...]) -> WorkshopRow:
    """Find the row that shares the widest stretch with the region, in ERB; the region's middle settles a draw."""
    middle_hz = math.sqrt(region.low_hz * region.high_hz)

    def shared(row: WorkshopRow) -> tuple[float, bool]:
        width = float(erb_number(min(row.high_hz, region.high_hz)) - erb_number(max(row.low_hz, region.low_hz)))
        return width, row.low_hz <= middle_hz < row.high_hz

    return max(rows, key=shared)


def _row_index(rows: tuple[WorkshopRow, ...], freq_hz: float) -> int:
    return next((index for index, row in enumerate(rows) if freq_hz < row.high_hz), len(rows) - 1)


def _what_lies_here(row: WorkshopRow) -> str:
    return f"Here lies: {row.name}. {row.about} ({row.basis})"


def _towards(difference_db: Interval, verdict: Verdict) -> Interval:
    """Count the difference in the direction of the verdict, so that "weaker by" is positive."""
    if verdict == "stronger":
        return difference_db
    return Interval(value=-difference_db.value, low=-difference_db.high, high=-difference_db.low)


def _size(size_db: Interval) -> str:
    return f"{size_db.value:.1f} dB ({size_db.low:.1f} to {size_db.high:.1f})"


def _stretch(low_hz: float, high_hz: float) -> str:
    return f"{hertz(low_hz)} to {hertz(high_hz)} Hz"
