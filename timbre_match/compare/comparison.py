"""Profile and target in, comparison out."""

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare import body_curve, colour, model, sampling, verdicts
from timbre_match.compare.estimates import Estimates, estimate
from timbre_match.compare.playing import Evidence, gather
from timbre_match.compare.pluck import compare_plucks
from timbre_match.compare.records import (
    ColourDistance,
    Comparison,
    CurvePoint,
    HarmonicDifference,
    Interval,
    Region,
    Repeatability,
    Verdict,
)
from timbre_match.compare.same_recordings import same_recording_remarks
from timbre_match.compare.sessions import session_remarks
from timbre_match.compare.strings import compare_strings
from timbre_match.compare.sustain import compare_sustain
from timbre_match.compare.target import Target, as_target
from timbre_match.measure.profile import Profile
from timbre_match.threads import single_threaded

__all__ = [
    "ColourDistance",
    "Comparison",
    "CurvePoint",
    "HarmonicDifference",
    "Interval",
    "Region",
    "Repeatability",
    "Verdict",
    "compare",
    "tolerance_db",
]

Array = NDArray[np.float64]

DEFAULT_MARGIN_DB = 3.0

_WITHOUT_CONTROL = (
    "sustain, pluck points and inharmonicity are compared without the control: microphone and room hardly change them, "
    "other strings do",
)
_SEED = 20261
_Z95 = 1.959963984540054


@single_threaded
def compare(
    profile: Profile,
    target: Profile | Target,
    *,
    margin_db: float = DEFAULT_MARGIN_DB,
    control_now: Profile | None = None,
    control_then: Profile | None = None,
    rng: np.random.Generator | None = None,
) -> Comparison:
    """Compare an instrument with a target: verdicts, body curve, regions, colour distance and closeness.

    Parameters
    ----------
    profile : Profile
        The instrument.
    target : Profile or Target
        What to match; a plain profile is a target with one member.
    margin_db : float
        Differences within +-margin count as alike where that is certain enough.
    control_now, control_then : Profile, optional
        An instrument that has not changed, recorded in the instrument's session and in the target's. What it seems to
        have changed by is taken out, as a curve over frequency, and its uncertainty added.
    rng : numpy Generator, optional
        Source of the draws behind bands and intervals. By default a new generator with a fixed seed, so that the same
        input gives the same answer.

    Returns
    -------
    Comparison
        All differences are instrument minus target, from the reference level that
        :mod:`timbre_match.compare.body_curve` describes. Where both sides have ringing notes in common, with
        `sustain`, `pluck` and `strings`; different pluck points are taken out of the differences where they can be
        told. Controls have no part in these.

    Raises
    ------
    ComparisonError
        If the two have no note in common or no note with two harmonics that both let one hear, or the same holds of
        the controls.
    ControlError
        If the controls are two instruments, or have recordings in common with each other, the instrument or the target.
    ValueError
        If `margin_db` is not positive, or one of the controls is missing.
    """
    if not margin_db > 0:
        raise ValueError(f"margin_db is {margin_db}; a margin in dB is positive")
    if (control_now is None) != (control_then is None):
        raise ValueError("a control needs two profiles: as it was recorded now, and as it was recorded then")
    generator = np.random.default_rng(_SEED) if rng is None else rng
    whole = as_target(target)
    control = None if control_now is None or control_then is None else (control_now, control_then)
    plucks = compare_plucks(profile, whole)
    evidence = gather(plucks.profile, plucks.target, control)
    grid_hz, estimates = _estimated(evidence, generator)
    distance, close = _distance_and_closeness(evidence, estimates, margin_db)
    own = colour.distance_between_takes(
        evidence.note_index, evidence.freq_hz, evidence.instrument_db, evidence.instrument_takes_db
    )
    harmonics = _harmonics(evidence, estimates, margin_db)
    curve, regions = _curve(grid_hz, estimates), _regions(evidence, estimates, grid_hz)
    sustain, sustain_remarks = compare_sustain(profile, whole, generator)
    strings, string_remarks = compare_strings(profile, whole, regions, curve, sustain)
    return Comparison(
        instrument=profile.instrument,
        stage=profile.stage,
        family=profile.family,
        target=whole.name,
        margin_db=margin_db,
        colour_distance=ColourDistance(distance_db=distance, own_db=own),
        closeness_percent=close,
        repeatability=Repeatability(
            source="both" if evidence.repeats else "prior",
            takes=len(profile.takes),
            target_takes=sum(len(member.takes) for member in whole.members),
        ),
        harmonics=harmonics,
        body_curve=curve,
        regions=regions,
        remarks=(session_remarks(profile, whole) if control is None else ())
        + same_recording_remarks(profile, whole)
        + evidence.remarks
        + _family_remarks(whole, distance)
        + _remarks(harmonics)
        + string_remarks
        + plucks.remarks
        + sustain_remarks
        + (_WITHOUT_CONTROL if control is not None and sustain is not None else ()),
        sustain=sustain,
        pluck=plucks.notes,
        strings=strings,
    )


