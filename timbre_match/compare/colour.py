"""Colour distance and closeness: how far apart two tone colours are to the ear.

Levels in dB, frequencies in Hz. Bands are one ERB wide (Glasberg & Moore 1990, Derivation of auditory filter shapes
from notched-noise data, *Hearing Research* 47), the distance is the root-mean-square difference of their levels after
the loudnesses are aligned (after Plomp 1970, Timbre as a multidimensional attribute of complex tones), over audible
bands. Loudness grows as the 0.3rd power of a band's power, which doubles it every 10 dB (Stevens 1957, On the
psychophysical law, *Psychological Review* 64).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from timbre_match.units import db_to_power

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

LOUDNESS_EXPONENT = 0.3
HEARD_RANGE_DB = 60.0
"""Bands further below the note's strongest are not counted."""

MASKED_RATIO_DB = -4.0
"""A harmonic further below what the others excite at its place counts as hidden under them: the signal-to-masker ratio
at the output of an auditory filter at threshold (Patterson et al. 1982, *JASA* 72; value from memory)."""


def erb_hz(freq_hz: ArrayLike) -> Array:
    """Equivalent rectangular bandwidth of the auditory filter at `freq_hz`: 24.7 (4.37 f / 1000 + 1), Hz."""
    return np.asarray(24.7 * (4.37e-3 * np.asarray(freq_hz, dtype=np.float64) + 1.0))


def erb_number(freq_hz: ArrayLike) -> Array:
    """Place on the ear's scale of frequency: 21.4 log10(4.37 f / 1000 + 1)."""
    return np.asarray(21.4 * np.log10(4.37e-3 * np.asarray(freq_hz, dtype=np.float64) + 1.0))


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class BandDifferences:
    """Band differences of one note, loudness aligned.

    Attributes
    ----------
    difference_db : array, shape (n_draws, n_bands)
        Audible bands only.
    loudness : array, shape (n_bands,)
        Share of the target's loudness in each, summing to one.
    """

    difference_db: Array
    loudness: Array

    def scaled(self, factor: Array) -> "BandDifferences":
        """Each draw's differences times a factor of its own, shape (n_draws,)."""
        return BandDifferences(difference_db=factor[:, None] * self.difference_db, loudness=self.loudness)


def audible(freq_hz: Array, level_db: Array) -> NDArray[np.bool_]:
    """Which harmonics of one note, shape (n,), are not hidden under the others.

    Each harmonic is weighed against what the others put into the auditory filter centred on it, the rounded exponential
    (1 + p g) exp(-p g) with p = 4 f / ERB and g the relative distance in frequency (Patterson et al. 1982; Glasberg &
    Moore 1990). Neighbours within half an ERB sound as one with it and do not hide it.
    """
    power = db_to_power(level_db)
    width = erb_hz(freq_hz)
    distance = np.abs(freq_hz[None, :] - freq_hz[:, None])
    pg = 4.0 * distance / width[:, None]
    weight = np.where(distance > 0.5 * width[:, None], (1.0 + pg) * np.exp(-pg), 0.0)
    masked = weight @ power * db_to_power(MASKED_RATIO_DB)
    return np.asarray((power > masked) & (level_db > np.max(level_db) - HEARD_RANGE_DB))


def band_differences(freq_hz: Array, target_db: Array, difference_db: Array) -> BandDifferences:
    """Level differences of one note in bands one ERB wide.

    Parameters
    ----------
    freq_hz, target_db : arrays, shape (n_harmonics,)
        Ascending frequencies, and the target's levels.
    difference_db : array, shape (n_draws, n_harmonics)
        Instrument minus target; any constant in it drops out.
    """
    centre = difference_db - np.mean(difference_db, axis=1, keepdims=True)
    starts, counted = _audible_bands(freq_hz, target_db, np.mean(centre, axis=0))
    target = np.add.reduceat(db_to_power(target_db), starts)
    instrument = np.add.reduceat(db_to_power(target_db + centre), starts, axis=1)
    target, instrument = target[counted], instrument[:, counted]
    loudness = target**LOUDNESS_EXPONENT
    ratio = np.sum(loudness) / np.sum(instrument**LOUDNESS_EXPONENT, axis=1, keepdims=True)
    gain = ratio ** (1.0 / LOUDNESS_EXPONENT)
    return BandDifferences(
        difference_db=10.0 * np.log10(instrument * gain / target), loudness=loudness / np.sum(loudness)
    )


