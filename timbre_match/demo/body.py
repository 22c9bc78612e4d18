r"""The body: resonances between the bridge and the air, with a known truth.

The sound pressure in front of the instrument for a unit force at the bridge is a sum of modes,

.. math:: H(f) = B(f) \sum_m g_m \frac{f^2}{f_m^2 - f^2 + j f f_m / Q_m}

(modal sum of the textbooks, e.g. Fletcher & Rossing, *The Physics of Musical Instruments*; from memory), times the
bridge's own rocking resonance B, which makes the bridge hill. The four lowest modes and the hill lie where Woodhouse
(*Euphonics*, section 5.3, after Bissinger) puts them for the violin; the modes above are drawn once, from a fixed
seed.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.demo.draws import Draws

# one of six seeds tried, for a bridge hill that stays where it is published once the modes are drawn
_BODY_SEED = 1
_SIGNATURE_MODES = (
    # name, Hz, Q, gain
    ("A0", 272.0, 24.0, -0.50),
    ("CBR", 407.0, 32.0, 0.18),
    ("B1-", 462.0, 38.0, 0.40),
    ("B1+", 551.0, 40.0, 0.36),
)
_BAND_LOWEST_HZ = 630.0
_BAND_HIGHEST_HZ = 16000.0
_BAND_SPACING_HZ = 85.0
_BAND_SPACING_SHARE = 0.035
_BRIDGE_HZ = 2450.0
_BRIDGE_Q = 2.6


def share_of_stretch(freq_hz: ArrayLike, low_hz: float, high_hz: float, edge_octaves: float) -> NDArray[np.float64]:
    """How much of a change each frequency has, 0 to 1; same shape as `freq_hz`.

    All of it from `low_hz` to `high_hz`; outside it dies away over `edge_octaves`, a quarter wave of a squared cosine
    over log frequency.
    """
    octaves = np.log2(np.asarray(freq_hz, dtype=np.float64))
    outside = np.maximum(np.log2(low_hz) - octaves, octaves - np.log2(high_hz))
    return np.asarray(np.cos(0.5 * np.pi * np.clip(outside / edge_octaves, 0.0, 1.0)) ** 2)


@dataclass(frozen=True, kw_only=True, slots=True)
class Change:
    """A stretch of frequency in which one body radiates more or less than another.

    Attributes
    ----------
    low_hz, high_hz : float
        The full change holds between these; it dies away over `edge_octaves` outside them.
    gain_db : float
        The change, dB; negative is weaker.
    edge_octaves : float
        Width of each edge, as in :func:`share_of_stretch`.
    """

    low_hz: float
    high_hz: float
    gain_db: float
    edge_octaves: float = 1.0 / 6.0

    def difference_db(self, freq_hz: ArrayLike) -> NDArray[np.float64]:
        """Change in dB at each frequency; same shape as `freq_hz`."""
        return self.gain_db * share_of_stretch(freq_hz, self.low_hz, self.high_hz, self.edge_octaves)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Body:
    """A body as a sum of modes.

    Attributes
    ----------
    mode_hz, mode_q, mode_gain : float64 arrays, shape (M,)
        Frequency, quality factor and signed strength of each mode; read-only.
    bridge_hz, bridge_q : float
        The bridge's rocking resonance.
    changes : tuple of Change
        What sets this body apart from the one that it was modelled on.
    """

    mode_hz: NDArray[np.float64]
    mode_q: NDArray[np.float64]
    mode_gain: NDArray[np.float64]
    bridge_hz: float
    bridge_q: float
    changes: tuple[Change, ...] = ()

    def __post_init__(self) -> None:
        for name in ("mode_hz", "mode_q", "mode_gain"):
            array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)

    def with_changes(self, changes: tuple[Change, ...]) -> "Body":
        """Copy this body, altered by `changes` and nothing else."""
        return replace(self, changes=changes)

    def response(self, freq_hz: ArrayLike) -> NDArray[np.complex128]:
        """Pressure per unit of bridge force, linear and complex; same shape as `freq_hz` (Hz, > 0)."""
        freq = np.asarray(freq_hz, dtype=np.float64)
        square = freq**2
        total = np.zeros(freq.shape, dtype=np.complex128)
        for mode_hz, q, gain in zip(self.mode_hz, self.mode_q, self.mode_gain, strict=True):
            total += gain * square / (mode_hz**2 - square + 1j * freq * (mode_hz / q))
        ratio = freq / self.bridge_hz
        total /= 1.0 - ratio**2 + 1j * ratio / self.bridge_q
        for change in self.changes:
            total *= 10.0 ** (change.difference_db(freq) / 20.0)
        return total


def spread_modes(
    draws: Draws, between_hz: tuple[float, float], spacing_hz: float, spacing_share: float
) -> NDArray[np.float64]:
    """Draw the frequencies of a body's many upper modes, Hz: `spacing_hz` apart, or a share of their own frequency."""
    places = [between_hz[0]]
    while places[-1] < between_hz[1]:
        # further apart where each mode is broad enough to reach its neighbours
        step_hz = max(spacing_hz, spacing_share * places[-1])
        places.append(places[-1] + step_hz * draws.between(0.6, 1.4))
    return np.array(places)


def violin_body() -> Body:
    """Build the body that every instrument of the workshop is modelled on; the same at each call."""
    draws = Draws(_BODY_SEED)
    band_hz = spread_modes(draws, (_BAND_LOWEST_HZ, _BAND_HIGHEST_HZ), _BAND_SPACING_HZ, _BAND_SPACING_SHARE)
    count = len(band_hz)
    band_q = 25.0 + 15.0 * draws.uniform(count)
    # neighbours of random sign: no long stretch in which all modes cancel between their peaks
    sign = np.where(draws.uniform(count) < 0.5, -1.0, 1.0)
    band_gain = sign * (0.10 + 0.12 * draws.uniform(count))
    _, signature_hz, signature_q, signature_gain = zip(*_SIGNATURE_MODES, strict=True)
    return Body(
        mode_hz=np.concatenate([signature_hz, band_hz]),
        mode_q=np.concatenate([signature_q, band_q]),
        mode_gain=np.concatenate([signature_gain, band_gain]),
        bridge_hz=_BRIDGE_HZ,
        bridge_q=_BRIDGE_Q,
    )
