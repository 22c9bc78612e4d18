r"""The body of a small guitar: what it takes from a string, and what it gives to the air.

One set of modes does both. The sound for a unit force at the bridge is the modal sum of :mod:`timbre_match.demo.body`;
the conductance at the bridge, which decides how fast a string's partial is drained, is

.. math:: G(f) = \sum_m \frac{Q_m}{2 \pi f_m M_m} \, \frac{1}{1 + Q_m^2 (f / f_m - f_m / f)^2}

(real part of the modal admittance, e.g. Fletcher & Rossing, *The Physics of Musical Instruments*; from memory), with
the mass M_m that a mode shows at the bridge.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.demo.body import Body, spread_modes
from timbre_match.demo.draws import Draws

_BODY_SEED = 2
_SIGNATURE_MODES = (
    # name, Hz, Q, gain, kg; a small body: air and top at the upper end of what Fletcher & Rossing, chapter 9, give for
    # classical guitars (air 90 to 110 Hz, top 180 to 220 Hz; from memory)
    ("air", 108.0, 20.0, -0.45, 2.6),
    ("top", 216.0, 26.0, 0.55, 1.0),
    ("back", 262.0, 30.0, 0.22, 2.4),
    ("cross", 338.0, 30.0, 0.16, 2.2),
)
_BAND_LOWEST_HZ = 410.0
_BAND_HIGHEST_HZ = 12000.0
_BAND_SPACING_HZ = 70.0
_BAND_SPACING_SHARE = 0.04
_BRIDGE_HZ = 2600.0
_BRIDGE_Q = 0.8
"""The bridge as a mass on the springy top: above this it moves less and less."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class PluckedBody:
    """A body as strings feel it and as it sounds.

    Attributes
    ----------
    radiation : Body
        Its modes, and the sound for a unit force at the bridge.
    mode_kg : float64 array, shape (M,)
        Mass that each mode shows at the bridge; read-only.
    """

    radiation: Body
    mode_kg: NDArray[np.float64]

    def __post_init__(self) -> None:
        masses = np.array(self.mode_kg, dtype=np.float64)
        masses.setflags(write=False)
        object.__setattr__(self, "mode_kg", masses)

    def conductance_s_kg(self, freq_hz: ArrayLike) -> NDArray[np.float64]:
        """Real part of the admittance at the bridge, s/kg; same shape as `freq_hz` (Hz, > 0)."""
        freq = np.asarray(freq_hz, dtype=np.float64)
        total = np.zeros(freq.shape)
        modes = zip(self.radiation.mode_hz, self.radiation.mode_q, self.mode_kg, strict=True)
        for mode_hz, q, mass in modes:
            off = freq / mode_hz - mode_hz / freq
            total += q / (2.0 * np.pi * mode_hz * mass) / (1.0 + (q * off) ** 2)
        return total


def small_guitar_body() -> PluckedBody:
    """Build the small guitar's body; the same at each call."""
    draws = Draws(_BODY_SEED)
    band_hz = spread_modes(draws, (_BAND_LOWEST_HZ, _BAND_HIGHEST_HZ), _BAND_SPACING_HZ, _BAND_SPACING_SHARE)
    count = len(band_hz)
    band_q = 22.0 + 14.0 * draws.uniform(count)
    sign = np.where(draws.uniform(count) < 0.5, -1.0, 1.0)
    band_gain = sign * (0.10 + 0.10 * draws.uniform(count))
    band_kg = 1.6 + 1.6 * draws.uniform(count)
    _, signature_hz, signature_q, signature_gain, signature_kg = zip(*_SIGNATURE_MODES, strict=True)
    return PluckedBody(
        radiation=Body(
            mode_hz=np.concatenate([signature_hz, band_hz]),
            mode_q=np.concatenate([signature_q, band_q]),
            mode_gain=np.concatenate([signature_gain, band_gain]),
            bridge_hz=_BRIDGE_HZ,
            bridge_q=_BRIDGE_Q,
        ),
        mode_kg=np.concatenate([signature_kg, band_kg]),
    )
