"""The level of a recording over time: where a note is steady, where it begins anew, whether it rings."""

from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

_STEP_S = 0.005
_SMOOTH_S = 0.025
_STEADY_DB = 9.0
_RINGS_DB = 40.0
_ATTACK_S = 0.04
_RELEASE_S = 0.03
_EDGE_S = 0.004
"""Next to a hard edge of the recording nothing can be read between the samples."""
_AROUND_S = 0.2
_DIP_DB = 16.0
_STRIKE_S = 0.03
_FADES_DB = 8.0
_LONGEST_FADE_S = 2.0
_EARLY_S = 0.25
_LONG_ENOUGH_S = 1.0
_FALLS_DB_PER_S = 2.0
_RISE_DB = 10.0


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Envelope:
    """Level over time.

    Attributes
    ----------
    step_s : float
        Time between values, seconds; value i stands for i * step_s.
    level_db : float64 array, shape (n,)
        Mean power over about 25 ms, dB re full scale squared.
    floor_db : float
        Level of the quietest twentieth of the recording.
    renewals_s : tuple of float
        Times in seconds at which a sounding note begins anew (bow change, second pluck).
    fade_s : float
        When someone has begun to fade the recording out, seconds; infinite where it is not faded out.
    """

    step_s: float
    level_db: NDArray[np.float64]
    floor_db: float
    renewals_s: tuple[float, ...]
    fade_s: float