def tolerance_db(target: Target) -> float | None:
    """How far a target's members lie from the blend of the others: their root-mean-square colour distance in dB.

    None where the target has one member, or members without a note in common.
    """
    if len(target.members) < 2:
        return None
    found = []
    for place, member in enumerate(target.members):
        others = target.members[:place] + target.members[place + 1 :]
        evidence = gather(member, Target(name=target.name, members=others))
        estimates = _estimated(evidence, np.random.default_rng(_SEED))[1]
        found.append(_distance_and_closeness(evidence, estimates, DEFAULT_MARGIN_DB)[0].value)
    return float(np.sqrt(np.mean(np.square(found))))


def _estimated(evidence: Evidence, rng: np.random.Generator) -> tuple[Array, Estimates]:
    """Grid in Hz, and the fitted model's estimates on it.

    The draws see the difference the same way round whichever side is called the instrument, so that exchanging the
    sides changes the answer's sign and nothing else.
    """
    sign = math.copysign(1.0, float(np.sum(evidence.differences.value_db)))
    row = replace(evidence.differences, value_db=sign * evidence.differences.value_db)
    prior = model.informed_prior(list(evidence.repeats), evidence.prior)
    solutions = sampling.sample(row, prior, rng)
    grid_hz = body_curve.frequency_grid(evidence.freq_hz)
    octave, smooth = evidence.curve_columns(grid_hz)
    found = estimate(solutions, row, octave, smooth, evidence.loudness(grid_hz), rng, harmonics=evidence.freq_hz.size)
    return grid_hz, replace(
        found,
        harmonic_db=sign * found.harmonic_db,
        curve_db=sign * found.curve_db,
        harmonic_draws_db=sign * found.harmonic_draws_db,
        curve_draws_db=sign * found.curve_draws_db,
        curve_at_harmonics_db=sign * found.curve_at_harmonics_db,
    )


