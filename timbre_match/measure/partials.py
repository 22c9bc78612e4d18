"""The partials of a ringing note taken one by one: level at the onset, decay, and what shape the decay has."""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from timbre_match.measure.decay import T60_LOG, Decays, fit_decays, search_one
from timbre_match.measure.decay_errors import frequency_se, start_and_decrease
from timbre_match.measure.decay_shape import misfit, second_is_needed, shape_of
from timbre_match.measure.fading import fit_fading
from timbre_match.measure.records import DecayShape
from timbre_match.measure.subbands import Bands

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_DB_PER_NEPER = 20.0 / np.log(10.0)
_HEARD = 20.0
"""How many times the noise of one value the energy of a partial must be: noise alone, searched over all rates and
frequencies of a band, reaches this in one of some 10,000 bands (exp(-20) times a few hundred places)."""
_FEWEST_VALUES = 40
_ACCURACY = 1e-9
"""Less than so much of the strongest partial's power is noise, were it only that of 16 bits or of a lossy codec."""
_MISFIT = 0.1
"""Root-mean-square error relative to the partial beyond which a fit does not describe it: a little under 1 dB."""
_ROUNDS_FOR_START = 8
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
    # Few values tell little: the neighbouring bands' are taken in too.
    beside = -(-_FEWEST_VALUES // (2 * max(1, outer.shape[1])))
    padded = np.pad(outer, ((beside, beside), (0, 0)), mode="symmetric" if beside <= len(outer) else "edge")
    around = np.lib.stride_tricks.sliding_window_view(padded, 2 * beside + 1, axis=0)
    # The median of an exponential variable is ln 2 of its mean.
    noise = np.median(around, axis=(1, 2)) / np.log(2.0) * bands.noise_factor
    return np.asarray(np.maximum(noise, _ACCURACY * float(np.max(np.abs(bands.y)) ** 2) + 1e-30))


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
    explained = size**2 - np.abs(y - one.at(time_s)) ** 2
    found = explained.sum(axis=1) > _HEARD * each
    found &= np.abs(one.s[:, 0].imag) < 2.0 * np.pi * 0.999 * reach_hz
    heard = found & (-T60_LOG / one.s[:, 0].real > 1.001 * fastest_t60_s)
    # Not by what the attack may have left in the first moments: a partial is still there afterwards.
    later = np.searchsorted(time_s, time_s[0] + 1.0 / half_hz)
    heard &= explained[:, later:].sum(axis=1) > _HEARD * each
    # Where something was there that is no partial, that is what a partial would have to stand out of.
    begins = (size[:, : max(1, len(time_s) // 20)] ** 2).max(axis=1) * 10.0 ** (_FARTHEST_DB / 10.0)
    rows = np.flatnonzero(heard)
    values = {name: np.full(len(y), np.nan) for name in _VALUES}
    values["off_hz"] = one.s[:, 0].imag / (2.0 * np.pi)
    values["freq_se_hz"] = frequency_se(time_s, one, noise, bands.noise_factor)
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
    exact = misfit(time_s, size, 0.5 * one.rest, noise, noise_factor) == 0.0
    double = _fit_two(time_s, y, size, noise, one, plain, half_hz, fastest_t60_s)
    taken = second_is_needed(time_s, plain, double, noise, noise_factor)
    values = {name: np.full(len(y), np.nan) for name in _VALUES[2:]}
    values["phase_rad"] = np.angle(one.c[:, 0])
    bad = misfit(time_s, size, plain.rest, noise, noise_factor) > _MISFIT
    shapes: list[DecayShape] = ["unclear" if row else "plain" for row in bad]
    plain = Decays(
        s=np.where(exact[:, None], one.s, plain.s), c=np.where(exact[:, None], one.c, plain.c), rest=plain.rest
    )
    of_plain = start_and_decrease(time_s, size, noise, noise_factor, plain)
    for name, value in zip(_FOUR, of_plain, strict=True):
        values[name][:] = value
    rows = np.flatnonzero(taken)
    if len(rows):
        double = double.chosen(rows)
        still_bad = misfit(time_s, size[rows], double.rest, noise[rows], noise_factor) > 2.0 * _MISFIT
        of_double = start_and_decrease(time_s, size[rows], noise[rows], noise_factor, double)
        unsure = of_double[1] > _UNSURE_DB / _DB_PER_NEPER
        for i, row in enumerate(rows):
            shape, details = shape_of(time_s, double.s[i], double.c[i], float(noise[row]))
            if unsure[i] or (shape == "unclear" and not bad[row]):
                # A decay that bends a little, and is neither, is still described by its plain fit, though no better
                # than the two fits agree.
                amplitude, _, t60_s, _ = (value[i] for value in of_double)
                off = 0.0 if unsure[i] else np.log(amplitude / values["amplitude"][row])
                values["amplitude_se"][row] = np.hypot(values["amplitude_se"][row], off)
                values["t60_se_s"][row] = np.hypot(values["t60_se_s"][row], t60_s - values["t60_s"][row])
                shapes[row] = "unclear" if unsure[i] else shapes[row]
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
