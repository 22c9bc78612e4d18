"""What a comparison rests on: differences of the aligned takes, and how far the playing scatters them."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare import body_curve, model
from timbre_match.compare.alignment import SET_ASIDE_WEIGHT, AlignedTakes, Pairing, align_takes, pair
from timbre_match.compare.repeatability import ScatterPrior, fit_variance_prior, moderated_variance, scatter_prior
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

_LEAST_VARIANCES = 12
_LEAST_RATIO = 1e-4
_LISTED = 8

_SMOOTH_DB, _SMOOTH_LOG_SD = 0.8, 1.0
_OWN_DB, _OWN_LOG_SD = 1.0, 0.8
_SCATTER_LOG_SD = 0.35
_TAKE_TILT_LOG_SD = 0.5
_NOTE_TILT_LOG_SD = 0.35
_WOBBLE_LOG_SD = 0.6


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Evidence:
    """Paired harmonics, (n,), and the rows that the model is fitted to.

    Attributes
    ----------
    notes : tuple of str
    note_index, k, freq_hz : arrays, shape (n,)
    instrument_db, target_db : arrays, shape (n,)
        Mean levels of the two sides, dB re each note's power.
    instrument_takes_db : array, shape (n_takes, n)
        The instrument's takes as measured; NaN where not heard.
    differences : Row
    repeats : tuple of Row
        Empty where no profile has two takes.
    prior : model.Prior
    takes : float
        Takes a side, harmonic mean of the two sides.
    span : (low, high)
        Ends of the curve's spline in octaves from `origin_hz`.
    origin_hz : float
    remarks : tuple of str
    """

    notes: tuple[str, ...]
    note_index: IntArray
    k: IntArray
    freq_hz: Array
    instrument_db: Array
    target_db: Array
    instrument_takes_db: Array
    differences: model.Row
    repeats: tuple[model.Row, ...]
    prior: model.Prior
    takes: float
    span: tuple[float, float]
    origin_hz: float
    remarks: tuple[str, ...]

    def curve_columns(self, freq_hz: Array) -> tuple[Array, Array]:
        """Octaves from the origin, shape (g,), and the curve's smooth columns, shape (g, n_smooth), at `freq_hz`."""
        octave = np.log2(freq_hz / self.origin_hz)
        return octave, body_curve.smooth_columns(octave, *self.span)


def gather(profile: Profile, target: Target) -> Evidence:
    """Pair, align and average the takes of both sides, and lay out the rows of the model.

    Raises
    ------
    ComparisonError
        If the two have nothing in common.
    """
    paired = pair(profile, target.members)
    prior = scatter_prior(profile.family or target.members[0].family)
    scale = prior.scale_at(paired.freq_hz)
    origin = math.exp(float(np.mean(np.log(paired.freq_hz))))
    octave = np.log2(paired.freq_hz / origin)
    span = float(np.min(octave)), float(np.max(octave))
    levels = [*paired.instrument, *paired.target]
    aligned = [align_takes(level, paired.note_index, octave, prior, scale) for level, _ in levels]
    ours, theirs = aligned[0], aligned[1:]
    target_db = _blended([member.mean_db for member in theirs], paired.note_index)
    moderation, df = _moderation(aligned, prior)
    spread = [one.spread for one in aligned]
    errors = [np.sqrt(np.mean(np.where(np.isfinite(level), se, 0.0) ** 2, axis=0)) for level, se in levels]
    take_counts = [level.shape[0] for level, _ in levels]
    playing = _both_sides([np.full(1, 1.0 / count) for count in take_counts])
    differences = model.Row(
        value_db=ours.mean_db - target_db,
        note=paired.note_index,
        n_notes=len(paired.notes),
        octave=octave,
        smooth=body_curve.smooth_columns(octave, *span),
        wobble=body_curve.wobble_columns(octave, *span),
        scatter_variance=scale**2 * moderation * _uncertain(df, prior) * _both_sides(spread),
        error_variance=_both_sides([error**2 * part for error, part in zip(errors, spread, strict=True)]),
        repeat_df=df,
        playing=float(playing[0]),
    )
    return Evidence(
        notes=paired.notes,
        note_index=paired.note_index,
        k=paired.k,
        freq_hz=paired.freq_hz,
        instrument_db=ours.mean_db,
        target_db=target_db,
        instrument_takes_db=paired.instrument[0][0],
        differences=differences,
        repeats=tuple(row for one in aligned for row in _repeat_rows(one, differences, scale)),
        prior=_model_prior(prior),
        takes=2.0 / float(playing[0]),
        span=span,
        origin_hz=origin,
        remarks=paired.remarks + _scatter_remarks(prior, take_counts) + _set_aside(paired, aligned),
    )


