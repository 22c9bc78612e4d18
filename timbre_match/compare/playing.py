"""What a comparison rests on: differences of the aligned takes, and how far the playing scatters them."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare import body_curve, colour, model
from timbre_match.compare.alignment import SET_ASIDE_WEIGHT, AlignedTakes, Pairing, align_takes, pair
from timbre_match.compare.few_takes import claim_factor
from timbre_match.compare.repeatability import ScatterPrior, fit_variance_prior, moderated_variance, scatter_prior
from timbre_match.compare.same_recordings import refuse_shared_control
from timbre_match.compare.sessions import control_remark
from timbre_match.compare.target import Target
from timbre_match.errors import ComparisonError, ControlError
from timbre_match.measure.profile import Profile

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

_LEAST_VARIANCES = 12
_LEAST_RATIO = 1e-4
_MOST_DF = 1e3
_LISTED = 8

_SMOOTH_DB, _SMOOTH_LOG_SD = 2.0, 0.4  # chosen with benchmarks/calibration.py and --seed 91 to 93; its table has 1
_OWN_DB, _OWN_LOG_SD = 1.0, 0.8
_SCATTER_LOG_SD = 0.35
_TAKE_TILT_LOG_SD = 0.5
_NOTE_TILT_LOG_SD = 0.35
_WOBBLE_LOG_SD = 0.6
_LEAST_DB = 0.05  # a table may say that there is none at all, which has no logarithm


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
    claim_factor : float
        What the differences' scatter is over what `differences` says of it (:mod:`timbre_match.compare.few_takes`).
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
    claim_factor: float
    span: tuple[float, float]
    origin_hz: float
    remarks: tuple[str, ...]

    def curve_columns(self, freq_hz: Array) -> tuple[Array, Array]:
        """Octaves from the origin, shape (g,), and the curve's smooth columns, shape (g, n_smooth), at `freq_hz`."""
        octave = np.log2(freq_hz / self.origin_hz)
        return octave, body_curve.smooth_columns(octave, *self.span)

    def loudness(self, freq_hz: Array) -> Array:
        """What each point of a grid (g,) counts for in the reference level: its loudness in the mean of both sides."""
        level_db = 0.5 * (self.instrument_db + self.target_db)
        return colour.loudness_over_frequency(self.note_index, self.freq_hz, level_db, freq_hz)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Difference:
    """Two sides paired, aligned and subtracted; arrays over their harmonics, shape (n,)."""

    paired: Pairing
    prior: ScatterPrior
    aligned: tuple[AlignedTakes, ...]
    take_counts: tuple[int, ...]
    octave: Array
    scale_db: Array
    second_db: Array
    playing: float
    scatter_variance: Array
    scatter_df: Array
    error_variance: Array


def gather(profile: Profile, target: Target, control: tuple[Profile, Profile] | None = None) -> Evidence:
    """Pair, align and average the takes of both sides, and lay out the rows of the model.

    Parameters
    ----------
    profile : Profile
    target : Target
    control : (now, then), optional
        An instrument that has not changed, recorded with the instrument and with the target. What it seems to have
        changed by is microphone, room and player: a curve of its own, which both differences contain.

    Raises
    ------
    ComparisonError
        If the two have nothing in common, or the controls have not.
    ControlError
        If the controls are two instruments, or have recordings in common with each other, the instrument or the target.
    """
    if control is not None:
        refuse_shared_control(profile, target, control)
    paired = pair(profile, target.members)
    origin = math.exp(float(np.mean(np.log(paired.freq_hz))))
    main = _difference(paired, profile.family or target.members[0].family, origin)
    parts, remarks = [main], paired.remarks
    if control is not None:
        parts.append(_control_difference(*control, origin))
        paired_control = parts[1].paired
        evidence = f"{paired_control.k.size} harmonics of {len(paired_control.notes)} notes"
        remarks = (control_remark(profile, target, control, evidence), *remarks)
    octave = np.concatenate([part.octave for part in parts])
    span = float(np.min(octave)), float(np.max(octave))
    return Evidence(
        notes=paired.notes,
        note_index=paired.note_index,
        k=paired.k,
        freq_hz=paired.freq_hz,
        instrument_db=main.aligned[0].mean_db,
        target_db=main.second_db,
        instrument_takes_db=paired.instrument[0][0],
        differences=_stacked(parts, span),
        repeats=tuple(row for part in parts for one in part.aligned for row in _repeat_rows(one, part, span)),
        prior=_model_prior(main.prior),
        takes=2.0 / main.playing,
        claim_factor=claim_factor(main.prior, main.take_counts, float(np.median(main.scatter_df))),
        span=span,
        origin_hz=origin,
        remarks=remarks + _scatter_remarks(main.prior, main.take_counts) + _set_aside(paired, main.aligned),
    )


