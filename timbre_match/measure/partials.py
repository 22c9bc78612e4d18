"""The partials of a ringing note taken one by one: level at the onset, decay, and what shape the decay has."""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from timbre_match.measure.decay import T60_LOG, Decays, exponentials, fit_decays, search_one
from timbre_match.measure.fading import fit_fading, gradients
from timbre_match.measure.records import DecayShape
from timbre_match.measure.subbands import Bands

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_DB_PER_NEPER = 20.0 / np.log(10.0)
_HEARD = 20.0
"""How many times the noise of one value the energy of a partial must be: noise alone, searched over all rates and
frequencies of a band, reaches this in one of some 10,000 bands (exp(-20) times a few hundred places)."""
_NEAR_DB, _OVER_NOISE_DB = 30.0, 10.0
"""A decay is described down to so far under its beginning, and so far above the noise."""
_ACCURACY = 1e-9
"""Less than so much of the strongest partial's power is noise, were it only that of 16 bits or of a lossy codec."""
_VISIBLE_DB = 1.0
_MISFIT = 0.1
"""Root-mean-square error relative to the partial beyond which a fit does not describe it: a little under 1 dB."""
_ROUNDS_FOR_START = 8
_PIECES = 24
_SURELY_MORE = 2.5
_OVERLAP_DB = 12.0
_FARTHEST_DB = 12.0
"""How far a decay is followed back from where it is first seen to the onset."""
_UNSURE_DB = 3.0


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Partials:
    """What was found in each band; arrays of shape (P,), meaningless where `heard` is false unless said otherwise.

    Attributes
    ----------
    heard : bool array
    found : bool array
        Whether there is a partial at all; one that dies too fast for its level to be known is found, but not heard.
        `off_hz` and `freq_se_hz` are right for these too.
    off_hz, freq_se_hz : frequency relative to the middle of the band, and its standard error
    amplitude, amplitude_se : peak amplitude at the onset, and its relative standard error
    phase_rad : phase of the cosine at the onset
    floor_power : square of the peak amplitude of the noise in the band (also where not heard)
    decay, t60_s, t60_se_s, early_t60_s, late_t60_s, late_db, beat_hz, beat_depth_db
        As in :class:`timbre_match.measure.records.Ringing`.
    """

    heard: NDArray[np.bool_]
    found: NDArray[np.bool_]
    off_hz: Real
    freq_se_hz: Real
    amplitude: Real
    amplitude_se: Real
    phase_rad: Real
    floor_power: Real
    decay: tuple[DecayShape | None, ...]
    t60_s: Real
    t60_se_s: Real
    early_t60_s: Real
    late_t60_s: Real
    late_db: Real
    beat_hz: Real
    beat_depth_db: Real


def noise_of_bands(bands: Bands, half_hz: float) -> Real:
    """Noise power per sample in each band, shape (P,).

    From the outer half of the band, away from the partial: the median of its spectrum, which other lines there do not
    move; under a smooth window, so that the partial's sudden beginning does not reach there.
    """
    count = len(bands.time_s)
    window = np.hanning(count + 2)[1:-1]
    power = np.abs(scipy.fft.fft(bands.y * window, axis=1)) ** 2 / float(window @ window)
    off_hz = np.abs(scipy.fft.fftfreq(count, float(bands.time_s[1] - bands.time_s[0])))
    outer = power[:, (off_hz > 0.5 * half_hz) & (off_hz < half_hz)]
    # The median of an exponential variable is ln 2 of its mean.
    noise = np.median(outer, axis=1) / np.log(2.0) * bands.noise_factor
    return np.maximum(noise, _ACCURACY * float(np.max(np.abs(bands.y)) ** 2) + 1e-30)


