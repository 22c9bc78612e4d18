r"""The plucked string: where its partials lie, how hard they pull at the bridge, and what makes them die.

A stiff string under tension has its partials at :math:`f_k = k f_0 \sqrt{1 + B k^2}` (Fletcher 1964, J. Acoust. Soc.
Am. 36:203), f0 being the fundamental of the same string without stiffness and :math:`B = \pi^2 E I / (T L^2)`. Drawn
aside at the share beta of its length and let go, it pulls at the bridge with partial k in proportion to
:math:`\sin(k \pi \beta) / k` (Fletcher & Rossing, *The Physics of Musical Instruments*, chapter 2). It loses its energy
to the air, to friction and bending in its own material, and through the bridge to the body.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

STRING_LENGTH_M = 0.54
"""Sounding length of a small guitar, tuned a minor third above the usual one; common practice, no source."""

_NYLON_MODULUS_PA = 5e9
_NYLON_DENSITY_KG_M3 = 1120.0


@dataclass(frozen=True, kw_only=True, slots=True)
class PluckedString:
    """One string of the instrument.

    Attributes
    ----------
    open_note : str
    density_kg_m : float
        Mass per length.
    bending_n_m2 : float
        Bending stiffness E I.
    friction, air_per_s, bending_loss : float
        Loss factors of friction within the string, of the air (1/s), and of bending: see :func:`string_loss`.
    both_ways : tuple of int
        Partials in which the string's motion along the top is heard beside that square to it.
    """

    open_note: str
    density_kg_m: float
    bending_n_m2: float
    friction: float
    air_per_s: float
    bending_loss: float
    both_ways: tuple[int, ...]

    def tension_n(self, f0_hz: float) -> float:
        """Tension that gives the fundamental `f0_hz`: T = mu (2 L f0)^2."""
        return self.density_kg_m * (2.0 * STRING_LENGTH_M * f0_hz) ** 2

    def inharmonicity(self, f0_hz: float) -> float:
        """B = pi^2 E I / (T L^2) at the tension of the fundamental `f0_hz`."""
        return float(np.pi**2 * self.bending_n_m2 / (self.tension_n(f0_hz) * STRING_LENGTH_M**2))

    def impedance_kg_s(self, f0_hz: float) -> float:
        """Wave impedance sqrt(T mu) = mu 2 L f0."""
        return self.density_kg_m * 2.0 * STRING_LENGTH_M * f0_hz


def _plain_nylon(open_note: str, diameter_m: float, both_ways: tuple[int, ...]) -> PluckedString:
    return PluckedString(
        open_note=open_note,
        density_kg_m=_NYLON_DENSITY_KG_M3 * np.pi / 4.0 * diameter_m**2,
        bending_n_m2=_NYLON_MODULUS_PA * np.pi / 64.0 * diameter_m**4,
        friction=4e-4,
        air_per_s=1.3,
        bending_loss=0.022,
        both_ways=both_ways,
    )


def _wound(open_note: str, density_kg_m: float, bending_n_m2: float, both_ways: tuple[int, ...]) -> PluckedString:
    return PluckedString(
        open_note=open_note,
        density_kg_m=density_kg_m,
        bending_n_m2=bending_n_m2,
        friction=1e-4,
        air_per_s=1.2,
        bending_loss=0.022,
        both_ways=both_ways,
    )


SMALL_GUITAR_STRINGS = (
    _wound("G2", 5.4e-3, 5.5e-5, (3, 5, 9, 14)),
    _wound("C3", 3.1e-3, 5.0e-5, (2, 7, 11)),
    _wound("F3", 1.9e-3, 4.5e-5, (4, 8, 12)),
    _plain_nylon("A#3", 1.02e-3, (3, 6)),
    _plain_nylon("D4", 0.80e-3, (1, 4)),
    _plain_nylon("G4", 0.70e-3, (3,)),
)
"""An invented set. Nylon's modulus and density and the size of the loss factors are from memory; the losses are of the
size that Woodhouse 2004 measured on nylon strings."""


def partial_hz(k: ArrayLike, f0_hz: float, b: float) -> NDArray[np.float64]:
    """Frequency of partial `k` of a stiff string: k f0 sqrt(1 + B k^2)."""
    number = np.asarray(k, dtype=np.float64)
    return np.asarray(number * f0_hz * np.sqrt(1.0 + b * number**2))


def pluck_force(k: ArrayLike, position: float) -> NDArray[np.float64]:
    """Amplitude of partial `k` of the force on the bridge, sin(k pi beta) / k, for a pluck at the share `position`."""
    number = np.asarray(k, dtype=np.float64)
    return np.asarray(np.sin(np.pi * number * position) / number)


def string_loss(k: ArrayLike, f0_hz: float, string: PluckedString) -> NDArray[np.float64]:
    r"""Rate at which the string's own losses make the amplitude of partial `k` die, 1/s.

    The rate is pi f_k eta_k, with the loss factor

    .. math:: \eta_k = \frac{\eta_F + \eta_A / \omega_k + \eta_B B k^2}{1 + B k^2}

    of friction, air and bending (Woodhouse 2004, Acta Acustica united with Acustica 90:945, after Valette; from
    memory).
    """
    number = np.asarray(k, dtype=np.float64)
    b = string.inharmonicity(f0_hz)
    freq_hz = partial_hz(number, f0_hz, b)
    stiff = b * number**2
    factor = string.friction + string.air_per_s / (2.0 * np.pi * freq_hz) + string.bending_loss * stiff
    return np.asarray(np.pi * freq_hz * factor / (1.0 + stiff))


def bridge_loss(f0_hz: float, impedance_kg_s: float, conductance_s_kg: ArrayLike) -> NDArray[np.float64]:
    """Rate at which the bridge takes the amplitude of a partial, 1/s: 2 f0 Z G.

    A wave of the string comes back from a bridge of the conductance G (real part of its admittance), small beside
    1 / Z, weaker by the share 2 Z G, and meets it f0 times a second (Gough 1981, Acustica 49:124; from memory). What
    the body does to the frequencies, a few cents near its resonances, is left out: the partials lie where stiffness
    puts them.
    """
    return np.asarray(2.0 * f0_hz * impedance_kg_s * np.asarray(conductance_s_kg, dtype=np.float64))


__all__ = [
    "SMALL_GUITAR_STRINGS",
    "STRING_LENGTH_M",
    "PluckedString",
    "bridge_loss",
    "partial_hz",
    "pluck_force",
    "string_loss",
]
