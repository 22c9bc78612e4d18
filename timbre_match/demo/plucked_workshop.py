r"""The plucked instrument of the invented workshop, its two stages, and the truth about its sustain.

The Finch is a small guitar. It was recorded when it had been strung up, and again after a dry winter, when one end of a
brace had come loose: the joint rubs, and partials in one stretch of frequency die sooner. How strong they begin, the
strings, and everything else are as before.

A partial is one or two damped vibrations. The string moves square to the top and along it; what moves along the top is
drained less by the bridge, and the nut and the bridge do not hold both ways alike, so it may sound a little higher. In
most partials only the motion square to the top is loud enough to be heard; in some the other shows too, and they die in
two stages or beat (Weinreich 1977, J. Acoust. Soc. Am. 62:1474).
"""

from dataclasses import dataclass

import numpy as np
import scipy.optimize
from numpy.typing import ArrayLike, NDArray

from timbre_match.demo.body import share_of_stretch
from timbre_match.demo.bowed_string import corner_rounding
from timbre_match.demo.draws import Draws
from timbre_match.demo.plucked_body import small_guitar_body
from timbre_match.demo.plucked_string import (
    SMALL_GUITAR_STRINGS,
    PluckedString,
    bridge_loss,
    partial_hz,
    pluck_force,
    string_loss,
)
from timbre_match.demo.plucking import Pluck, WrittenPluck, draw_hand_place_m, draw_pluck, usual_pluck
from timbre_match.demo.room import REVERBERATION_S, SAMPLE_RATE_HZ, workshop_room
from timbre_match.units import note_to_hz

PLUCKED_FAMILY = "classical guitar"
PLUCKED_TAKES = 3
"""Takes at each stage."""

_SEED = 2
_PLUCKS_KEY = 0
_BOTH_WAYS_KEY = 100
_ALONG_AMPLITUDE = (0.3, 0.8)
_ALONG_HIGHER_HZ = (0.0, 1.5)
_ALONG_DRAIN = 0.15
"""How much of the bridge's conductance a motion along the top meets."""


@dataclass(frozen=True, kw_only=True, slots=True)
class SustainChange:
    """A stretch of frequency in which partials die sooner or later than before.

    Attributes
    ----------
    low_hz, high_hz : float
        The full change holds between these; it dies away over `edge_octaves` outside them.
    t60_factor : float
        Time to fall by 60 dB over what it was; below 1 is shorter.
    edge_octaves : float
        Width of each edge, as in :func:`timbre_match.demo.body.share_of_stretch`.
    """

    low_hz: float
    high_hz: float
    t60_factor: float
    edge_octaves: float = 1.0 / 6.0

    def factor(self, freq_hz: ArrayLike) -> NDArray[np.float64]:
        """Factor of the time to fall by 60 dB at each frequency; same shape as `freq_hz`."""
        share = share_of_stretch(freq_hz, self.low_hz, self.high_hz, self.edge_octaves)
        return np.asarray(self.t60_factor**share)


@dataclass(frozen=True, kw_only=True, slots=True)
class PluckedStage:
    """The plucked instrument in one state.

    Attributes
    ----------
    instrument, name : str
        The instrument and the maker's name for the stage.
    file_stem : str
        What the files of its takes are called.
    changes : tuple of SustainChange
        How its sustain differs from that of the first stage: the truth that a comparison should find.
    """

    instrument: str
    name: str
    file_stem: str
    changes: tuple[SustainChange, ...]


FINCH_STRUNG_UP = PluckedStage(instrument="Finch", name="strung up", file_stem="finch_strung_up", changes=())

FINCH_AFTER_THE_WINTER = PluckedStage(
    instrument="Finch",
    name="after the winter",
    file_stem="finch_after_the_winter",
    changes=(SustainChange(low_hz=380.0, high_hz=800.0, t60_factor=0.5),),
)

PLUCKED_STAGES = (FINCH_STRUNG_UP, FINCH_AFTER_THE_WINTER)
"""In the order of the build; the later one is compared with the earlier."""

_TUNING_CENTS = (-1.0, 1.5, 0.5, -2.0, 0.0, 1.0)

