"""Decay times of ringing notes, paired and laid out for the model of :mod:`timbre_match.compare.sustain_model`.

A single number tells a decay that is plain, and of a two-stage one the time as a whole. What beats or decays unclearly
has a time that hangs on where in the beat the note began, and two such times may differ with nothing changed: it is
listed apart, gets no verdict of its own, and bears on the notes and the curve with a larger error, as one of many.
Times are natural logarithms of seconds; the scatter of a take is one of these.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare import body_curve
from timbre_match.compare.records import SetApart
from timbre_match.compare.repeatability import fit_variance_prior, moderated_variance
from timbre_match.compare.sustain_model import FIXED, NOTE, SMOOTH, TAKE, TAKE_NOTE, Rows, helmert
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile, Take
from timbre_match.measure.records import DecayShape, Recipe
from timbre_match.units import note_number

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

SCATTER = 0.2
"""Scatter of a single log decay time from take to take, before any take is heard; measurement errors are set against
it. No published figure for repeated plucks is known here: it is chosen wide, and learned where takes are repeated."""

_UNEVEN = 0.3
"""By how much a decay that beats or is unclear is more uncertain, as a standard deviation of its logarithm. In the
recordings that were looked at, such times lay about a smooth course over frequency with 0.35 to 0.4, others with 0.3;
where takes are repeated, their own scatter counts too."""

_HEARD_HZ, _HEARD_S = (10.0, 40_000.0), (1e-3, 1e3)
_LARGEST_ERROR = 3.0
"""A time beyond these comes from no measurement; an error of a factor of 20 says nothing, and more says no less."""

_TAIL_DF = 6.0
_MOST_DF = 1e3
_LEAST_VARIANCES = 12
_LEAST_RATIO = 1e-4
_MEAN, _SLOPE = 1.0, 0.2
"""Standard deviations of the shift of all decay times, and of their slope per octave: hardly a bound."""

_SINGLE: frozenset[DecayShape] = frozenset({"plain", "two-stage"})


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class DecayTimes:
    """Paired decay times, (n,), and the rows that the model is fitted to.

    All of them bear on the notes and the curve; those that are `single` get a verdict of their own.

    Attributes
    ----------
    notes : tuple of str
    note_index, k, freq_hz : arrays, shape (n,)
    single : bool array, shape (n,)
        Whether one number tells the decay, in at least half of each side's takes.
    scatter_df : array, shape (n,)
        Degrees of freedom with which each harmonic's scatter is known.
    rows : Rows
    curve : slice
        The columns of the curve: shift, slope, bumps.
    span : (low, high)
        Ends of the curve's spline in octaves re 1 kHz.
    repeated : bool
        Whether any side shows its own scatter.
    apart : tuple of SetApart
    """

    notes: tuple[str, ...]
    note_index: IntArray
    k: IntArray
    freq_hz: Array
    single: NDArray[np.bool_]
    scatter_df: Array
    rows: Rows
    curve: slice
    span: tuple[float, float]
    repeated: bool
    apart: tuple[SetApart, ...]

    def curve_columns(self, freq_hz: Array) -> Array:
        """Columns of the curve at `freq_hz`, shape (g, p_curve)."""
        return _curve_columns(np.log2(freq_hz / 1000.0), self.span)


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Side:
    """One profile's takes over the paired harmonics, shape (takes, n); NaN where there is no time."""

    log_t60: Array
    error: Array


