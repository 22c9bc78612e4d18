"""From a comparison to what the trade tries, ranked by what an ear would notice and how sure it is."""

from dataclasses import dataclass

from timbre_match.compare.comparison import Region


@dataclass(frozen=True, kw_only=True, slots=True)
class Move:
    """Something that makers try: what, whether it can be taken back, and where the advice comes from."""

    text: str
    reversible: bool
    basis: str


@dataclass(frozen=True, kw_only=True, slots=True)
class Suggestion:
    """One ranked suggestion: the region it is about, its evidence in a sentence, moves (reversible first), cautions."""

    rank: int
    region: Region
    evidence: str
    moves: tuple[Move, ...]
    cautions: tuple[str, ...]