def _difference(paired: Pairing, family: str, origin_hz: float) -> _Difference:
    prior = scatter_prior(family)
    scale = prior.scale_at(paired.freq_hz)
    octave = np.log2(paired.freq_hz / origin_hz)
    levels = [*paired.instrument, *paired.target]
    aligned = tuple(align_takes(level, paired.note_index, octave, prior, scale) for level, _ in levels)
    moderation, df = _moderation(aligned, prior)
    spread = [one.spread for one in aligned]
    errors = [np.sqrt(np.mean(np.where(np.isfinite(level), se, 0.0) ** 2, axis=0)) for level, se in levels]
    take_counts = tuple(level.shape[0] for level, _ in levels)
    return _Difference(
        paired=paired,
        prior=prior,
        aligned=aligned,
        take_counts=take_counts,
        octave=octave,
        scale_db=scale,
        second_db=_blended([member.mean_db for member in aligned[1:]], paired.note_index),
        playing=float(_both_sides([np.full(1, 1.0 / count) for count in take_counts])[0]),
        scatter_variance=scale**2 * moderation * _both_sides(spread),
        scatter_df=df,
        error_variance=_both_sides([error**2 * part for error, part in zip(errors, spread, strict=True)]),
    )


def _control_difference(now: Profile, then: Profile, origin_hz: float) -> _Difference:
    if now.instrument and then.instrument and now.instrument != then.instrument:
        raise ControlError(
            f"the controls are two instruments: {now.instrument} now, {then.instrument} then",
            cause="a control is one instrument that has not changed, recorded in both sessions",
            remedy="name profiles of the same instrument",
        )
    try:
        paired = pair(now, (then,))
    except ComparisonError as error:
        raise ComparisonError(
            f"the two recordings of the control cannot be compared: {error.what}",
            cause=error.cause,
            remedy=error.remedy,
        ) from error
    return _difference(paired, now.family or then.family, origin_hz)