def gather_decays(profile: Profile, target: Target) -> DecayTimes | None:
    """Pair the decay times of both sides; None where no harmonic is heard on both."""
    profiles = (profile, *target.members)
    takes = [[_notes_of_take(take) for take in one.takes] for one in profiles]
    sides = [set().union(*(set(take) for take in side)) for side in takes]
    names = sorted(sides[0] & set().union(*sides[1:]), key=note_number)
    size = {name: max(len(take[name].freq_hz) for side in takes for take in side if name in take) for name in names}
    if not names:
        return None
    note = np.repeat(np.arange(len(names)), [size[name] for name in names])
    k = np.concatenate([np.arange(1, size[name] + 1) for name in names])
    stacks = [_stacked(side, names, size) for side in takes]
    own, other = stacks[0], _joined(stacks[1:])
    single = own.single & other.single
    freq_hz = np.sqrt(own.freq_hz * other.freq_hz)
    timed = own.timed & other.timed
    apart = tuple(
        SetApart(
            note=names[note[place]],
            k=int(k[place]),
            freq_hz=float(freq_hz[place]),
            instrument=own.shape_of(place),
            target=other.shape_of(place),
        )
        for place in np.flatnonzero(timed & ~single).tolist()
    )
    kept = np.flatnonzero(timed)
    if not kept.size:
        return None
    used, note_index = np.unique(note[kept], return_inverse=True)
    parts = [_Side(log_t60=one.log_t60[:, kept], error=one.error[:, kept]) for one in stacks]
    octave = np.log2(freq_hz[kept] / 1000.0)
    span = float(np.min(octave)), float(np.max(octave))
    rows, curve, df = _rows(parts, note_index, octave, span)
    return DecayTimes(
        notes=tuple(names[place] for place in used),
        note_index=note_index,
        k=k[kept],
        freq_hz=freq_hz[kept],
        single=single[kept],
        scatter_df=df,
        rows=rows,
        curve=curve,
        span=span,
        repeated=rows.contrast.size > 0,
        apart=apart,
    )


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _NoteDecays:
    """One note of one take, arrays over its harmonics."""

    freq_hz: Array
    log_t60: Array
    error: Array
    shapes: tuple[DecayShape | None, ...]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Stack:
    """All takes of a side over all harmonics of the common notes: arrays of shape (takes, harmonics)."""

    log_t60: Array
    error: Array
    all_freq_hz: Array
    shapes: tuple[tuple[DecayShape | None, ...], ...]

    @property
    def timed(self) -> NDArray[np.bool_]:
        """Where a decay time is known."""
        return np.asarray(np.isfinite(self.log_t60).any(axis=0))

    @property
    def single(self) -> NDArray[np.bool_]:
        """Where one number tells the decay, in at least half of the takes that have one."""
        good = np.sum([[one in _SINGLE for one in row] for row in self.shapes], axis=0)
        return np.asarray((good > 0) & (2 * good >= np.isfinite(self.log_t60).sum(axis=0)))

    @property
    def freq_hz(self) -> Array:
        """Mean frequency where heard; 1 elsewhere."""
        count = np.isfinite(self.all_freq_hz).sum(axis=0)
        return np.asarray(np.where(count > 0, np.nansum(self.all_freq_hz, axis=0) / np.maximum(count, 1), 1.0))

    def shape_of(self, place: int) -> DecayShape:
        """The shape that most takes show, the uneven one in a draw."""
        found: list[DecayShape] = [one for row in self.shapes if (one := row[place]) is not None]
        return max(sorted(set(found), key=lambda one: one in _SINGLE), key=found.count)


def _joined(stacks: list[_Stack]) -> _Stack:
    return _Stack(
        log_t60=np.concatenate([one.log_t60 for one in stacks]),
        error=np.concatenate([one.error for one in stacks]),
        all_freq_hz=np.concatenate([one.all_freq_hz for one in stacks]),
        shapes=tuple(row for one in stacks for row in one.shapes),
    )


def _notes_of_take(take: Take) -> dict[str, _NoteDecays]:
    """Decays by note name; the mean of a note that was played more than once."""
    ringing: dict[str, list[Recipe]] = {}
    for recipe in take.notes:
        if recipe.ringing is not None:
            ringing.setdefault(recipe.note, []).append(recipe)
    return {name: _mean_decays(recipes) for name, recipes in ringing.items()}