PLUCKED_NOTES = tuple(
    WrittenPluck(note=string.open_note, string=string, tuning_cents=cents)
    for string, cents in zip(SMALL_GUITAR_STRINGS, _TUNING_CENTS, strict=True)
)
"""What is played in every take, in this order: the open strings."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Vibrations:
    """The damped vibrations Re{c exp(s t)} of a note's partials, in front of the instrument; t = 0 is the pluck.

    Attributes
    ----------
    s, c : complex arrays, shape (K, 2)
        Of partials 1 ... K square to the top and along it; c is 0 where the latter is not heard.
    """

    s: NDArray[np.complex128]
    c: NDArray[np.complex128]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class TruePartials:
    """What is true of a note's partials at the microphone, room included.

    Attributes
    ----------
    f0_hz, inharmonicity_b : float
        Of f_k = k f0 sqrt(1 + B k^2).
    k : int64 array, shape (K,)
    freq_hz, level_db, t60_s : float64 arrays, shape (K,)
        Frequency; level at the onset, as a share of the note's partials; and the time to fall by 60 dB, three times
        that in which the energy still to come falls by 20 dB. A partial that dies within twice the room's reverberation
        has no level of its own at the microphone, and no time: NaN.
    beat_hz : float64 array, shape (K,)
        How much higher the motion along the top sounds, where it is heard as well; NaN where it is not.
    """

    f0_hz: float
    inharmonicity_b: float
    k: NDArray[np.int64]
    freq_hz: NDArray[np.float64]
    level_db: NDArray[np.float64]
    t60_s: NDArray[np.float64]
    beat_hz: NDArray[np.float64]

    @property
    def both_ways(self) -> NDArray[np.bool_]:
        """Whether the motion along the top is heard as well, shape (K,)."""
        return np.isfinite(self.beat_hz)


def plucked_file_name(stage: PluckedStage, take: int) -> str:
    """File name of take 1, 2, ... of a stage."""
    return f"{stage.file_stem}_take_{take}.flac"


def plucks_of_take(stage: PluckedStage, take: int) -> tuple[Pluck, ...]:
    """Every note of take 1, 2, ... of a stage as it was plucked, in order; the same at each call."""
    draws = Draws(_SEED, _PLUCKS_KEY, PLUCKED_STAGES.index(stage), take)
    hand_place_m = draw_hand_place_m(draws)
    return tuple(draw_pluck(written.string, _tuned_hz(written), hand_place_m, draws) for written in PLUCKED_NOTES)


def meant_pluck(written: WrittenPluck) -> Pluck:
    """Pluck a written note as it is meant, with nothing left to chance."""
    return usual_pluck(written.string, _tuned_hz(written))


def vibrations(stage: PluckedStage, pluck: Pluck) -> Vibrations:
    """How a pluck makes the instrument sound at a stage."""
    string, f0_hz = pluck.string, pluck.f0_hz
    k = np.arange(1, len(pluck.offsets_db) + 1)
    freq_hz = partial_hz(k, f0_hz, string.inharmonicity(f0_hz))
    body = small_guitar_body()
    own = string_loss(k, f0_hz, string)
    drain = bridge_loss(f0_hz, string.impedance_kg_s(f0_hz), body.conductance_s_kg(freq_hz))
    faster = pluck.decay_factor / true_sustain_factor(stage, freq_hz)
    level = 10.0 ** ((pluck.level_db + pluck.offsets_db) / 20.0)
    force = level * pluck_force(k, pluck.position) * corner_rounding(freq_hz, pluck.rounding_s)
    sound = force * body.radiation.response(freq_hz)
    amplitude, higher_hz = _along_the_top(string, len(k))
    return Vibrations(
        s=np.stack(
            [
                -faster * (own + drain) + 2j * np.pi * freq_hz,
                -faster * (own + _ALONG_DRAIN * drain) + 2j * np.pi * (freq_hz + higher_hz),
            ],
            axis=1,
        ),
        c=np.stack([sound, amplitude * sound], axis=1),
    )


def true_sustain_factor(stage: PluckedStage, freq_hz: ArrayLike) -> NDArray[np.float64]:
    """T60 at this stage over that at the first, for a partial at each frequency; same shape as `freq_hz`."""
    freq = np.asarray(freq_hz, dtype=np.float64)
    return np.asarray(np.prod([np.ones(freq.shape), *(change.factor(freq) for change in stage.changes)], axis=0))


def true_partials(stage: PluckedStage, pluck: Pluck) -> TruePartials:
    """What a measurement of a pluck should find.

    Of :func:`meant_pluck` this is the truth about the stage; of one of :func:`plucks_of_take` it is the truth about
    that recording. The room answers a vibration c exp(s t) that has gone on for longer than its own tail with
    c H(s) exp(s t), H being the z-transform of its response; the level at the onset is that of this vibration carried
    back to the pluck.
    """
    moved = vibrations(stage, pluck)
    room = workshop_room()
    since_s = np.arange(len(room)) / SAMPLE_RATE_HZ
    square_hz, along_hz = moved.s.imag.T / (2.0 * np.pi)
    lasting = np.flatnonzero(-np.log(1000.0) / moved.s[:, 0].real > 2.0 * REVERBERATION_S)
    power, t60_s = np.full((2, len(moved.s)), np.nan)
    for index in lasting:
        s = moved.s[index]
        at_microphone = moved.c[index] * (np.exp(-s[:, np.newaxis] * since_s) @ room)
        power[index] = np.abs(at_microphone.sum()) ** 2
        t60_s[index] = _t60_s(s, at_microphone)
    return TruePartials(
        f0_hz=pluck.f0_hz,
        inharmonicity_b=pluck.string.inharmonicity(pluck.f0_hz),
        k=np.arange(1, len(power) + 1),
        freq_hz=square_hz,
        level_db=10.0 * np.log10(power / np.nansum(power)),
        t60_s=t60_s,
        beat_hz=np.where(moved.c[:, 1] != 0.0, along_hz - square_hz, np.nan),
    )


def _tuned_hz(written: WrittenPluck) -> float:
    return float(note_to_hz(written.note) * 2.0 ** (written.tuning_cents / 1200.0))


def _along_the_top(string: PluckedString, count: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Amplitude of each partial's motion along the top against that square to it, and how much higher it lies, Hz."""
    draws = Draws(_SEED, _BOTH_WAYS_KEY, SMALL_GUITAR_STRINGS.index(string))
    amplitude, higher_hz = np.zeros(count), np.zeros(count)
    for k in string.both_ways:
        amplitude[k - 1] = draws.between(*_ALONG_AMPLITUDE)
        higher_hz[k - 1] = draws.between(*_ALONG_HIGHER_HZ)
    return amplitude, higher_hz