def _distance_and_closeness(evidence: Evidence, estimates: Estimates, margin_db: float) -> tuple[Interval, Interval]:
    """Colour distance in dB and closeness in per cent from the draws, less what the takes' scatter puts into them.

    The distance of the mean differences would be too small, since those are shrunk; the draws have the size that the
    model finds, but that holds what takes scatter more than the model is told (:mod:`timbre_match.compare.few_takes`):
    a constant added to the squared distance, which is taken off (as the error's share is in an unbiased estimate of a
    squared distance: Walther et al. 2016, Reliability of dissimilarity measures for multi-voxel pattern analysis,
    *NeuroImage* 137). The squares scatter as much more about their mean.

    Closeness is that of the same draws, brought to the same distance: harmonics' own deviations, which is where the
    scatter went, are made smaller, and the body curve is not until nothing else is left.
    """
    where = evidence.note_index, evidence.freq_hz, evidence.target_db
    draws = estimates.harmonic_draws_db
    drawn = colour.colour_distance(colour.all_bands(*where, draws)) ** 2
    excess = (evidence.claim_factor - 1.0) * estimates.scatter_scale
    added = colour.mean_band_variance(*where, estimates.harmonic_db, excess)
    middle = float(np.mean(drawn))
    square = np.maximum(middle + np.sqrt(evidence.claim_factor) * (drawn - middle) - added, 0.0)
    curve = estimates.curve_at_harmonics_db
    smooth = colour.colour_distance(colour.all_bands(*where, curve)) ** 2
    left = np.sqrt(_ratio(np.maximum(square - smooth, 0.0), np.maximum(drawn - smooth, 0.0)))
    bands = colour.all_bands(*where, curve + left[:, None] * (draws - curve))
    factor = np.sqrt(_ratio(square, colour.colour_distance(bands) ** 2))
    share = colour.closeness([band.scaled(factor) for band in bands], margin_db)
    return _interval(np.sqrt(square), math.sqrt(max(middle - added, 0.0))), _interval(share)


def _ratio(part: Array, whole: Array) -> Array:
    return np.divide(part, whole, out=np.zeros(part.shape), where=whole > 0)


def _interval(draws: Array, value: float | None = None) -> Interval:
    """95 % of the draws about their median, or about another `value`."""
    low, middle, high = np.quantile(draws, [0.025, 0.5, 0.975])
    return Interval(value=float(middle if value is None else value), low=float(low), high=float(high))


def _normal_interval(value: float, sd: float) -> Interval:
    return Interval(value=value, low=value - _Z95 * sd, high=value + _Z95 * sd)


def _harmonics(evidence: Evidence, estimates: Estimates, margin_db: float) -> tuple[HarmonicDifference, ...]:
    difference, sd = estimates.harmonic_db, estimates.harmonic_sd_db
    p = verdicts.difference_p(difference, sd)
    threshold = verdicts.false_discovery_threshold(p)
    different = p <= threshold
    alike = verdicts.equivalence_p(difference, sd, margin_db) <= verdicts.EQUIVALENCE_LEVEL
    needed = verdicts.takes_needed(
        difference,
        estimates.scatter_variance,
        estimates.own_variance,
        estimates.shared_variance,
        takes=evidence.takes,
        margin_db=margin_db,
        threshold=threshold or verdicts.FALSE_DISCOVERY_RATE,
    )
    found = []
    for i in range(difference.size):
        verdict: Verdict = "unsettled"
        if different[i]:
            verdict = "stronger" if difference[i] > 0 else "weaker"
        elif alike[i]:
            verdict = "alike"
        found.append(
            HarmonicDifference(
                note=evidence.notes[evidence.note_index[i]],
                k=int(evidence.k[i]),
                freq_hz=float(evidence.freq_hz[i]),
                difference_db=_normal_interval(float(difference[i]), float(sd[i])),
                p=float(p[i]),
                verdict=verdict,
                takes_needed=int(needed[i]) if verdict == "unsettled" and needed[i] else None,
            )
        )
    return tuple(found)


def _curve(grid_hz: Array, estimates: Estimates) -> tuple[CurvePoint, ...]:
    """The curve with its bands; where it is certain on which side of zero it lies, the bands end there.

    Whether a curve that is there is wholly inside its band, and whether there is one, are two questions, and the second
    asks for less: where the curve is further off zero than playing alone would bring it anywhere, in all but one of
    twenty comparisons, its sign is known, and the simultaneous band, which need not cover both signs, ends at zero
    (Benjamini, Hochberg & Stark 1998, Confidence intervals with more power to determine the sign, *JASA* 93).
    """
    centre, sd = estimates.curve_db, estimates.curve_sd_db
    factor = max(body_curve.simultaneous_factor(estimates.curve_draws_db, centre, sd), _Z95)
    side = _known_side(estimates)
    low = np.where(side > 0, np.maximum(centre - factor * sd, 0.0), centre - factor * sd)
    high = np.where(side < 0, np.minimum(centre + factor * sd, 0.0), centre + factor * sd)
    return tuple(
        CurvePoint(
            freq_hz=float(hz),
            difference_db=_normal_interval(float(value), float(one)),
            simultaneous_low_db=float(below),
            simultaneous_high_db=float(above),
        )
        for hz, value, one, below, above in zip(grid_hz, centre, sd, low, high, strict=True)
    )


