"""From profiles with several takes to tables of take-to-take scatter like those in ``compare/data``.

The other end of :mod:`timbre_match.compare.repeatability`, which reads such tables as prior figures. Levels in dB,
frequencies in Hz, tilts in dB per octave. All scatter is per take: that of a difference of two takes over the square
root of 2. Every pair of takes of one profile counts; takes of different profiles are never compared.
"""

import csv
import dataclasses
import io
import itertools
import math
from collections import Counter, defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, optimize

from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile, Take
from timbre_match.measure.recipe import Recipe

Array = NDArray[np.float64]

BAND_EDGES_HZ = (0, 125, 250, 500, 1000, 2000, 4000, 8000, 16000)
"""Octave bands of the table of single harmonics; what lies above is left out."""

ABOVE_FLOOR_DB = 12.0
LEAST_HARMONICS = 6
"""A pair of notes with fewer harmonics in common is left out: its own alignment would take up most of its scatter."""

LEAST_PAIRS = 50
"""A band with fewer pairs gets no row: its robust standard deviation would be uncertain by more than a sixth."""

LEAST_NOTES = 10
"""Notes that two takes must have in common before their scatter is taken apart."""

_BAND_NOTES = 5
_LEAST_BANDS = 4
_MAD_TO_SD = 1.4826


@dataclass(frozen=True, kw_only=True, slots=True)
class BandScatter:
    """One row of ``repeatability.csv``: the scatter of single harmonics in one band. Fields are its columns."""

    instrument: str
    band_low_hz: int
    band_high_hz: int
    n_overtone_pairs: int
    sd_per_take_db_robust: float
    sd_per_take_db_rms: float
    p95_abs_db: float
    tilt_sd_db_per_octave_robust: float


@dataclass(frozen=True, kw_only=True, slots=True)
class TakeStructure:
    """One row of ``take_structure.csv``: what the scatter of an instrument is made of. Fields are its columns."""

    instrument: str
    take_pairs: int
    tilt_common_to_take_sd_db_per_octave: float
    tilt_per_note_sd_db_per_octave: float
    wobble_common_to_take_sd_db_median: float
    wobble_common_to_take_sd_db_p90: float


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _NotePair:
    """One note in two takes: log2 of frequency in Hz and level difference in dB, shape (n_harmonics,)."""

    name: str
    octave: Array
    difference_db: Array


@dataclass(frozen=True, kw_only=True, slots=True)
class _PairVariances:
    """What the difference of two takes is made of, as variances per take; unbiased, so they may be below zero."""

    take_tilt: float
    note_tilt: float
    wobble: float