def _blended(means: list[Array], note_index: IntArray) -> Array:
    """Mean over a target's members in dB, each note of each member aligned by the median difference to the mean."""
    stack: Array = np.array(means)
    if stack.shape[0] == 1:
        return means[0]
    centre = np.nanmean(stack, axis=0)
    for note in np.unique(note_index):
        here = note_index == note
        for row in stack:
            if np.any(np.isfinite(row[here])):
                row[here] -= np.nanmedian((row - centre)[here])
    return np.asarray(np.nanmean(stack, axis=0))


def _both_sides(values: list[Array]) -> Array:
    """Variance of instrument minus mean of the members, from the variance of each; NaN where a member lacks it."""
    members = np.array(values[1:])
    count = np.sum(np.isfinite(members), axis=0)
    return np.asarray(values[0] + np.nansum(members, axis=0) / count**2)


def _moderation(aligned: list[AlignedTakes], prior: ScatterPrior) -> tuple[Array, Array]:
    """Each harmonic's variance over what its frequency lets one expect (n,), and its degrees of freedom (n,)."""
    df = np.sum([one.df for one in aligned], axis=0)
    weighted = np.sum([one.df * one.variance_ratio for one in aligned], axis=0)
    ratio = np.divide(weighted, df, out=np.ones(df.shape), where=df > 0)
    seen = df > 0
    if np.count_nonzero(seen) < _LEAST_VARIANCES:
        return moderated_variance(ratio, df, prior_df=prior.tail_df, prior_variance=1.0), df
    prior_df, prior_variance = fit_variance_prior(np.maximum(ratio[seen], _LEAST_RATIO), df[seen])
    return moderated_variance(ratio, df, prior_df=prior_df, prior_variance=prior_variance) / prior_variance, df


def _uncertain(df: Array, prior: ScatterPrior) -> Array:
    """Return by how much not knowing a variance widens it, (n,): v / (v - 2), the mean of an inverse chi-square.

    Where no repeats speak, the model's own weights for odd harmonics carry this.
    """
    known = prior.tail_df + df
    return np.where(df > 0, known / (known - 2.0), 1.0)


def _repeat_rows(aligned: AlignedTakes, whole: model.Row, scale: Array) -> list[model.Row]:
    takes = aligned.residual_db.shape[0]
    count = np.sum(np.isfinite(aligned.residual_db), axis=0)
    rows = []
    for residual, weight in zip(aligned.residual_db, aligned.weight, strict=True):
        here = np.flatnonzero(np.isfinite(residual))
        if here.size:
            rows.append(
                model.Row(
                    value_db=residual[here],
                    note=whole.note[here],
                    n_notes=whole.n_notes,
                    octave=whole.octave[here],
                    smooth=np.zeros((here.size, 0)),
                    wobble=whole.wobble[here],
                    scatter_variance=(scale**2 * (1.0 - 1.0 / np.maximum(count, 2)))[here] / weight[here],
                    error_variance=np.zeros(here.size),
                    repeat_df=whole.repeat_df[here],
                    playing=1.0 - 1.0 / takes,
                    count=1.0 - 1.0 / takes,
                )
            )
    return rows


def _model_prior(prior: ScatterPrior) -> model.Prior:
    centre, sd = np.zeros(6), np.zeros(6)
    for place, value, log_sd in (
        (model.SMOOTH, _SMOOTH_DB, _SMOOTH_LOG_SD),
        (model.OWN, _OWN_DB, _OWN_LOG_SD),
        (model.SCATTER, 1.0, _SCATTER_LOG_SD),
        (model.TAKE_TILT, prior.take_tilt_db, _TAKE_TILT_LOG_SD),
        (model.NOTE_TILT, prior.note_tilt_db, _NOTE_TILT_LOG_SD),
        (model.WOBBLE, prior.wobble_db, _WOBBLE_LOG_SD),
    ):
        centre[place], sd[place] = math.log(value), log_sd
    return model.Prior(centre=centre, sd=sd)


def _scatter_remarks(prior: ScatterPrior, take_counts: list[int]) -> tuple[str, ...]:
    if max(take_counts) > 1:
        return ()
    return (
        "one take a side: how far the playing scatters is not measured here but taken from repeats by other players "
        f"({prior.group}); two more takes a side would show this player's own",
    )


def _set_aside(paired: Pairing, aligned: list[AlignedTakes]) -> tuple[str, ...]:
    """List the levels that lie far from the other takes' and therefore weigh little."""
    names = ["instrument", *(["target"] * (len(aligned) - 1))]
    found = [
        f"{names[side]} take {take + 1}: {paired.notes[paired.note_index[place]]} harmonic {paired.k[place]}"
        for side, one in enumerate(aligned)
        for take, place in np.argwhere((one.weight > 0) & (one.weight < SET_ASIDE_WEIGHT))
    ]
    if not found:
        return ()
    more = f" and {len(found) - _LISTED} more" if len(found) > _LISTED else ""
    return (
        f"set aside in part, since they lie far from the other takes ({len(found)} levels): "
        + "; ".join(found[:_LISTED]) + more,
    )  # fmt: skip