def _stacked(parts: list[_Difference], span: tuple[float, float]) -> model.Row:
    """One row of all differences: playing of each part, the sessions' curve where there is a control, the body curve.

    The body curve is in the first part alone, the sessions' curve in both.
    """
    sizes = [part.octave.size for part in parts]
    octave = np.concatenate([part.octave for part in parts])
    smooth = body_curve.smooth_columns(octave, *span)
    wobble = body_curve.wobble_columns(octave, *span)
    of_part = np.repeat(np.eye(len(parts)), sizes, axis=1)
    first = of_part[0]
    blocks = [
        model.playing_columns(octave * inside, wobble * inside[:, None], part.playing)
        for part, inside in zip(parts, of_part, strict=True)
    ]
    columns = model.joined(blocks)
    if len(parts) > 1:
        columns = model.with_curve(columns, octave, smooth)
    columns = model.with_curve(columns, octave * first, smooth * first[:, None])
    notes = [len(part.paired.notes) for part in parts]
    return model.Row(
        value_db=np.concatenate([part.aligned[0].mean_db - part.second_db for part in parts]),
        note=np.concatenate([part.paired.note_index + sum(notes[:place]) for place, part in enumerate(parts)]),
        octave=octave,
        shared=columns,
        note_playing=np.repeat([part.playing for part in parts], notes),
        own=True,
        scatter_variance=np.concatenate([part.scatter_variance for part in parts]),
        scatter_df=np.concatenate([part.scatter_df for part in parts]),
        error_variance=np.concatenate([part.error_variance for part in parts]),
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
    """Variance of instrument minus mean of the members, from the variance of each (NaN where a member lacks it)."""
    members = np.array(values[1:])
    count = np.sum(np.isfinite(members), axis=0)
    return np.asarray(values[0] + np.nansum(members, axis=0) / count**2)


def _moderation(aligned: tuple[AlignedTakes, ...], prior: ScatterPrior) -> tuple[Array, Array]:
    """Each harmonic's variance over what its frequency lets one expect (n,), and its degrees of freedom (n,).

    The prior counts among those degrees of freedom: as far as variances agree where many repeats show them, as the
    tables' tails say where not.
    """
    df = np.sum([one.df for one in aligned], axis=0)
    weighted = np.sum([one.df * one.variance_ratio for one in aligned], axis=0)
    ratio = np.divide(weighted, df, out=np.ones(df.shape), where=df > 0)
    seen = df > 0
    if np.count_nonzero(seen) < _LEAST_VARIANCES:
        return moderated_variance(ratio, df, prior_df=prior.tail_df, prior_variance=1.0), prior.tail_df + df
    prior_df, prior_variance = fit_variance_prior(np.maximum(ratio[seen], _LEAST_RATIO), df[seen])
    prior_df = min(prior_df, _MOST_DF)
    moderated = moderated_variance(ratio, df, prior_df=prior_df, prior_variance=prior_variance) / prior_variance
    return moderated, np.where(seen, prior_df, min(prior_df, prior.tail_df)) + df


def _repeat_rows(aligned: AlignedTakes, part: _Difference, span: tuple[float, float]) -> list[model.Row]:
    takes = aligned.residual_db.shape[0]
    count = np.sum(np.isfinite(aligned.residual_db), axis=0)
    wobble = body_curve.wobble_columns(part.octave, *span)
    playing = 1.0 - 1.0 / takes
    rows = []
    for residual, weight in zip(aligned.residual_db, aligned.weight, strict=True):
        here = np.flatnonzero(np.isfinite(residual))
        if here.size:
            rows.append(
                model.Row(
                    value_db=residual[here],
                    note=part.paired.note_index[here],
                    octave=part.octave[here],
                    shared=model.playing_columns(part.octave[here], wobble[here], playing),
                    note_playing=np.full(len(part.paired.notes), playing),
                    own=False,
                    scatter_variance=(part.scale_db**2 * (1.0 - 1.0 / np.maximum(count, 2)))[here] / weight[here],
                    scatter_df=part.scatter_df[here],
                    error_variance=np.zeros(here.size),
                    count=playing,
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
        # A log-normal standard deviation about this centre has the value's square as its mean variance.
        centre[place], sd[place] = math.log(max(value, _LEAST_DB)) - log_sd**2, log_sd
    return model.Prior(centre=centre, precision=np.diag(1.0 / sd**2))


def _scatter_remarks(prior: ScatterPrior, take_counts: tuple[int, ...]) -> tuple[str, ...]:
    if max(take_counts) > 1:
        return ()
    return (
        "one take a side: how far the playing scatters is not measured here but taken from repeats by other players "
        f"({prior.group}); two more takes a side would show this player's own",
    )


def _set_aside(paired: Pairing, aligned: tuple[AlignedTakes, ...]) -> tuple[str, ...]:
    """List the levels that lie far from the other takes' and therefore weigh little."""
    names = ["instrument", *(["target"] * (len(aligned) - 1))]
    found = [
        f"{names[side]} take {take + 1}: {paired.notes[paired.note_index[place]]} harmonic {paired.k[place]}"
        for side, one in enumerate(aligned)
        for take, place in np.argwhere((one.weight > 0) & (one.weight < SET_ASIDE_WEIGHT))
    ]
    if not found:
        return ()
    more = f"; and {len(found) - _LISTED} more" if len(found) > _LISTED else ""
    return (
        f"set aside in part, since they lie far from the other takes ({len(found)} levels): "
        + "; ".join(found[:_LISTED]) + more,
    )  # fmt: skip