def level_envelope(samples: NDArray[np.float64], sample_rate_hz: float) -> Envelope:
    """Level of `samples` (shape (n,), full scale 1) every 5 ms."""
    hop = max(1, round(_STEP_S * sample_rate_hz))
    count = max(1, len(samples) // hop)
    power = np.zeros(count)
    usable = samples[: count * hop]
    power[: len(usable) // hop] = np.square(usable).reshape(-1, hop).mean(axis=1) if len(usable) >= hop else 0.0
    step_s = hop / sample_rate_hz
    smooth = scipy.ndimage.uniform_filter1d(power, max(1, round(_SMOOTH_S / step_s)), mode="nearest")
    level_db = 10.0 * np.log10(np.maximum(smooth, 1e-20))
    return Envelope(
        step_s=step_s,
        level_db=level_db,
        floor_db=float(np.percentile(level_db, 5)),
        renewals_s=_renewals(level_db, step_s),
        fade_s=_fade_out(level_db, step_s),
    )


def steady_stretch(envelope: Envelope, begin_s: float, end_s: float, *, ringing: bool) -> tuple[float, float]:
    """Start and end in seconds of the steady part of a note that sounds from about `begin_s` to about `end_s`.

    A held note is steady where its level, smoothed over vibrato, stays within 9 dB of its usual level. A ringing note
    counts from the end of its attack until it has fallen by 40 dB, reaches the floor or is faded out. Attack and
    release are left out unless the recording itself begins or ends inside the steady part.
    """
    step = envelope.step_s
    a, b = int(begin_s / step), min(len(envelope.level_db) - 1, int(np.ceil(end_s / step)))
    level = envelope.level_db[a : b + 1]
    if ringing:
        peak = int(np.argmax(level))
        lowest = max(float(level[peak]) - _RINGS_DB, envelope.floor_db + 3.0)
        below = np.nonzero(level[peak:] < lowest)[0]
        last = peak + int(below[0]) if len(below) else len(level)
        last = min(last, max(peak, int(envelope.fade_s / step) - a)) if np.isfinite(envelope.fade_s) else last
        return _within((a + peak) * step, (a + last) * step, _ATTACK_S, 0.0)
    smooth = scipy.ndimage.uniform_filter1d(level, min(len(level), round(0.15 / step)), mode="nearest")
    usual = float(np.percentile(smooth, 70))
    inside = np.concatenate([[False], smooth > usual - _STEADY_DB, [False]])
    edges = np.flatnonzero(np.diff(inside.astype(np.int8)))
    starts, ends = edges[::2], edges[1::2]
    if len(starts) == 0:
        return begin_s, begin_s
    longest = int(np.argmax(ends - starts))
    first, last = int(starts[longest]), int(ends[longest])
    # Inside the smoothed stretch, the level itself must have arrived and not yet left.
    near = level[first:last] > usual - _STEADY_DB
    arrived = np.flatnonzero(near)
    first, last = first + int(arrived[0]), first + int(arrived[-1]) + 1
    opens_inside = a + first <= 1
    closes_inside = a + last >= len(envelope.level_db) - 1
    return _within(
        (a + first) * step,
        (a + last) * step,
        _EDGE_S if opens_inside else _ATTACK_S,
        _EDGE_S if closes_inside else _RELEASE_S,
    )


def _within(start_s: float, stop_s: float, attack_s: float, release_s: float) -> tuple[float, float]:
    """The stretch less attack and release, of which a short note gives up a sixth each at most."""
    sixth = max(0.0, stop_s - start_s) / 6.0
    return start_s + min(attack_s, sixth), stop_s - min(release_s, sixth)


def is_ringing(envelope: Envelope, begin_s: float, end_s: float) -> bool:
    """Whether a note that sounds from about `begin_s` to about `end_s` rings freely.

    A plucked or struck note is loudest at its attack and falls all the way: half of the way to its end it has lost
    about half of the decibels that it loses in all. A held note loses most of them at its release.
    """
    step = envelope.step_s
    a, b = int(begin_s / step), min(len(envelope.level_db), int(np.ceil(end_s / step)) + 1)
    level = scipy.ndimage.uniform_filter1d(envelope.level_db[a:b], max(1, round(0.05 / step)), mode="nearest")
    peak = int(np.argmax(level))
    if peak * step > max(0.15, 0.15 * len(level) * step):
        return False
    below = np.flatnonzero(level[peak:] < level[peak] - 30.0)
    fall = level[peak] - level[peak : peak + int(below[0]) + 1 if len(below) else None]
    if len(fall) < 8 or fall[-1] < 6.0:
        return False
    half, most = fall[len(fall) // 2], fall[3 * len(fall) // 4]
    return bool(half > 0.35 * fall[-1] and most > 0.5 * fall[-1])


def rises_again_db(envelope: Envelope, begin_s: float, end_s: float) -> float:
    """By how many decibels a note grows again on its way down from its loudest moment to 30 dB below it."""
    step = envelope.step_s
    a, b = int(begin_s / step), min(len(envelope.level_db), int(np.ceil(end_s / step)) + 1)
    level = scipy.ndimage.uniform_filter1d(envelope.level_db[a:b], max(1, round(0.05 / step)), mode="nearest")
    rest = level[int(np.argmax(level)) :]
    below = np.flatnonzero(rest < rest[0] - 30.0)
    rest = rest[: int(below[0])] if len(below) else rest
    return float((rest - np.minimum.accumulate(rest)).max())


def falls_from_the_start(envelope: Envelope, begin_s: float, end_s: float) -> bool:
    """Whether a note is loudest near its beginning and falls on the whole, beats or not.

    Plucked strings do, but so does many a blown note; the harmonics must tell these apart.
    """
    step = envelope.step_s
    a, b = int(begin_s / step), min(len(envelope.level_db), int(np.ceil(end_s / step)) + 1)
    level = scipy.ndimage.uniform_filter1d(envelope.level_db[a:b], max(1, round(0.05 / step)), mode="nearest")
    peak = int(np.argmax(level))
    rest = level[peak:]
    if peak * step > _EARLY_S or len(rest) * step < _LONG_ENOUGH_S:
        return False
    slope = np.polynomial.Polynomial.fit(np.arange(len(rest)) * step, rest, 1).convert().coef[1]
    return bool(slope < -_FALLS_DB_PER_S)


def _fade_out(level_db: NDArray[np.float64], step_s: float) -> float:
    """When a fade-out at the end of a recording begins, seconds; infinity without one.

    A straight ramp to nothing falls by 9.5 dB from 150 to 50 ms before its end. Where it begins is what best makes the
    level a straight line times a ramp; a decay that needs no ramp to be straight is none.
    """
    last = len(level_db) - round(_SMOOTH_S / step_s)
    at = [last - round(frames * _SMOOTH_S / step_s) for frames in (1, 5)]
    if at[1] < 0 or level_db[at[1]] - level_db[at[0]] < _FADES_DB:
        return np.inf
    window = level_db[max(0, last - round(_LONGEST_FADE_S * 1.5 / step_s)) : last]
    before_end = (np.arange(len(window), 0, -1) + 0.5 * _SMOOTH_S / step_s) * step_s
    design = np.stack([np.ones(len(window)), before_end], axis=1)

    def left_by(length_s: float) -> float:
        flat = window - 20.0 * np.log10(np.minimum(before_end / length_s, 1.0)) if length_s else window
        rest = flat - design @ np.linalg.lstsq(design, flat, rcond=None)[0]
        return float(rest @ rest)

    lengths_s = np.geomspace(0.03, _LONGEST_FADE_S, 40)
    left = [left_by(length_s) for length_s in lengths_s.tolist()]
    if min(left) > 0.5 * left_by(0.0):
        return np.inf
    return max(0.0, last * step_s - float(lengths_s[int(np.argmin(left))]))


def _renewals(level_db: NDArray[np.float64], step_s: float) -> tuple[float, ...]:
    """Times of short deep dips (a new bow stroke) and of sudden lasting rises (a second pluck while the first rings).

    Vibrato moves the level of a violin by up to 10 dB, and so does a smooth bow change within one long note: neither
    ends a note.
    """
    span = round(_AROUND_S / step_s)
    if len(level_db) < 3 * span:
        return ()
    usual = scipy.ndimage.median_filter(level_db, span, mode="nearest")
    index = np.arange(len(level_db))
    before = usual[np.maximum(index - span // 2, 0)]
    after = usual[np.minimum(index + span // 2, len(level_db) - 1)]
    near = span // 2
    dip = np.minimum(before, after) - level_db
    dips = (dip > _DIP_DB) & (level_db == scipy.ndimage.minimum_filter1d(level_db, near, mode="nearest"))
    lag = max(1, round(_STRIKE_S / step_s))
    rise = np.zeros(len(level_db))
    rise[lag:] = level_db[lag:] - level_db[:-lag]
    strikes = (rise > _RISE_DB) & (rise == scipy.ndimage.maximum_filter1d(rise, near, mode="nearest"))
    # The rise must last, and start from sound rather than silence.
    strikes &= (after - before > _RISE_DB - 2.0) & (before > level_db.max() - _RINGS_DB)
    return tuple(float(i * step_s) for i in np.flatnonzero(dips | strikes))
