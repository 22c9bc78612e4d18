"""Whether notes ring longer or shorter than the target's: per harmonic, per note, and pooled over frequency.

Decay times are compared as ratios, instrument over target; inside, everything is the natural logarithm of one.
A difference counts as `alike` within the changes that listeners did not hear in decay times of plucked strings, about
25 % shorter to 40 % longer (Järveläinen & Tolonen 2001, Perceptual tolerances for decay parameters in plucked string
synthesis, *J. Audio Eng. Soc.* 49(11):1049).
"""

import math

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from timbre_match.compare import body_curve, sustain_model, verdicts
from timbre_match.compare.decay_times import SCATTER, DecayTimes, gather_decays
from timbre_match.compare.records import (
    Interval,
    Sustain,
    SustainHarmonic,
    SustainNote,
    SustainPoint,
    SustainRegion,
    SustainVerdict,
)
from timbre_match.compare.sustain_model import NOTE, OWN, SMOOTH, TAKE, TAKE_NOTE, Fit
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile

Array = NDArray[np.float64]

INAUDIBLE = (0.75, 1.40)
"""Ratios of decay times between which listeners heard no change."""

_Z95 = 1.959963984540054
_LOG_MARGIN = math.log(INAUDIBLE[0]), math.log(INAUDIBLE[1])


def _prior() -> sustain_model.Prior:
    """Standard deviations of log decay times before any take is heard: guesses, and wide ones, as nothing is published.

    From take to take a single decay is allowed to move by a fifth, all decays of one pluck together by an eighth, all
    of one take by a tenth; each of these may well be half or double.
    """
    centre, sd = np.zeros(6), np.zeros(6)
    for place, value, log_sd in (
        (sustain_model.SCATTER, SCATTER, 0.6),
        (TAKE_NOTE, 0.12, 0.6),
        (TAKE, 0.1, 0.6),
        (NOTE, 0.2, 0.7),
        (SMOOTH, 0.35, 0.6),
        (OWN, 0.15, 0.7),
    ):
        # A log-normal standard deviation about this centre has the value's square as its mean variance.
        centre[place], sd[place] = math.log(value) - log_sd**2, log_sd
    return sustain_model.Prior(centre=centre, sd=sd)


def compare_sustain(
    profile: Profile, target: Target, rng: np.random.Generator
) -> tuple[Sustain | None, tuple[str, ...]]:
    """Compare the decay times of the ringing notes that both sides have.

    Returns
    -------
    sustain : Sustain or None
        None where no harmonic rings on both sides.
    remarks : tuple of str
        What a reader of the result has to know.
    """
    times = gather_decays(profile, target)
    if times is None:
        return None, ()
    fit = sustain_model.fit(times.rows, _prior(), rng)
    grid_hz = body_curve.frequency_grid(times.freq_hz)
    draws = fit.effects[:, times.curve] @ times.curve_columns(grid_hz).T
    centre, sd = np.mean(draws, axis=0), np.std(draws, axis=0)
    factor = max(body_curve.simultaneous_factor(draws, centre, sd), _Z95)
    sustain = Sustain(
        source="both" if times.repeated else "prior",
        harmonics=_harmonics(times, fit),
        notes=_notes(times, fit),
        curve=tuple(
            SustainPoint(
                freq_hz=float(hz),
                ratio=_ratio(value, one),
                simultaneous_low=math.exp(value - factor * one),
                simultaneous_high=math.exp(value + factor * one),
            )
            for hz, value, one in zip(grid_hz, centre.tolist(), sd.tolist(), strict=True)
        ),
        regions=_regions(times, grid_hz, draws, np.where(np.abs(centre) > factor * sd, np.sign(centre), 0.0)),
        apart=times.apart,
    )
    return sustain, _remarks(sustain)


def _ratio(value: float, sd: float, reach: float = _Z95) -> Interval:
    return Interval(value=math.exp(value), low=math.exp(value - reach * sd), high=math.exp(value + reach * sd))