def _t60_s(s: NDArray[np.complex128], c: NDArray[np.complex128]) -> float:
    """Three times the time in which the energy that is still to come of sum c exp(s t) falls to a hundredth.

    The integral of |sum c_i exp(s_i t)|^2 from t on is the sum over i, j of
    c_i c_j* exp((s_i + s_j*) t) / -(s_i + s_j*).
    """
    if c[1] == 0.0:
        return float(np.log(1000.0) / -s[0].real)
    pair = s[:, None] + s[None, :].conj()
    weight = c[:, None] * c[None, :].conj() / -pair

    def above(time_s: float) -> float:
        return float(np.sum(weight * np.exp(pair * time_s)).real - 0.01 * np.sum(weight).real)

    return 3.0 * float(scipy.optimize.brentq(above, 0.0, np.log(1000.0) / -s.real.max()))


__all__ = [
    "FINCH_AFTER_THE_WINTER",
    "FINCH_STRUNG_UP",
    "PLUCKED_FAMILY",
    "PLUCKED_NOTES",
    "PLUCKED_STAGES",
    "PLUCKED_TAKES",
    "PluckedStage",
    "SustainChange",
    "TruePartials",
    "Vibrations",
    "meant_pluck",
    "plucked_file_name",
    "plucks_of_take",
    "true_partials",
    "true_sustain_factor",
    "vibrations",
]