def _audible_bands(freq_hz: Array, target_db: Array, difference_db: Array) -> tuple[IntArray, NDArray[np.bool_]]:
    """First harmonic of each band that holds one, and which of the bands hold one that is heard on either side."""
    band = np.floor(erb_number(freq_hz)).astype(np.int64)
    starts = np.flatnonzero(np.concatenate([[True], np.diff(band) > 0]))
    heard = audible(freq_hz, target_db) | audible(freq_hz, target_db + difference_db)
    return starts, np.maximum.reduceat(heard.astype(np.int64), starts) > 0


def all_bands(note_index: IntArray, freq_hz: Array, target_db: Array, difference_db: Array) -> list[BandDifferences]:
    """:func:`band_differences` of every note; arrays as there, with `note_index` ascending."""
    return [
        band_differences(freq_hz[note], target_db[note], difference_db[:, note]) for note in _notes_apart(note_index)
    ]


def mean_band_variance(
    note_index: IntArray, freq_hz: Array, target_db: Array, difference_db: Array, variance: Array
) -> float:
    """Mean variance of the level of an audible band, dB^2, where each harmonic's level has a variance of its own.

    To first order a band's level follows its harmonics' as far as each makes up its power.

    Parameters
    ----------
    note_index, freq_hz, target_db, difference_db : arrays, shape (n,)
        As in :func:`all_bands`; one difference of each harmonic.
    variance : array, shape (n,)
        dB^2, independent of each other.
    """
    found = []
    for note in _notes_apart(note_index):
        starts, counted = _audible_bands(freq_hz[note], target_db[note], difference_db[note])
        power = db_to_power(target_db[note])
        spread = np.add.reduceat(power**2 * variance[note], starts) / np.add.reduceat(power, starts) ** 2
        found.append(spread[counted])
    return float(np.mean(np.concatenate(found)))


def _notes_apart(note_index: IntArray) -> list[slice]:
    """Where each note's harmonics stand; `note_index` is ascending."""
    starts = np.flatnonzero(np.concatenate([[True], np.diff(note_index) > 0]))
    return [slice(int(a), int(b)) for a, b in zip(starts, np.append(starts[1:], note_index.size), strict=True)]


def loudness_over_frequency(note_index: IntArray, freq_hz: Array, level_db: Array, grid_hz: Array) -> Array:
    """Share of the loudness that each point of a frequency grid stands for, all notes counting alike.

    Parameters
    ----------
    note_index, freq_hz, level_db : arrays, shape (n,)
    grid_hz : array, shape (g,)
        Ascending, two points or more.

    Returns
    -------
    array, shape (g,)
        Sums to one. The loudness of a band one ERB wide is spread evenly over the band.
    """
    band = np.floor(erb_number(freq_hz)).astype(np.int64)
    total = np.zeros(int(np.max(band)) + 1)
    for note in np.unique(note_index):
        here = note_index == note
        power = np.bincount(band[here], weights=db_to_power(level_db[here]), minlength=total.size)
        loudness = power**LOUDNESS_EXPONENT
        total += loudness / np.sum(loudness)
    place = erb_number(grid_hz)
    share = total[np.clip(np.floor(place).astype(np.int64), 0, total.size - 1)] * np.gradient(place)
    return np.asarray(share / np.sum(share))


def colour_distance(bands: list[BandDifferences]) -> Array:
    """Root-mean-square difference in dB over all audible bands of all notes, shape (n_draws,)."""
    squares = np.concatenate([note.difference_db**2 for note in bands], axis=1)
    return np.asarray(np.sqrt(np.mean(squares, axis=1)))


def closeness(bands: list[BandDifferences], margin_db: float) -> Array:
    """Per cent of the loudness within +-`margin_db`, all notes counting alike, shape (n_draws,)."""
    shares = [(np.abs(note.difference_db) <= margin_db) @ note.loudness for note in bands]
    return np.asarray(100.0 * np.mean(shares, axis=0))


def distance_between_takes(note_index: IntArray, freq_hz: Array, mean_db: Array, level_db: Array) -> float | None:
    """Colour distance between takes of one instrument: root-mean-square over all pairs of takes.

    Parameters
    ----------
    note_index, freq_hz, mean_db : arrays, shape (n,)
    level_db : array, shape (n_takes, n)
        NaN where not heard; harmonics that both takes of a pair have are compared.

    Returns
    -------
    float or None
        dB; None where no two takes have a harmonic in common.
    """
    found = []
    for first in range(level_db.shape[0]):
        for second in range(first + 1, level_db.shape[0]):
            gap = level_db[first] - level_db[second]
            both = np.isfinite(gap) & np.isfinite(mean_db)
            if np.any(both):
                bands = all_bands(note_index[both], freq_hz[both], mean_db[both], gap[None, both])
                found.append(float(colour_distance(bands)[0]))
    return float(np.sqrt(np.mean(np.square(found)))) if found else None