def repeatability_rows(profiles: Sequence[Profile]) -> tuple[BandScatter, ...]:
    """Scatter of single harmonics by instrument family and octave band.

    Harmonics count where they lie at least 12 dB above the floor in both takes. Each level difference is aligned by
    the median of the *other* harmonics of its note, over sqrt(1 + pi / 2 (n - 1)) for the error that this median has:
    against the median of all, the middle harmonic would scatter by nothing, and the robust figure of notes with eight
    harmonics would come out 15 % too small. So aligned, and with harmonics that scatter alike, it is right within 3 %
    from six harmonics on, and the plain figure within 7 %, for the tails of Student's t with 3 degrees of freedom as
    well as for normal ones. Tilts stay in: only the gain is aligned.

    The robust standard deviation is that of the *difference* of two takes over the square root of 2, and with heavy
    tails that is not the one of a single take: the difference of two Student t variables has lighter tails.

    The tilt's figure has the sampling error of each note's slope taken out: it is the t that makes the median of
    |slope| / sqrt(t^2 + se^2) that of a normal variable.

    Parameters
    ----------
    profiles : sequence of Profile
        At least two takes each, and a family, which becomes the column `instrument`.

    Raises
    ------
    ComparisonError
        If a profile has one take or no family, if no band of a family has enough pairs of harmonics, or if its takes
        are copies of each other.
    """
    rows = []
    for family, members in _by_family(profiles).items():
        pairs = [pair for takes in _take_pairs(members) for pair in _note_pairs(*takes)]
        octave = np.concatenate([pair.octave for pair in pairs]) if pairs else np.zeros(0)
        aligned = np.concatenate([_aligned(pair.difference_db) for pair in pairs]) if pairs else np.zeros(0)
        per_take = np.abs(aligned) / math.sqrt(2.0)
        found = []
        for low, high in itertools.pairwise(BAND_EDGES_HZ):
            inside = per_take[(2.0**octave >= low) & (2.0**octave < high)]
            if inside.size >= LEAST_PAIRS:
                found.append((low, high, inside))
        if not found:
            raise ComparisonError(
                f"the takes of {family!r} hold too few harmonics: no octave band has {LEAST_PAIRS} pairs",
                cause=f"few notes in common, or few harmonics that lie {ABOVE_FLOOR_DB:.0f} dB above the floor in both",
                remedy="record more notes in every take, close to the microphone",
            )
        tilt = _tilt_sd(pairs)
        for low, high, inside in found:
            robust = _MAD_TO_SD * float(np.median(inside))
            if robust < 0.005:
                raise ComparisonError(
                    f"the takes of {family!r} do not differ between {low} and {high} Hz",
                    cause="the same recording, or a copy of it, was measured as two takes",
                    remedy="measure each take from a recording of its own",
                )
            rows.append(
                BandScatter(
                    instrument=family,
                    band_low_hz=low,
                    band_high_hz=high,
                    n_overtone_pairs=inside.size,
                    sd_per_take_db_robust=robust,
                    sd_per_take_db_rms=math.sqrt(float(np.mean(inside**2))),
                    p95_abs_db=float(np.quantile(inside, 0.95)),
                    tilt_sd_db_per_octave_robust=tilt,
                )
            )
    return tuple(rows)


def structure_rows(profiles: Sequence[Profile]) -> tuple[TakeStructure, ...]:
    """What the scatter of each instrument family is made of.

    For every pair of takes with at least ten notes in common one least-squares fit: a gain and a tilt for each note,
    and an effect for each half-octave band that holds at least five notes, with neither mean nor tilt over the bands.
    The coefficients' covariance is estimated from the residuals without assuming that all harmonics scatter alike
    (HC2: MacKinnon & White 1985, Some heteroskedasticity-consistent covariance matrix estimators with improved finite
    sample properties, *Journal of Econometrics* 29:305). From it follow, by the method of moments, unbiased estimates
    of the squared tilt common to the notes, of the variance of each note's own tilt about it, and of the mean square
    of the band effects. Tilts are averaged over the pairs as variances; the wobble is given as the median and the 90th
    percentile of its standard deviation over the pairs, in which the chance of each estimate still is. A tilt of the
    wobble itself counts as the take's. What comes out below zero counts as zero.

    Parameters
    ----------
    profiles : sequence of Profile
        At least two takes each, and a family, which becomes the column `instrument`.

    Raises
    ------
    ComparisonError
        If a profile has one take or no family, or no two takes of a family have ten notes in common.
    """
    rows = []
    for family, members in _by_family(profiles).items():
        found = []
        for first, second in _take_pairs(members):
            variances = _pair_variances(_note_pairs(first, second))
            if variances is not None:
                found.append(variances)
        if not found:
            raise ComparisonError(
                f"no two takes of {family!r} have {LEAST_NOTES} notes in common that tell enough",
                cause=f"a note counts with {LEAST_HARMONICS} harmonics that lie {ABOVE_FLOOR_DB:.0f} dB above the "
                f"floor in both takes; together they must reach over {_LEAST_BANDS} half octaves",
                remedy=f"record the same {LEAST_NOTES} notes or more in every take",
            )
        wobble = [_root(one.wobble) for one in found]
        rows.append(
            TakeStructure(
                instrument=family,
                take_pairs=len(found),
                tilt_common_to_take_sd_db_per_octave=_root(float(np.mean([one.take_tilt for one in found]))),
                tilt_per_note_sd_db_per_octave=_root(float(np.mean([one.note_tilt for one in found]))),
                wobble_common_to_take_sd_db_median=float(np.median(wobble)),
                wobble_common_to_take_sd_db_p90=float(np.quantile(wobble, 0.9)),
            )
        )
    return tuple(rows)