def _verdicts(value: Array, sd: Array, df: Array) -> tuple[Array, list[SustainVerdict]]:
    """Two-sided p-values and verdicts: different after Benjamini-Hochberg, alike by two one-sided tests, or neither."""
    p = np.asarray(2.0 * stats.t.sf(np.abs(value) / sd, df))
    different = p <= verdicts.false_discovery_threshold(p)
    middle, half = 0.5 * sum(_LOG_MARGIN), 0.5 * (_LOG_MARGIN[1] - _LOG_MARGIN[0])
    alike = verdicts.equivalence_p(value - middle, sd, half, df) <= verdicts.EQUIVALENCE_LEVEL
    found: list[SustainVerdict] = []
    for place in range(value.size):
        if different[place]:
            found.append("longer" if value[place] > 0 else "shorter")
        else:
            found.append("alike" if alike[place] else "unsettled")
    return p, found


def _harmonics(times: DecayTimes, fit: Fit) -> tuple[SustainHarmonic, ...]:
    here = np.flatnonzero(times.single)
    value, sd = fit.mean[here], fit.sd[here]
    # Only the scatter's share of the variance is known with few degrees of freedom (Satterthwaite 1946, *Biometrics
    # Bulletin* 2).
    df = times.scatter_df[here] / np.maximum(fit.scatter_share[here], 1e-3) ** 2
    p, found = _verdicts(value, sd, df)
    reach = stats.t.ppf(0.975, df)
    return tuple(
        SustainHarmonic(
            note=times.notes[times.note_index[place]],
            k=int(times.k[place]),
            freq_hz=float(times.freq_hz[place]),
            ratio=_ratio(float(value[row]), float(sd[row]), float(reach[row])),
            p=float(p[row]),
            verdict=found[row],
        )
        for row, place in enumerate(here)
    )


def _notes(times: DecayTimes, fit: Fit) -> tuple[SustainNote, ...]:
    members = [np.flatnonzero(times.note_index == place) for place in range(len(times.notes))]
    draws = np.stack([np.mean(fit.harmonics[:, here], axis=1) for here in members], axis=1)
    value, sd = np.mean(draws, axis=0), np.std(draws, axis=0)
    p, found = _verdicts(value, sd, np.full(value.size, np.inf))
    return tuple(
        SustainNote(
            note=name,
            ratio=_ratio(float(value[place]), float(sd[place])),
            p=float(p[place]),
            verdict=found[place],
            harmonics=int(members[place].size),
        )
        for place, name in enumerate(times.notes)
    )


def _regions(times: DecayTimes, hz: Array, draws: Array, side: Array) -> tuple[SustainRegion, ...]:
    """Stretches where the simultaneous band keeps to one side of 1 and at least two partials were measured.

    The size is that of the curve about the place where it is farthest from 1, as of the body curve's regions.
    """
    half_step = float(np.sqrt(hz[1] / hz[0]))
    centre = np.mean(draws, axis=0)
    found = []
    for stretch in body_curve.stretches(side.astype(np.int64)):
        inside = slice(stretch.first, stretch.last + 1)
        low, high = float(hz[stretch.first]) / half_step, float(hz[stretch.last]) * half_step
        members = (times.freq_hz >= low) & (times.freq_hz <= high)
        if np.count_nonzero(members) < 2:
            continue
        peak_hz = hz[inside][np.argmax(np.abs(centre[inside]))]
        near = np.abs(np.log2(hz[inside] / peak_hz)) <= 0.5 / body_curve.KNOTS_PER_OCTAVE
        size = np.mean(draws[:, inside][:, near], axis=1)
        value, sd = float(np.mean(size)), float(np.std(size))
        found.append(
            SustainRegion(
                low_hz=max(low, float(hz[0])),
                high_hz=min(high, float(hz[-1])),
                ratio=_ratio(value, sd),
                verdict="longer" if value > 0 else "shorter",
                harmonics=int(np.count_nonzero(members)),
                notes=int(np.unique(times.note_index[members]).size),
            )
        )
    return tuple(found)


def _remarks(sustain: Sustain) -> tuple[str, ...]:
    remarks = []
    if sustain.source == "prior":
        remarks.append(
            "sustain, one take a side: how far decay times move from pluck to pluck is not measured here, and no "
            f"published figure is known; {100 * SCATTER:.0f} % for a single partial are allowed for, and half or twice "
            "that is held possible; two more takes a side would show this player's own"
        )
    if sustain.apart:
        every = len(sustain.apart) + len(sustain.harmonics)
        remarks.append(
            f"sustain: {len(sustain.apart)} of {every} partials beat or die unclearly on one side at least; they have "
            "no single decay time, are listed apart and not called different, and bear on notes and regions with a "
            "larger error"
        )
    return tuple(remarks)