def measure_partials(bands: Bands, noise: Real, reach_hz: float, half_hz: float) -> Partials:
    """Fit the decay of the partial in each band.

    Parameters
    ----------
    bands : Bands
        Less the pitch glide that the partials share.
    noise : array, shape (P,)
        Of :func:`noise_of_bands`.
    reach_hz : float
        How far from the middle of its band a partial may lie.
    half_hz : float
        Half-width of the bands.
    """
    time_s, y = bands.time_s, bands.y
    each = noise / bands.noise_factor
    # What has died before it can be seen is the attack, or a partial that is gone too soon to be told from it.
    fastest_t60_s = 60.0 / _FARTHEST_DB * float(time_s[0])
    start = search_one(time_s, y, reach_hz, fastest_t60_s)
    one = fit_decays(time_s, y, start[:, None], reach_hz, fastest_t60_s)
    size = np.abs(y)
    found = (size**2).sum(axis=1) - one.rest > _HEARD * each
    found &= np.abs(one.s[:, 0].imag) < 2.0 * np.pi * 0.999 * reach_hz
    heard = found & (-T60_LOG / one.s[:, 0].real > 1.001 * fastest_t60_s)
    # Where something was there that is no partial, that is what a partial would have to stand out of.
    begins = (size[:, : max(1, len(time_s) // 20)] ** 2).max(axis=1) * 10.0 ** (_FARTHEST_DB / 10.0)
    rows = np.flatnonzero(heard)
    values = {name: np.full(len(y), np.nan) for name in _VALUES}
    values["off_hz"] = one.s[:, 0].imag / (2.0 * np.pi)
    values["freq_se_hz"] = _frequency_se(time_s, one, noise, bands.noise_factor)
    decay: list[DecayShape | None] = [None] * len(y)
    if len(rows):
        described, shapes = _described(
            time_s, y[rows], noise[rows], bands.noise_factor, one.chosen(rows), half_hz, fastest_t60_s
        )
        for name, value in described.items():
            values[name][rows] = value
        for row, shape in zip(rows, shapes, strict=True):
            decay[row] = shape
    return Partials(
        heard=heard,
        found=found,
        floor_power=np.where(heard, noise, np.maximum(noise, begins)),
        decay=tuple(decay),
        **values,
    )


_VALUES = (
    *("off_hz", "freq_se_hz", "amplitude", "amplitude_se", "phase_rad", "t60_s", "t60_se_s"),
    *("early_t60_s", "late_t60_s", "late_db", "beat_hz", "beat_depth_db"),
)


def _described(
    time_s: Real,
    y: Complex,
    noise: Real,
    noise_factor: float,
    one: Decays,
    half_hz: float,
    fastest_t60_s: float,
) -> tuple[dict[str, Real], list[DecayShape]]:
    size = np.abs(y)
    plain = fit_fading(time_s, size, noise, one, fastest_t60_s)
    # A partial that is nothing but one damped cosine in noise is best described by the fit to wave and phase together.
    exact = _misfit(time_s, size, 0.5 * one.rest, noise, noise_factor) == 0.0
    double = _fit_two(time_s, y, size, noise, one, plain, half_hz, fastest_t60_s)
    taken = _second_is_needed(time_s, plain, double, noise, noise_factor)
    values = {name: np.full(len(y), np.nan) for name in _VALUES[2:]}
    values["phase_rad"] = np.angle(one.c[:, 0])
    bad = _misfit(time_s, size, plain.rest, noise, noise_factor) > _MISFIT
    shapes: list[DecayShape] = ["unclear" if row else "plain" for row in bad]
    plain = Decays(
        s=np.where(exact[:, None], one.s, plain.s), c=np.where(exact[:, None], one.c, plain.c), rest=plain.rest
    )
    of_plain = _start_and_decrease_with_errors(time_s, size, noise, noise_factor, plain)
    for name, value in zip(_FOUR, of_plain, strict=True):
        values[name][:] = value
    rows = np.flatnonzero(taken)
    if len(rows):
        double = double.chosen(rows)
        still_bad = _misfit(time_s, size[rows], double.rest, noise[rows], noise_factor) > 2.0 * _MISFIT
        of_double = _start_and_decrease_with_errors(time_s, size[rows], noise[rows], noise_factor, double)
        unsure = of_double[1] > _UNSURE_DB / _DB_PER_NEPER
        for i, row in enumerate(rows):
            shape, details = _shape(time_s, double.s[i], double.c[i], float(noise[row]))
            # A decay that bends a little, and is neither, is still described by its plain fit.
            if unsure[i] or (shape == "unclear" and not bad[row]):
                continue
            shapes[row] = "unclear" if still_bad[i] else shape
            values_of = dict(zip(_FOUR, (value[i] for value in of_double), strict=True))
            for name, value in (values_of | ({} if still_bad[i] else details)).items():
                values[name][row] = value
    return values, shapes


_FOUR = ("amplitude", "amplitude_se", "t60_s", "t60_se_s")


def _fit_two(
    time_s: Real,
    y: Complex,
    size: Real,
    noise: Real,
    one: Decays,
    plain: Decays,
    half_hz: float,
    fastest_t60_s: float,
) -> Decays:
    """The better of two fits: from a second component in what the first leaves, and from a decay that bends."""
    second = search_one(time_s, y - one.at(time_s), 0.8 * half_hz, fastest_t60_s)
    start = np.stack([one.s[:, 0], second], axis=1)
    apart = fit_decays(time_s, y, start, half_hz, fastest_t60_s, rounds=_ROUNDS_FOR_START)
    rate = plain.s[:, 0].real
    bent_s = np.stack([1.8 * rate, 0.4 * rate + 0.01j], axis=1)
    bent_c = np.stack([np.abs(plain.c[:, 0]), 0.15 * np.abs(plain.c[:, 0])], axis=1)
    both = Decays(
        s=np.concatenate([apart.s, bent_s]),
        c=np.concatenate([apart.c, bent_c.astype(np.complex128)]),
        rest=np.concatenate([apart.rest, plain.rest]),
    )
    fits = fit_fading(time_s, np.tile(size, (2, 1)), np.tile(noise, 2), both, fastest_t60_s)
    count = len(y)
    return fits.chosen(np.where(fits.rest[count:] < fits.rest[:count], np.arange(count) + count, np.arange(count)))


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


def _second_is_needed(
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


def _misfit(time_s: Real, size: Real, rest: Real, noise: Real, noise_factor: float) -> Real:
    """Root-mean-square error of a fit relative to the partial, beyond what noise explains."""
    values = len(time_s) * noise_factor
    expected = 0.5 * noise * len(time_s)
    beyond = np.where(rest > expected * (1.0 + 4.0 * np.sqrt(2.0 / values)), rest - expected, 0.0)
    return np.asarray(np.sqrt(beyond / (size**2).sum(axis=1)))


def _covariance(time_s: Real, size: Real, noise: Real, noise_factor: float, fit: Decays) -> Real:
    """Covariance of the parameters of a fit, shape (P, q, q).

    That of white noise of the size that the fit leaves or, where the errors hang together in time far beyond that, the
    sandwich of White (1980, Econometrica 48:817) over blocks.
    """
    columns = gradients(time_s, noise, fit)
    parameters = columns.shape[1]
    scale = np.sqrt(np.einsum("pqn,pqn->pq", columns, columns)) + 1e-300
    columns = columns / scale[:, :, None]
    inverse = np.linalg.pinv(np.matmul(columns, columns.transpose(0, 2, 1)), hermitian=True, rcond=1e-7)
    error = size - np.sqrt(np.abs(fit.at(time_s)) ** 2 + noise[:, None])
    freedom = max(1.0, len(time_s) * noise_factor - parameters)
    white = (
        inverse
        * ((error**2).sum(axis=1) / noise_factor / (len(time_s) * freedom / (freedom + parameters)))[:, None, None]
    )
    # Blocks that hold equal shares of what the fit knows, not of time: most of a decay is silence.
    known = np.cumsum((columns**2).sum(axis=1), axis=1)
    block = np.minimum((known / known[:, -1:] * _PIECES).astype(np.int64), _PIECES - 1)
    score = columns * error[:, None, :]
    sums = np.zeros((len(size), _PIECES, parameters))
    row = np.arange(len(size))[:, None]
    for q in range(parameters):
        np.add.at(sums[:, :, q], (row, block), score[:, q])
    meat = np.matmul(sums.transpose(0, 2, 1), sums) * (_PIECES / (_PIECES - parameters))
    sandwich = inverse @ meat @ inverse
    larger = np.einsum("pqq->p", sandwich) > _SURELY_MORE * np.einsum("pqq->p", white)
    chosen = np.where(larger[:, None, None], sandwich, white)
    return np.asarray(chosen / (scale[:, :, None] * scale[:, None, :]))


def _start_and_decrease_with_errors(
    time_s: Real, size: Real, noise: Real, noise_factor: float, fit: Decays
) -> tuple[Real, Real, Real, Real]:
    """Amplitude at the onset, its relative standard error, T60 in seconds and its standard error, each shape (P,)."""
    covariance = _covariance(time_s, size, noise, noise_factor, fit)
    by_start, by_decrease = _sensitivities(fit)
    return (
        np.abs(fit.c.sum(axis=1)),
        np.sqrt(np.einsum("pq,pqr,pr->p", by_start, covariance, by_start)),
        _t60_s(fit.s, fit.c),
        np.sqrt(np.einsum("pq,pqr,pr->p", by_decrease, covariance, by_decrease)),
    )


def _t60_s(s: Complex, c: Complex) -> Real:
    """Three times the time in which the energy still to come falls by 20 dB."""
    if s.shape[1] == 1:
        return np.asarray(-T60_LOG / s[:, 0].real)
    pair = s[:, :, None] + s[:, None, :].conj()
    weight = c[:, :, None] * c[:, None, :].conj() / -pair
    whole = weight.sum(axis=(1, 2)).real
    low, high = np.zeros(len(s)), -T60_LOG / s.real.max(axis=1)
    for _ in range(30):
        middle = 0.5 * (low + high)
        left = (weight * np.exp(pair * middle[:, None, None])).sum(axis=(1, 2)).real
        above = left > 0.01 * whole
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.asarray(1.5 * (low + high))


def _sensitivities(fit: Decays) -> tuple[Real, Real]:
    """Derivatives of the logarithm of the amplitude at the onset and of T60 by the parameters, each of shape (P, q)."""
    partials, count = fit.s.shape
    parameters = 4 * count - 2
    s, c = np.tile(fit.s, (2 * parameters, 1, 1)), np.tile(fit.c, (2 * parameters, 1, 1))
    step = np.empty((parameters, partials))
    for q in range(parameters):
        i, which = (0, (0, 2)[q]) if q < 2 else ((q - 2) // 4 + 1, (q - 2) % 4)
        step[q] = 1e-4 if which < 2 else 1e-4 * np.abs(fit.s[:, i].real)
        for place, sign in ((2 * q, 1.0), (2 * q + 1, -1.0)):
            move = sign * step[q] * (1j if which in (1, 3) else 1.0)
            if which < 2:
                c[place, :, i] *= np.exp(move)
            else:
                s[place, :, i] += move
    start = np.log(np.abs(c.sum(axis=2)) + 1e-300)
    decrease = _t60_s(s.reshape(-1, count), c.reshape(-1, count)).reshape(start.shape)
    by_start, by_decrease = ((each[::2] - each[1::2]) / (2.0 * step) for each in (start, decrease))
    return by_start.T, by_decrease.T


def _frequency_se(time_s: Real, one: Decays, noise: Real, noise_factor: float) -> Real:
    """Standard error of a single component's frequency, Hz: its Cramer-Rao bound at the error that the fit leaves."""
    shape = np.exp(2.0 * one.s[:, 0].real[:, None] * time_s)
    weight = shape / shape.sum(axis=1, keepdims=True)
    spread = (weight * time_s**2).sum(axis=1) - (weight * time_s).sum(axis=1) ** 2
    left = np.maximum(one.rest / len(time_s), noise) / noise_factor
    power = np.abs(one.c[:, 0]) ** 2 * shape.sum(axis=1)
    return np.asarray(np.sqrt(0.5 * left / (power * spread)) / (2.0 * np.pi))


def _shape(time_s: Real, s: Complex, c: Complex, noise: float) -> tuple[DecayShape, dict[str, float]]:
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