def _mean_decays(recipes: list[Recipe]) -> _NoteDecays:
    size = max(recipe.k.size for recipe in recipes)
    freq, log_t60, error = (np.full((len(recipes), size), np.nan) for _ in range(3))
    shapes: list[DecayShape | None] = [None] * size
    for row, recipe in enumerate(recipes):
        if recipe.ringing is None:
            continue
        for place, shape in enumerate(recipe.ringing.decay):
            if shape is None:
                continue
            freq_hz, t60_s = float(recipe.freq_hz[place]), float(recipe.ringing.t60_s[place])
            se_s = float(recipe.ringing.t60_se_s[place])
            inside = _HEARD_HZ[0] < freq_hz < _HEARD_HZ[1] and _HEARD_S[0] < t60_s < _HEARD_S[1]
            if not (inside and np.isfinite(se_s)):
                continue
            freq[row, place], log_t60[row, place] = freq_hz, np.log(t60_s)
            relative = min(se_s / t60_s, _LARGEST_ERROR)
            error[row, place] = np.hypot(relative, 0.0 if shape in _SINGLE else _UNEVEN)
            if shapes[place] in (None, *_SINGLE):
                shapes[place] = shape
    count = np.maximum(np.isfinite(log_t60).sum(axis=0), 1)
    known = np.isfinite(log_t60).any(axis=0)
    return _NoteDecays(
        freq_hz=np.where(known, np.nansum(freq, axis=0) / count, np.nan),
        log_t60=np.where(known, np.nansum(log_t60, axis=0) / count, np.nan),
        error=np.where(known, np.sqrt(np.nansum(error**2, axis=0)) / count, np.nan),
        shapes=tuple(shapes),
    )


def _stacked(takes: list[dict[str, _NoteDecays]], names: list[str], size: dict[str, int]) -> _Stack:
    total = sum(size[name] for name in names)
    log_t60, error, freq = (np.full((len(takes), total), np.nan) for _ in range(3))
    shapes: list[tuple[DecayShape | None, ...]] = []
    for row, take in enumerate(takes):
        found: list[DecayShape | None] = []
        for name in names:
            if name in take:
                one = take[name]
                here = slice(len(found), len(found) + len(one.shapes))
                log_t60[row, here], error[row, here], freq[row, here] = one.log_t60, one.error, one.freq_hz
                found += one.shapes
                found += [None] * (size[name] - len(one.shapes))
            else:
                found += [None] * size[name]
        shapes.append(tuple(found))
    return _Stack(log_t60=log_t60, error=error, all_freq_hz=freq, shapes=tuple(shapes))


def _curve_columns(octave: Array, span: tuple[float, float]) -> Array:
    smooth = body_curve.smooth_columns(octave, *span)
    return np.column_stack([np.ones(octave.size), octave, smooth])


def _rows(sides: list[_Side], note: IntArray, octave: Array, span: tuple[float, float]) -> tuple[Rows, slice, Array]:
    """Rows of the model, where the curve's columns stand, and the degrees of freedom of each scatter, shape (n,)."""
    weights = _weights(sides)
    log_t60 = np.concatenate([one.log_t60 for one in sides])
    error = np.concatenate([one.error for one in sides])
    unit, df = _scatter_units(sides, error, note)
    take_count, notes = log_t60.shape[0], int(note[-1]) + 1
    curve = _curve_columns(octave, span)
    of_note = np.eye(notes)[note]
    # Columns: curve, notes, takes, and the notes of each take.
    matrix = np.column_stack([curve, of_note, *_hand_columns(weights, note, of_note)])
    sizes = {FIXED: 2, SMOOTH: curve.shape[1] - 2, NOTE: notes, TAKE: take_count, TAKE_NOTE: take_count * notes}
    group = np.repeat(np.array(list(sizes), dtype=np.int64), list(sizes.values()))
    units = np.ones(group.size)
    units[:2] = _MEAN**2, _SLOPE**2
    contrasts, contrast_weights, places = _contrasts(sides, log_t60)
    ours = curve.shape[1] + notes
    contrast_matrix = np.zeros((contrasts.size, matrix.shape[1]))
    if contrasts.size:
        contrast_matrix[:, ours:] = np.column_stack(_hand_columns(contrast_weights, note[places], of_note[places]))
    filled = np.where(np.isfinite(log_t60), log_t60, 0.0)
    rows = Rows(
        value=np.sum(weights * filled, axis=0),
        matrix=matrix,
        scatter=np.sum(weights**2 * unit, axis=0),
        contrast=contrasts,
        contrast_matrix=contrast_matrix,
        # A harmonic's takes have one scatter, or the contrasts would not be independent of the mean.
        contrast_scatter=np.sum(contrast_weights**2 * unit[:, places], axis=0) if contrasts.size else np.ones(0),
        group=group,
        unit=units,
        instrument=np.arange(matrix.shape[1]) < ours,
    )
    return rows, slice(0, curve.shape[1]), df


