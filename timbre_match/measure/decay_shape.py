"""What shape a decay has: plain, in two stages, beating, or none of these clearly.

Coupled strings and the two polarisations of one string die in two stages where their frequencies coincide, and beat
where they differ (Weinreich 1977, J. Acoust. Soc. Am. 62:1474).
"""

import numpy as np
from numpy.typing import NDArray

from timbre_match.measure.decay import T60_LOG, Decays, exponentials
from timbre_match.measure.records import DecayShape

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_NEAR_DB, _OVER_NOISE_DB = 30.0, 10.0
"""A decay is described down to so far under its beginning, and so far above the noise."""
_VISIBLE_DB = 1.0
_OVERLAP_DB = 12.0


def _level_db(fit: Decays, time_s: Real) -> Real:
    """Level of a fit, dB, shape (P, n)."""
    return np.asarray(20.0 * np.log10(np.abs(fit.at(time_s)) + 1e-30))


def _seen(time_s: Real, level_db: Real, noise: Real) -> NDArray[np.bool_]:
    """Where a decay counts: not too far under its highest level, and above the noise."""
    lowest = np.maximum(
        level_db.max(axis=1, keepdims=True) - _NEAR_DB, 10.0 * np.log10(noise)[:, None] + _OVER_NOISE_DB
    )
    # A dip in the middle still counts: up to the last time above.
    later = np.maximum.accumulate((level_db > lowest)[:, ::-1], axis=1)[:, ::-1]
    return np.asarray(later)


def second_is_needed(
    time_s: Real, plain: Decays, double: Decays, noise: Real, noise_factor: float
) -> NDArray[np.bool_]:
    """Whether the data ask for a second component, and it can be seen."""
    values = len(time_s) * noise_factor
    # The Bayesian information criterion for four more parameters, with a margin for the search among many.
    ratio = np.maximum(plain.rest, 1e-30) / np.maximum(double.rest, 1e-30)
    asked = values * np.log(ratio) > 4.0 * np.log(values) + 12.0
    before, after = _level_db(plain, time_s), _level_db(double, time_s)
    seen = _seen(time_s, after, noise)
    visible = np.where(seen, np.abs(after - before), 0.0).max(axis=1) > _VISIBLE_DB
    return np.asarray(asked & visible)


def misfit(time_s: Real, size: Real, rest: Real, noise: Real, noise_factor: float) -> Real:
    """Root-mean-square error of a fit relative to the partial, beyond what noise explains."""
    values = len(time_s) * noise_factor
    expected = 0.5 * noise * len(time_s)
    beyond = np.where(rest > expected * (1.0 + 4.0 * np.sqrt(2.0 / values)), rest - expected, 0.0)
    return np.asarray(np.sqrt(beyond / (size**2).sum(axis=1)))


def shape_of(time_s: Real, s: Complex, c: Complex, noise: float) -> tuple[DecayShape, dict[str, float]]:
    """What two components make together: two stages, beats, or neither clearly."""
    fit = Decays(s=s[None], c=c[None], rest=np.zeros(1))
    level_db = _level_db(fit, time_s)
    seen = time_s[_seen(time_s, level_db, np.array([noise]))[0]]
    if len(seen) < 2:
        return "unclear", {}
    fast, slow = (0, 1) if s[0].real < s[1].real else (1, 0)
    parts_db = 20.0 * np.log10(np.abs(c[:, None] * exponentials(s[None], seen)[0]) + 1e-30)
    together = np.abs(parts_db[0] - parts_db[1]) < _OVERLAP_DB
    beat_hz = float(abs(s[0].imag - s[1].imag)) / (2.0 * np.pi)
    beats = beat_hz * float(together.sum()) * float(time_s[1] - time_s[0])
    ratio = float(s[fast].real / s[slow].real)
    highest = np.minimum.accumulate(level_db[0, : len(seen)])
    rise_db = float((level_db[0, : len(seen)] - highest).max())
    beating = {
        "beat_hz": beat_hz,
        "beat_depth_db": _swing_db(float(np.abs(c).min() / np.abs(c).max())),
    }
    if beats >= 1.0:
        return "beating", beating
    if ratio >= 1.5 and parts_db[slow, -1] > parts_db[fast, -1]:
        return "two-stage", {
            "early_t60_s": float(-T60_LOG / s[fast].real),
            "late_t60_s": float(-T60_LOG / s[slow].real),
            "late_db": float(20.0 * np.log10(np.abs(c[slow]) / (np.abs(c.sum()) + 1e-30))),
        }
    if rise_db >= _VISIBLE_DB:
        return "beating", beating
    return "unclear", {}


def _swing_db(ratio: float) -> float:
    return float(20.0 * np.log10((1.0 + ratio) / max(1.0 - ratio, 0.01)))