def table_text(rows: Sequence[BandScatter] | Sequence[TakeStructure]) -> str:
    """Text of a table in the form of the package's own: CSV, a head line, figures to a hundredth.

    Parameters
    ----------
    rows : sequence of BandScatter or of TakeStructure
        At least one.
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([field.name for field in dataclasses.fields(rows[0])])
    for row in rows:
        values = (getattr(row, field.name) for field in dataclasses.fields(row))
        writer.writerow([f"{value:.2f}" if isinstance(value, float) else value for value in values])
    return text.getvalue()


def _by_family(profiles: Sequence[Profile]) -> dict[str, list[Profile]]:
    found: dict[str, list[Profile]] = defaultdict(list)
    for profile in profiles:
        name = profile.instrument or "a profile without a name"
        family = profile.family.strip().lower()
        if not family:
            raise ComparisonError(
                f"{name} has no instrument family",
                cause="it was measured without --family",
                remedy="measure it again with --family, for instance --family violin",
            )
        if len(profile.takes) < 2:
            raise ComparisonError(
                f"{name} ({family}) has one take, and scatter shows only between takes",
                cause="only one recording was measured, or those of several takes lay in one folder",
                remedy="measure two takes or more into one profile, each from a recording or a folder of its own",
            )
        found[family].append(profile)
    return dict(sorted(found.items()))


def _take_pairs(profiles: Sequence[Profile]) -> list[tuple[Take, Take]]:
    return [pair for profile in profiles for pair in itertools.combinations(profile.takes, 2)]


def _note_pairs(first: Take, second: Take) -> list[_NotePair]:
    """Notes that two takes have in common; a note that is played again is paired with the other take's next one.

    Averages of repeated notes would scatter less than the single notes that the tables are about.
    """
    other = _numbered(second)
    found = []
    for key, recipe in _numbered(first).items():
        if key not in other:
            continue
        fellow = other[key]
        _, here, there = np.intersect1d(
            recipe.k[_clear(recipe)], fellow.k[_clear(fellow)], assume_unique=True, return_indices=True
        )
        if here.size >= LEAST_HARMONICS:
            mine, theirs = np.flatnonzero(_clear(recipe))[here], np.flatnonzero(_clear(fellow))[there]
            found.append(
                _NotePair(
                    name=recipe.note,
                    octave=0.5 * np.log2(recipe.freq_hz[mine] * fellow.freq_hz[theirs]),
                    difference_db=recipe.level_db[mine] - fellow.level_db[theirs],
                )
            )
    return found


def _numbered(take: Take) -> dict[tuple[str, int], Recipe]:
    seen: Counter[str] = Counter()
    found = {}
    for recipe in take.notes:
        found[recipe.note, seen[recipe.note]] = recipe
        seen[recipe.note] += 1
    return found


def _clear(recipe: Recipe) -> NDArray[np.bool_]:
    """Which harmonics lie far enough above the floor."""
    with np.errstate(invalid="ignore"):
        return np.asarray(recipe.heard & (recipe.level_db - recipe.floor_db >= ABOVE_FLOOR_DB))


def _aligned(difference_db: Array) -> Array:
    """Differences less the median of the note's other harmonics, shrunk by what that median's own error adds."""
    n = difference_db.size
    others = np.median(np.broadcast_to(difference_db, (n, n))[~np.eye(n, dtype=bool)].reshape(n, n - 1), axis=1)
    # The variance of a median of n - 1 normal values is pi / 2 (n - 1) times theirs.
    return np.asarray((difference_db - others) / math.sqrt(1.0 + 0.5 * math.pi / (n - 1)))


def _tilt_sd(pairs: list[_NotePair]) -> float:
    """Robust standard deviation of the notes' slopes per take, without their sampling error, dB per octave."""
    slope, error_variance = np.zeros(len(pairs)), np.zeros(len(pairs))
    for place, pair in enumerate(pairs):
        columns = np.column_stack([np.ones(pair.octave.size), pair.octave - np.mean(pair.octave)])
        coefficients, covariance = _least_squares(columns, pair.difference_db)
        slope[place], error_variance[place] = coefficients[1], covariance[1, 1]

    def excess(variance: float) -> float:
        total = variance + error_variance
        return float(np.median(np.divide(slope**2, total, out=np.zeros(total.shape), where=total > 0))) - _MAD_TO_SD**-2

    if excess(0.0) <= 0:
        return 0.0
    return math.sqrt(0.5 * float(optimize.brentq(excess, 0.0, _MAD_TO_SD**2 * float(np.max(slope**2)))))


