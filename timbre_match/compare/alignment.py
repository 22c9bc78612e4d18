"""Pairing notes and harmonics, and aligning takes in gain.

Levels in dB. Arrays over paired harmonics have shape (n_harmonics,), those over takes as well (n_takes, n_harmonics);
NaN stands where a harmonic was not heard. Notes are paired by name, since each profile's names go by its own tuning.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare.records import Verdict
from timbre_match.compare.repeatability import ScatterPrior
from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile, Take
from timbre_match.units import cents_between, note_number

Array = NDArray[np.float64]
IntArray = NDArray[np.int64]

SET_ASIDE_WEIGHT = 0.3
"""A level whose robust weight is below this counts as set aside; at a typical tail it lies 4 scales off its fellows."""

UNHEARD_BELOW_DB = 12.0
"""A harmonic that is not heard lies at most this far above its floor: so far does one in a note of 0.3 s have to stand
out of a floor that is then uncertain itself, as :mod:`timbre_match.measure.recipe` goes. Long notes take 3 dB."""

_CLEARLY_DB = 6.0
_LEAST_PAIRED = 4
_NAMED = 3

_ROUNDS = 8
_PRIOR_SCALE_DF = 10.0
_SCALE_ROUNDS = 3


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Pairing:
    """Harmonics that the instrument and the target have in common, ordered by note and k.

    Attributes
    ----------
    notes : tuple of str
        Paired notes, low to high.
    note_index : int64 array, shape (n_harmonics,)
        Index into `notes`.
    k : int64 array, shape (n_harmonics,)
    freq_hz : float64 array, shape (n_harmonics,)
        Geometric mean of the two sides' frequencies.
    instrument, target : tuple of (level_db, se_db)
        One pair of arrays, each of shape (n_takes, n_harmonics), for every profile of the side.
    remarks : tuple of str
        What was left out, and why.
    """

    notes: tuple[str, ...]
    note_index: IntArray
    k: IntArray
    freq_hz: Array
    instrument: tuple[tuple[Array, Array], ...]
    target: tuple[tuple[Array, Array], ...]
    remarks: tuple[str, ...]


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Levels:
    """What one profile's takes, or one take's note, say of each harmonic; `ceiling_db` is what its level cannot exceed.

    Shapes (n_takes, n_harmonics) for takes; (n_harmonics,), and (1,) for the frequency, for a note. The ceiling is the
    level itself where heard, and NaN where nothing was measured.
    """

    level_db: Array
    se_db: Array
    ceiling_db: Array
    f0_hz: Array

    def heard_often(self) -> NDArray[np.bool_]:
        """Which harmonics are heard in at least half of the takes that hold their note."""
        heard = np.sum(np.isfinite(self.level_db), axis=0)
        return np.asarray((heard > 0) & (2 * heard >= np.sum(np.isfinite(self.f0_hz), axis=0)))


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class AlignedTakes:
    """Takes of one profile after a robust gain alignment of every note.

    Attributes
    ----------
    mean_db : array, shape (n_harmonics,)
        Robust mean over the takes; NaN where no take has the harmonic.
    spread : array, shape (n_harmonics,)
        Variance of that mean in units of the squared scatter of a single take.
    residual_db : array, shape (n_takes, n_harmonics)
        Level less gain less mean; the takes' tilts are still in it. NaN where not heard or heard in one take alone.
    weight : array, shape (n_takes, n_harmonics)
        Robust weights, 1 on average for a Student t distribution; 0 where not heard.
    variance_ratio, df : arrays, shape (n_harmonics,)
        Robust variance within the takes (gain and tilt removed) over the squared scale that the alignment ended with:
        the prior's, times one factor for all harmonics. And its degrees of freedom.
    """

    mean_db: Array
    spread: Array
    residual_db: Array
    weight: Array
    variance_ratio: Array
    df: Array


def pair(instrument: Profile, members: tuple[Profile, ...]) -> Pairing:
    """Pair the notes and harmonics of an instrument with those of a target's members.

    Held notes of the same name within one take count once: their levels are averaged. A harmonic is paired where each
    side (of several members, one is enough) has heard it in at least half of the takes that hold the note.

    Raises
    ------
    ComparisonError
        If the two have no note in common, no harmonic is heard on both sides, or no note has two that are.
    """
    ours = [_notes_of_take(take) for take in instrument.takes]
    theirs = [[_notes_of_take(take) for take in member.takes] for member in members]
    our_names = {name for take in ours for name in take}
    their_names = {name for member in theirs for take in member for name in take}
    common = sorted(our_names & their_names, key=note_number)
    if not common:
        raise ComparisonError(
            f"no note in common: the instrument has {_listed(our_names)}, the target {_listed(their_names)}",
            cause="different notes were recorded, or a note was measured under another name",
            remedy="record the same notes on both sides, or name them when measuring (--notes)",
        )
    remarks = _one_sided_remarks(our_names, their_names) + _tuning_remarks(instrument, members)
    size = {
        name: max(notes[name].level_db.size for side in [ours, *theirs] for notes in side if name in notes)
        for name in common
    }
    note_index = np.repeat(np.arange(len(common)), [size[name] for name in common])
    k = np.concatenate([np.arange(1, size[name] + 1) for name in common])
    own = _stacked(ours, size)
    other = [_stacked(member, size) for member in theirs]
    own_heard, other_heard = own.heard_often(), np.any([member.heard_often() for member in other], axis=0)
    keep = own_heard & other_heard
    if not np.any(keep):
        raise ComparisonError(
            f"no harmonic of {_listed(set(common))} is heard on both sides",
            cause="one of the recordings is very weak or very noisy",
            remedy="record closer or louder, and measure again",
        )
    if np.max(np.bincount(note_index[keep])) < 2:
        raise ComparisonError(
            "no note has two harmonics that both sides let one hear, and a level alone says nothing about tone colour",
            cause="one of the recordings is very weak or very noisy",
            remedy="record closer or louder, and measure again",
        )
    gap_db = np.array([_middle_gap_db(own, other, keep & (note_index == place)) for place in range(len(common))])
    labels = [f"{common[place]} harmonic {number}" for place, number in zip(note_index, k, strict=True)]
    stronger = _least_db([own], other, gap_db[note_index])
    weaker = _least_db(other, [own], -gap_db[note_index])
    remarks += _lone_remarks("instrument", "target", own_heard & ~keep, labels, stronger, "stronger")
    remarks += _lone_remarks("target", "instrument", other_heard & ~keep, labels, weaker, "weaker")
    f0_hz = np.sqrt(
        np.exp(_mean_log(own.f0_hz[:, keep]))
        * np.exp(_mean_log(np.concatenate([member.f0_hz for member in other])[:, keep]))
    )
    used = np.unique(note_index[keep])
    if used.size == 1:
        remarks += (
            f"one note in common ({common[used[0]]}): one note cannot tell what the body does to all notes "
            "from what is this note's own; more notes would",
        )
    return Pairing(
        notes=tuple(common[i] for i in used),
        note_index=np.searchsorted(used, note_index[keep]),
        k=k[keep],
        freq_hz=k[keep] * f0_hz,
        instrument=((own.level_db[:, keep], own.se_db[:, keep]),),
        target=tuple((member.level_db[:, keep], member.se_db[:, keep]) for member in other),
        remarks=remarks,
    )


def align_takes(
    level_db: Array, note_index: IntArray, octave: Array, prior: ScatterPrior, scale_db: Array
) -> AlignedTakes:
    """Align the takes of one profile in gain, note by note, and average them.

    Each note of each take has a gain and a tilt of its own, and each level a weight that falls with its distance from
    the other takes: the expectation step of a Student t likelihood (Lange, Little & Taylor 1989, Robust statistical
    modeling using the t distribution, *JASA* 84), so that one odd level neither moves the gain nor the mean.

    Parameters
    ----------
    level_db : array, shape (n_takes, n_harmonics)
        NaN where not heard.
    note_index : int array, shape (n_harmonics,)
        Ascending.
    octave : array, shape (n_harmonics,)
        log2 of frequency.
    prior : ScatterPrior
    scale_db : array, shape (n_harmonics,)
        Prior scatter of each harmonic in a single take, dB.
    """
    scale = scale_db
    fit = _fit_notes(level_db, note_index, octave, prior, scale)
    for _ in range(_SCALE_ROUNDS if np.any(fit.df > 0) else 0):
        # The ratio is relative to the scale in use; the prior's own scale counts as ten degrees of freedom.
        ratio = fit.variance_ratio * (scale / scale_db) ** 2
        factor = (_PRIOR_SCALE_DF + np.sum(fit.df * ratio)) / (_PRIOR_SCALE_DF + np.sum(fit.df))
        scale = scale_db * math.sqrt(float(factor))
        fit = _fit_notes(level_db, note_index, octave, prior, scale)
    return fit


def _fit_notes(
    level_db: Array, note_index: IntArray, octave: Array, prior: ScatterPrior, scale_db: Array
) -> AlignedTakes:
    mean = np.full(note_index.size, np.nan)
    residual = np.full(level_db.shape, np.nan)
    weight = np.zeros(level_db.shape)
    ratio = np.zeros(note_index.size)
    df = np.zeros(note_index.size)
    tilt_sd = math.hypot(prior.take_tilt_db, prior.note_tilt_db)
    for note in np.unique(note_index):
        here = np.flatnonzero(note_index == note)
        block = level_db[:, here]
        heard = np.isfinite(block)
        x = octave[here] - np.mean(octave[here])
        gain, tilt, base, w = _fit_note(block, heard, x, scale_db[here], prior.tail_df, tilt_sd)
        count = np.sum(heard, axis=0)
        repeated = count > 1
        plain = block - gain[:, None] - base
        straight = np.where(heard & repeated, plain - np.outer(tilt, x), 0.0)
        parameters = 2 * max(int(np.count_nonzero(np.any(heard, axis=1))) - 1, 0)
        share = 1.0 - min(parameters / max(float(np.sum(count[repeated] - 1)), 1.0), 0.8)
        df[here] = np.where(repeated, (count - 1) * share, 0.0)
        squares = np.sum(w * straight**2, axis=0)
        ratio[here] = np.divide(squares, df[here], out=np.zeros(here.size), where=df[here] > 0) / scale_db[here] ** 2
        mean[here] = base
        weight[:, here] = w
        residual[:, here] = np.where(heard & repeated, plain, np.nan)
    count = np.sum(weight > 0, axis=0)
    total = np.sum(weight, axis=0)
    # Variance of a t location over that of a normal mean with the same scale: (df + 3) / (df + 1).
    loss = np.where(count > 1, (prior.tail_df + 3.0) / (prior.tail_df + 1.0), 1.0)
    spread = np.divide(loss, total, out=np.full(total.shape, np.nan), where=total > 0)
    return AlignedTakes(mean_db=mean, spread=spread, residual_db=residual, weight=weight, variance_ratio=ratio, df=df)


def _fit_note(
    block: Array, heard: NDArray[np.bool_], x: Array, scale_db: Array, tail_df: float, tilt_sd: float
) -> tuple[Array, Array, Array, Array]:
    """Gains and tilts (n_takes,), means (n_harmonics,) and weights (n_takes, n_harmonics) of one note."""
    takes = block.shape[0]
    filled = np.where(heard, block, 0.0)
    weight = heard.astype(np.float64)
    count = np.sum(heard, axis=0)
    sounding = np.any(heard, axis=1)
    gain = np.zeros(takes)
    tilt = np.zeros(takes)
    base = np.sum(filled, axis=0) / np.maximum(count, 1)
    if np.count_nonzero(sounding) < 2:
        return gain, tilt, np.where(count > 0, base, np.nan), weight
    for t in np.flatnonzero(sounding):
        gain[t] = np.median((block[t] - base)[heard[t]])
    inflation = np.where(count > 1, count / np.maximum(count - 1, 1), 0.0)
    for _ in range(_ROUNDS):
        pull = weight / scale_db**2
        gap = filled - base
        s0, s1, s2 = (np.sum(pull * x**power, axis=1) for power in range(3))
        b0, b1 = (np.sum(pull * x**power * gap, axis=1) for power in range(2))
        s2 = s2 + 1.0 / tilt_sd**2
        determinant = np.where(sounding, s0 * s2 - s1**2, 1.0)
        gain = np.where(sounding, (s2 * b0 - s1 * b1) / determinant, 0.0)
        tilt = np.where(sounding, (s0 * b1 - s1 * b0) / determinant, 0.0)
        gain[sounding] -= np.mean(gain[sounding])
        tilt[sounding] -= np.mean(tilt[sounding])
        straight = filled - gain[:, None] - np.outer(tilt, x)
        base = np.sum(weight * straight, axis=0) / np.maximum(np.sum(weight, axis=0), 1e-12)
        z2 = inflation * ((straight - base) / scale_db) ** 2
        weight = np.where(heard, np.where(count > 1, (tail_df + 1.0) / (tail_df + z2), 1.0), 0.0)
    return gain, tilt, np.where(count > 0, base, np.nan), weight


def _notes_of_take(take: Take) -> dict[str, _Levels]:
    """Levels, standard errors, ceilings and mean fundamental by note name; repeated notes are averaged."""
    found: dict[str, _Levels] = {}
    for name in {recipe.note for recipe in take.notes}:
        recipes = [recipe for recipe in take.notes if recipe.note == name]
        size = max(int(recipe.k[-1]) if recipe.k.size else 0 for recipe in recipes)
        level, se, ceiling = (np.full((len(recipes), size), np.nan) for _ in range(3))
        for row, recipe in enumerate(recipes):
            level[row, recipe.k - 1] = np.where(recipe.heard, recipe.level_db, np.nan)
            se[row, recipe.k - 1] = np.where(recipe.heard, recipe.se_db, np.nan)
            ceiling[row, recipe.k - 1] = np.where(recipe.heard, recipe.level_db, recipe.floor_db + UNHEARD_BELOW_DB)
        count = np.sum(np.isfinite(level), axis=0)
        found[name] = _Levels(
            level_db=np.where(count > 0, np.nansum(level, axis=0) / np.maximum(count, 1), np.nan),
            se_db=np.sqrt(np.nansum(se**2, axis=0)) / np.maximum(count, 1),
            ceiling_db=np.max(ceiling, axis=0),
            f0_hz=np.full(1, math.exp(float(np.mean([math.log(recipe.f0_hz) for recipe in recipes])))),
        )
    return found


def _stacked(takes: list[dict[str, _Levels]], size: dict[str, int]) -> _Levels:
    """The notes of `size` side by side, each with that many harmonics; NaN where a take has no such note."""
    shape = len(takes), sum(size.values())
    level, se, ceiling, f0 = np.full(shape, np.nan), np.zeros(shape), np.full(shape, np.nan), np.full(shape, np.nan)
    starts = np.cumsum([0, *size.values()])
    for row, take in enumerate(takes):
        for (name, width), start in zip(size.items(), starts[:-1], strict=True):
            if name in take:
                note = take[name]
                here = slice(start, start + note.level_db.size)
                level[row, here], se[row, here], ceiling[row, here] = note.level_db, note.se_db, note.ceiling_db
                f0[row, start : start + width] = note.f0_hz
    return _Levels(level_db=level, se_db=se, ceiling_db=ceiling, f0_hz=f0)


def _middle_gap_db(own: _Levels, other: list[_Levels], here: NDArray[np.bool_]) -> float:
    """Own level less the members', dB, in the middle of the harmonics `here`; NaN where they are too few to tell."""
    if np.count_nonzero(here) < _LEAST_PAIRED:
        return math.nan
    members = np.concatenate([member.level_db[:, here] for member in other])
    return float(np.median(np.nanmean(own.level_db[:, here], axis=0) - np.nanmean(members, axis=0)))


