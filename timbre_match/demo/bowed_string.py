r"""The bowed string: what Helmholtz motion does to the bridge.

A string under a steady bow moves as two straight parts with a corner that runs round once a period. The force on the
bridge is then a sawtooth, whose harmonic k has the amplitude 2 / (pi k) for a sawtooth between -1 and 1 (Helmholtz,
*On the Sensations of Tone*, 1862; Woodhouse, *Euphonics*, sections 9.1 and 9.7). Real strings differ in two ways that
are modelled here: the corner is rounded, which weakens high harmonics, and harmonics with a node under the bow are
poorly fed.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

STRING_LENGTH_M = 0.328
"""Sounding length of a violin string; common practice, no source."""

BOW_TO_BRIDGE_M = 0.033
"""The invented player bows here on every note, so the bow's share of the string grows as the hand moves up."""

_NODE_DEPTH = 0.35
_NODE_WIDTH = 0.5


@dataclass(frozen=True, kw_only=True, slots=True)
class BowedString:
    """One string of the instrument.

    Attributes
    ----------
    open_note : str
        Note of the open string.
    rounding_s : float
        Time constant of the rounded corner in seconds; heavier strings round it more.
    """

    open_note: str
    rounding_s: float


VIOLIN_STRINGS = (
    BowedString(open_note="G3", rounding_s=44e-6),
    BowedString(open_note="D4", rounding_s=40e-6),
    BowedString(open_note="A4", rounding_s=36e-6),
    BowedString(open_note="E5", rounding_s=32e-6),
)


def sawtooth_amplitude(k: ArrayLike) -> NDArray[np.float64]:
    """Amplitude of harmonic `k` of a sawtooth between -1 and 1: 2 / (pi k)."""
    return np.asarray(2.0 / (np.pi * np.asarray(k, dtype=np.float64)))


def corner_rounding(freq_hz: ArrayLike, rounding_s: float) -> NDArray[np.float64]:
    """Share of a harmonic that a rounded corner leaves: 1 / (1 + (2 pi f tau)^2).

    This is the sawtooth smeared with the pulse exp(-|t| / tau) / (2 tau), a simple form of the rounding that
    Cremer describes (*The Physics of the Violin*, 1984; from memory).
    """
    return np.asarray(1.0 / (1.0 + (2.0 * np.pi * np.asarray(freq_hz, dtype=np.float64) * rounding_s) ** 2))


def bow_position(f0_hz: float, open_hz: float) -> float:
    """Distance from bow to bridge as a share of the sounding length of a note stopped on the string `open_hz`."""
    return BOW_TO_BRIDGE_M / STRING_LENGTH_M * f0_hz / open_hz


def node_shading(k: ArrayLike, position: float) -> NDArray[np.float64]:
    """Share of harmonic `k` that is left when the bow stands at `position`.

    Harmonics near the whole multiples of 1 / `position` have a node under the bow and come out weaker (observed by
    Helmholtz 1862, from memory). Depth and width of these dips are a choice of this invented workshop.
    """
    harmonic = np.asarray(k, dtype=np.float64)
    nearest = np.maximum(np.round(harmonic * position), 1.0) / position
    return np.asarray(1.0 - _NODE_DEPTH * np.exp(-(((harmonic - nearest) / _NODE_WIDTH) ** 2)))


def bridge_force(k: ArrayLike, f0_hz: float, *, open_hz: float, rounding_s: float) -> NDArray[np.float64]:
    """Amplitude of harmonic `k` of the force on the bridge; the ideal sawtooth runs from -1 to 1."""
    harmonic = np.asarray(k, dtype=np.float64)
    rounded = sawtooth_amplitude(harmonic) * corner_rounding(harmonic * f0_hz, rounding_s)
    return np.asarray(rounded * node_shading(harmonic, bow_position(f0_hz, open_hz)))


def harmonic_sum(
    track_hz: NDArray[np.float64],
    weights: NDArray[np.complex128],
    weights_at: NDArray[np.float64],
    sample_rate_hz: int,
) -> NDArray[np.float64]:
    """Sum harmonics with their instantaneous phase, sample by sample.

    Parameters
    ----------
    track_hz : array, shape (n,)
        The fundamental at every sample, Hz.
    weights : complex array, shape (K, m)
        Amplitude and phase of harmonics 1 ... K at m moments; straight lines join them.
    weights_at : array, shape (m,)
        The moments, counted in samples from the start.
    sample_rate_hz : int

    Returns
    -------
    array, shape (n,)
        Sum over k of Re{w_k(t) exp(j k phi(t))}, phi the running phase of the fundamental. Nothing is aliased
        as long as K times the highest fundamental stays under half the sample rate.
    """
    phase = 2.0 * np.pi * np.cumsum(track_hz) / sample_rate_hz
    turn = np.exp(1j * phase)
    harmonic = np.ones_like(turn)
    sample = np.arange(len(track_hz), dtype=np.float64)
    total = np.zeros(len(track_hz))
    for weight in weights:
        harmonic *= turn
        total += np.interp(sample, weights_at, weight.real) * harmonic.real
        total -= np.interp(sample, weights_at, weight.imag) * harmonic.imag
    return total