def _pair_variances(pairs: list[_NotePair]) -> _PairVariances | None:
    """Take the difference of two takes apart; None where they have too little in common."""
    notes = len(pairs)
    if len({pair.name for pair in pairs}) < LEAST_NOTES:
        return None
    octave = np.concatenate([pair.octave for pair in pairs])
    note = np.repeat(np.arange(notes), [pair.octave.size for pair in pairs])
    band = np.floor(2.0 * (octave - math.log2(1000.0))).astype(np.int64)
    shared = np.array([one for one in np.unique(band) if np.unique(note[band == one]).size >= _BAND_NOTES])
    if shared.size < _LEAST_BANDS:
        return None
    # A mean and a tilt over the bands are left to the gains and tilts of the notes.
    shapes = linalg.null_space(np.vstack([np.ones(shared.size), shared - np.mean(shared)]))
    of_note = (note[:, None] == np.arange(notes)).astype(np.float64)
    centre = of_note.T @ octave / np.sum(of_note, axis=0)
    columns = np.hstack(
        [of_note, of_note * (octave - centre[note])[:, None], (band[:, None] == shared).astype(np.float64) @ shapes]
    )
    coefficients, covariance = _least_squares(columns, np.concatenate([pair.difference_db for pair in pairs]))
    tilt, tilt_error = coefficients[notes : 2 * notes], covariance[notes : 2 * notes, notes : 2 * notes]
    wobble, wobble_error = coefficients[2 * notes :], covariance[2 * notes :, 2 * notes :]
    error_of_mean = float(np.mean(tilt_error))
    error_about_mean = (float(np.trace(tilt_error)) - notes * error_of_mean) / (notes - 1)
    note_tilt = float(np.var(tilt, ddof=1)) - error_about_mean
    take_tilt = float(np.mean(tilt)) ** 2 - note_tilt / notes - error_of_mean
    wobble_variance = (float(wobble @ wobble) - float(np.trace(wobble_error))) / shared.size
    return _PairVariances(take_tilt=0.5 * take_tilt, note_tilt=0.5 * note_tilt, wobble=0.5 * wobble_variance)


def _least_squares(columns: Array, value: Array) -> tuple[Array, Array]:
    """Coefficients and their HC2 covariance (see :func:`structure_rows`)."""
    left, size, right = linalg.svd(columns, full_matrices=False)
    kept = size > 1e-9 * size[0]
    left, inverse = left[:, kept], right[kept].T / size[kept]
    residual = value - left @ (left.T @ value)
    # A harmonic that its own column fits exactly tells nothing of the scatter: its residual is zero, and so is this.
    freedom = np.maximum(1.0 - np.sum(left**2, axis=1), 1e-6)
    spread = left * (residual / np.sqrt(freedom))[:, None]
    return inverse @ (left.T @ value), inverse @ (spread.T @ spread) @ inverse.T


def _root(variance: float) -> float:
    return math.sqrt(max(variance, 0.0))
