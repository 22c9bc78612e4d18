"""The hand that plucks: the same note twice is never the same.

Each note of each take is one pluck with its own strength, place and tuning, a little different in each partial's level
and decay. How much it differs is a choice of this invented workshop, of the size of careful repeats: a pluck a few
millimetres off moves the partials near the comb's notches by several dB, and the others by tenths.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.demo.draws import Draws
from timbre_match.demo.plucked_string import STRING_LENGTH_M, PluckedString, partial_hz

PLUCK_TO_BRIDGE_M = 0.098
"""Where this hand means to pluck."""

HIGHEST_HZ = 10_000.0
"""Partials above are left out: on nylon they are gone within hundredths of a second."""

_TAKE_PLACE_SD_M = 0.0015
_NOTE_PLACE_SD_M = 0.0015
_ROUNDING_S = 45e-6
_ROUNDING_SD = 0.08
_LEVEL_SD_DB = 1.2
_TUNING_SD_CENTS = 1.2
_PARTIAL_SD_DB = 0.6
_DECAY_SD = 0.03
_LENGTH_S = (2.9, 3.1)


@dataclass(frozen=True, kw_only=True, slots=True)
class WrittenPluck:
    """A note that the player is asked for: an open string, and how far off equal temperament it is tuned."""

    note: str
    string: PluckedString
    tuning_cents: float


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Pluck:
    """One note as it was plucked.

    Attributes
    ----------
    string : PluckedString
    f0_hz : float
        Fundamental of the string without its stiffness.
    position : float
        Distance from the bridge as a share of the string.
    rounding_s : float
        Time constant of the corner that the fingertip rounds.
    level_db : float
        How much louder than usual.
    offsets_db, decay_factor : float64 arrays, shape (K,)
        What sets each partial's level, and its decay rate, apart from the usual; read-only.
    length_s : float
        How long it rings until the hand damps it.
    """

    string: PluckedString
    f0_hz: float
    position: float
    rounding_s: float
    level_db: float
    offsets_db: NDArray[np.float64]
    decay_factor: NDArray[np.float64]
    length_s: float

    def __post_init__(self) -> None:
        for name in ("offsets_db", "decay_factor"):
            array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)


def partial_count(string: PluckedString, f0_hz: float) -> int:
    """How many partials of a string lie below `HIGHEST_HZ`."""
    k = np.arange(1, int(HIGHEST_HZ / f0_hz) + 1)
    return int(np.sum(partial_hz(k, f0_hz, string.inharmonicity(f0_hz)) < HIGHEST_HZ))


def usual_pluck(string: PluckedString, written_hz: float) -> Pluck:
    """Pluck as the hand means it, with nothing left to chance."""
    count = partial_count(string, written_hz)
    return Pluck(
        string=string,
        f0_hz=written_hz,
        position=PLUCK_TO_BRIDGE_M / STRING_LENGTH_M,
        rounding_s=_ROUNDING_S,
        level_db=0.0,
        offsets_db=np.zeros(count),
        decay_factor=np.ones(count),
        length_s=_LENGTH_S[1],
    )


def draw_hand_place_m(draws: Draws) -> float:
    """Draw how far from its usual place the hand sits during one take, metres."""
    return _TAKE_PLACE_SD_M * float(draws.normal(1)[0])


def draw_pluck(string: PluckedString, written_hz: float, hand_place_m: float, draws: Draws) -> Pluck:
    """Draw one pluck of a take whose hand sits `hand_place_m` off its usual place."""
    count = partial_count(string, written_hz)
    place, rounding, level, tuning = draws.normal(4)
    place_m = PLUCK_TO_BRIDGE_M + hand_place_m + _NOTE_PLACE_SD_M * float(place)
    return Pluck(
        string=string,
        f0_hz=written_hz * 2.0 ** (_TUNING_SD_CENTS * float(tuning) / 1200.0),
        position=place_m / STRING_LENGTH_M,
        rounding_s=_ROUNDING_S * float(np.exp(_ROUNDING_SD * rounding)),
        level_db=_LEVEL_SD_DB * float(level),
        offsets_db=_PARTIAL_SD_DB * draws.normal(count),
        decay_factor=np.exp(_DECAY_SD * draws.normal(count)),
        length_s=draws.between(*_LENGTH_S),
    )


__all__ = [
    "HIGHEST_HZ",
    "PLUCK_TO_BRIDGE_M",
    "Pluck",
    "WrittenPluck",
    "draw_hand_place_m",
    "draw_pluck",
    "partial_count",
    "usual_pluck",
]