def _weights(sides: list[_Side]) -> Array:
    """What each take counts for in the difference, shape (all takes, n): the first side less the mean of the others."""
    has = [np.isfinite(one.log_t60) for one in sides]
    members = np.sum([one.any(axis=0) for one in has[1:]], axis=0)
    parts = []
    for place, one in enumerate(has):
        count = np.maximum(one.sum(axis=0), 1)
        parts.append(one / count if place == 0 else -(one / (count * members)))
    return np.concatenate(parts)


def _hand_columns(weights: Array, note: IntArray, of_note: Array) -> list[Array]:
    """Columns of the takes and of their notes, from each take's weight in each row, shape (takes, rows)."""
    return [weights.T, *(one[:, None] * of_note for one in weights)]


def _contrasts(sides: list[_Side], log_t60: Array) -> tuple[Array, Array, IntArray]:
    """Values (m,), the takes' weights in them (all takes, m), and whose harmonic each is (m,)."""
    values, weights, places = [], [], []
    first = 0
    for side in sides:
        count = side.log_t60.shape[0]
        for place in range(side.log_t60.shape[1]):
            takes = first + np.flatnonzero(np.isfinite(side.log_t60[:, place]))
            for contrast in helmert(takes.size):
                weight = np.zeros(log_t60.shape[0])
                weight[takes] = contrast
                values.append(float(contrast @ log_t60[takes, place]))
                weights.append(weight)
                places.append(place)
        first += count
    shape = log_t60.shape[0], len(values)
    return np.array(values), np.array(weights).T.reshape(shape), np.array(places, dtype=np.int64)


def _scatter_units(sides: list[_Side], error: Array, note: IntArray) -> tuple[Array, Array]:
    """Variance of each take's scatter in units of the common one, (all takes, n), and its degrees of freedom, (n,).

    Measurement errors add to the scatter; what the takes then show of a harmonic's own variance is moderated (Smyth
    2004), shifts of whole notes being no scatter.
    """
    known = np.isfinite(error)
    mean_error = np.sqrt(np.sum(np.where(known, error, 0.0) ** 2, axis=0) / known.sum(axis=0))
    unit = 1.0 + (mean_error / SCATTER) ** 2
    square, df = np.zeros(note.size), np.zeros(note.size)
    for side in sides:
        has = np.isfinite(side.log_t60)
        count = has.sum(axis=0)
        left = np.where(has, side.log_t60 - np.where(has, side.log_t60, 0.0).sum(axis=0) / np.maximum(count, 1), 0.0)
        for one in np.unique(note):
            here = (note == one) & (count > 1)
            if not np.any(here):
                continue
            inside = has[:, here]
            shift = np.sum(left[:, here], axis=1) / np.maximum(inside.sum(axis=1), 1)
            parameters = max(int(inside.any(axis=1).sum()) - 1, 0)
            share = 1.0 - min(parameters / float(np.sum(count[here] - 1)), 0.9)
            square[here] += np.sum(np.where(inside, left[:, here] - shift[:, None], 0.0) ** 2, axis=0)
            df[here] += (count[here] - 1) * share
    seen = df > 0
    ratio = np.divide(square, df, out=np.ones(df.shape), where=seen) / (unit * SCATTER**2)
    if np.count_nonzero(seen) < _LEAST_VARIANCES:
        moderated = moderated_variance(ratio, df, prior_df=_TAIL_DF, prior_variance=1.0)
        return np.broadcast_to(unit * moderated, error.shape), _TAIL_DF + df
    prior_df, prior_variance = fit_variance_prior(np.maximum(ratio[seen], _LEAST_RATIO), df[seen])
    prior_df = min(prior_df, _MOST_DF)
    moderated = moderated_variance(ratio, df, prior_df=prior_df, prior_variance=prior_variance) / prior_variance
    freedom = np.where(seen, prior_df, min(prior_df, _TAIL_DF)) + df
    return np.broadcast_to(unit * moderated, error.shape), freedom