def _known_side(estimates: Estimates) -> NDArray[np.int64]:
    """1 where the curve is certain to lie above zero, -1 below, else 0; shape (g,)."""
    certain = np.abs(estimates.curve_db) > max(estimates.curve_significance, _Z95) * estimates.curve_sd_db
    return np.where(certain, np.sign(estimates.curve_db), 0.0).astype(np.int64)


def _regions(evidence: Evidence, estimates: Estimates, hz: Array) -> tuple[Region, ...]:
    """Stretches where the simultaneous band keeps to one side of zero and at least two harmonics were measured.

    What a single harmonic shows is said of that harmonic, and is no matter of the body.

    A region's size is the curve's mean over a knot's distance about the place where it is farthest from zero. A mean
    over the whole stretch would call every peak smaller than it is, the farthest point alone greater: of all points it
    is the one that chance has helped most.
    """
    half_step = np.sqrt(hz[1] / hz[0])
    found = []
    for stretch in body_curve.stretches(_known_side(estimates)):
        inside = slice(stretch.first, stretch.last + 1)
        bounds = hz[stretch.first] / half_step, hz[stretch.last] * half_step
        members = (evidence.freq_hz >= bounds[0]) & (evidence.freq_hz <= bounds[1])
        if np.count_nonzero(members) < 2:
            continue
        peak_hz = hz[inside][np.argmax(np.abs(estimates.curve_db[inside]))]
        near = np.abs(np.log2(hz[inside] / peak_hz)) <= 0.5 / body_curve.KNOTS_PER_OCTAVE
        draws = np.mean(estimates.curve_draws_db[:, inside][:, near], axis=1)
        value, sd = float(np.mean(draws)), float(np.std(draws))
        found.append(
            Region(
                low_hz=float(max(bounds[0], hz[0])),
                high_hz=float(min(bounds[1], hz[-1])),
                difference_db=_normal_interval(value, sd),
                verdict="stronger" if value > 0 else "weaker",
                harmonics=int(np.count_nonzero(members)),
                notes=int(np.unique(evidence.note_index[members]).size),
            )
        )
    return tuple(found)


def _family_remarks(target: Target, distance_db: Interval) -> tuple[str, ...]:
    """Say where the instrument stands among the members of a blended target; certain only beyond the interval."""
    tolerance = tolerance_db(target)
    if tolerance is None:
        return ()
    apart = f"its members differ among themselves by {tolerance:.1f} dB"
    if distance_db.value <= tolerance:
        sure = "" if distance_db.high <= tolerance else ", though the interval reaches beyond"
        return (f"inside the family: no further from {target.name} than {apart}{sure}",)
    sure = "" if distance_db.low > tolerance else ", though the interval reaches into it"
    return (f"outside the family of {target.name}: {apart}{sure}",)


def _remarks(harmonics: tuple[HarmonicDifference, ...]) -> tuple[str, ...]:
    """Say what more takes would buy."""
    unsettled = [one for one in harmonics if one.verdict == "unsettled"]
    needed = [one.takes_needed for one in unsettled if one.takes_needed is not None]
    if not needed:
        return ()
    fewest = min(needed)
    count = sum(1 for one in needed if one <= fewest)
    return (
        f"{len(unsettled)} of {len(harmonics)} harmonics are unsettled; "
        f"with {fewest} takes a side about {count} of them should settle",
    )