def _least_db(heard: list[_Levels], unheard: list[_Levels], gap_db: Array) -> Array:
    """How much stronger each harmonic, shape (n,), is at least on the side that hears it, `gap_db` taken off.

    The weakest of the one side's takes that hear it against the highest ceiling of the other's; NaN where a take of the
    other that holds the note says nothing of the harmonic.
    """
    weakest = np.min([_lowest(side.level_db) for side in heard], axis=0)
    ceilings = [np.where(np.isfinite(side.f0_hz), side.ceiling_db, -np.inf) for side in unheard]
    return np.asarray(weakest - np.max(np.concatenate(ceilings), axis=0) - gap_db)


def _lowest(level_db: Array) -> Array:
    return np.asarray(np.min(np.where(np.isfinite(level_db), level_db, np.inf), axis=0))


def _lone_remarks(
    side: str, other: str, lone: NDArray[np.bool_], labels: list[str], least_db: Array, word: Verdict
) -> tuple[str, ...]:
    """Count the harmonics that one side alone lets one hear, and name those that are clearly stronger there."""
    count = int(np.count_nonzero(lone))
    if not count:
        return ()
    harmonics = "1 harmonic" if count == 1 else f"{count} harmonics"
    plain = f"{harmonics} heard in the {side}'s takes but not, or too seldom, in the {other}'s: left out"
    places = np.flatnonzero(lone & (least_db >= _CLEARLY_DB))
    if not places.size:
        return (plain,)
    farthest = places[np.argsort(-least_db[places], kind="stable")][:_NAMED]
    named = "; ".join(f"at least {math.floor(least_db[place])} dB {word}: {labels[place]}" for place in farthest)
    return (
        f"{plain}. What is not heard is weaker than the noise there: with the notes of both sides brought to the same "
        f"level, the instrument is {named}",
    )


def _mean_log(values: Array) -> Array:
    return np.asarray(np.nanmean(np.log(values), axis=0))


def _listed(names: set[str]) -> str:
    return " ".join(sorted(names, key=note_number)) or "none"


def _one_sided_remarks(ours: set[str], theirs: set[str]) -> tuple[str, ...]:
    remarks = []
    if ours - theirs:
        remarks.append(f"only the instrument has {_listed(ours - theirs)}: left out")
    if theirs - ours:
        remarks.append(f"only the target has {_listed(theirs - ours)}: left out")
    return tuple(remarks)


def _tuning_remarks(instrument: Profile, members: tuple[Profile, ...]) -> tuple[str, ...]:
    others = sorted({member.a4_hz for member in members} - {instrument.a4_hz})
    if not others:
        return ()
    listed = ", ".join(f"{a4:g}" for a4 in others)
    cents = max(abs(cents_between(instrument.a4_hz, a4)) for a4 in others)
    return (
        f"tuned apart (A4 at {instrument.a4_hz:g} Hz against {listed} Hz): notes are paired by name, so the same "
        f"harmonic lies up to {cents:.0f} cents apart on the two sides; a body's peaks stay where they are, and on "
        "their flanks the tuning alone makes a difference",
    )
