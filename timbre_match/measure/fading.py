r"""How the level of a partial dies away: one or two damped components, fitted to its envelope alone.

The size of a partial in its band is modelled as

.. math:: |y(t)| \approx \sqrt{|m(t)|^2 + \sigma^2}, \qquad m(t) = \sum_i c_i e^{s_i t},

with the power sigma^2 of the noise in the model. In white noise the radial part of the error holds all that can be
known of amplitude and decay of a single component, and its phase part all of phase and frequency (the Fisher
information of a damped exponential is block-diagonal: Yao & Pandit 1995, IEEE Trans. Signal Process. 43:878), so
nothing is lost by leaving the phase out; and a partial whose pitch wavers a little, as those of real strings do, is no
longer taken for two.
"""

import numpy as np
from numpy.typing import NDArray

from timbre_match.measure.decay import SLOWEST_T60_S, T60_LOG, Decays, exponentials

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]
Single = NDArray[np.float32]

_ROUNDS = 16
_DONE = 1e-3
_STEEPEST = 3.0
"""Nepers by which one step may change an amplitude."""


def fit_fading(time_s: Real, size: Real, noise: Real, start: Decays, fastest_t60_s: float) -> Decays:
    """Fit the sizes of P partials by components that begin at `start` (Levenberg-Marquardt).

    Parameters
    ----------
    time_s : array, shape (n,)
    size : array, shape (P, n)
        |y|, 0 or more.
    noise : array, shape (P,)
        Noise power per sample of y.
    start : Decays
        R components for each.
    fastest_t60_s : float
        The shortest time in which a component may fall by 60 dB.

    Returns
    -------
    Decays
        Frequencies and phases mean something only between the components of one partial; `rest` is the sum of squares
        of the sizes' errors.
    """
    s, c = start.s.copy(), np.asarray(start.c + 1e-30)
    rest, slope, bend = _equations(time_s, size, noise, s, c)
    damping = np.full(len(s), 1e-2)
    active = np.arange(len(s))
    for _ in range(_ROUNDS):
        if not len(active):
            break
        system = bend[active].copy()
        index = np.arange(system.shape[1])
        system[:, index, index] *= 1.0 + damping[active, None]
        system[:, index, index] += 1e-12 * np.einsum("pqq->p", system)[:, None] + 1e-300
        move = np.asarray(np.linalg.solve(system, slope[active][..., None])[..., 0], dtype=np.float64)
        new_s, new_c = _moved(s[active], c[active], move, T60_LOG / fastest_t60_s)
        new_rest, new_slope, new_bend = _equations(time_s, size[active], noise[active], new_s, new_c)
        better = new_rest <= rest[active]
        gain = np.where(better, rest[active] - new_rest, np.inf)
        rows = active[better]
        s[rows], c[rows], rest[rows] = new_s[better], new_c[better], new_rest[better]
        slope[rows], bend[rows] = new_slope[better], new_bend[better]
        damping[active] = np.where(better, damping[active] / 6.0, damping[active] * 6.0)
        active = active[~((gain <= _DONE * rest[active]) | (damping[active] > 1e7))]
    return Decays(s=s, c=c, rest=rest)


def gradients(time_s: Real, noise: Real, fit: Decays) -> Real:
    """Derivatives of the sizes by the parameters, shape (P, 2 + 4 (R - 1), n).

    The parameters are ln |c_1| and Re s_1, then for every further component Re and Im of ln c_i and of s_i.
    """
    return _gradients(time_s, noise, fit.s, fit.c)[1].astype(np.float64)


def _gradients(time_s: Real, noise: Real, s: Complex, c: Complex) -> tuple[Single, Single]:
    """Sizes and their derivatives, in single precision: the fit needs no more, and it takes half the time."""
    parts = exponentials(s, time_s).astype(np.complex64)
    parts *= c[:, :, None].astype(np.complex64)
    m = parts.sum(axis=1)
    size = np.sqrt(m.real**2 + m.imag**2 + noise[:, None].astype(np.float32))
    parts *= (m.conj() / size)[:, None]
    time = time_s.astype(np.float32)
    columns = np.empty((len(s), 4 * s.shape[1] - 2, len(time)), dtype=np.float32)
    columns[:, 0] = parts[:, 0].real
    np.multiply(columns[:, 0], time, out=columns[:, 1])
    for i in range(1, s.shape[1]):
        real, imag, real_time, imag_time = (columns[:, 4 * i - 2 + place] for place in range(4))
        real[:] = parts[:, i].real
        np.negative(parts[:, i].imag, out=imag)
        np.multiply(real, time, out=real_time)
        np.multiply(imag, time, out=imag_time)
    return size, columns


def _equations(time_s: Real, size: Real, noise: Real, s: Complex, c: Complex) -> tuple[Real, Real, Real]:
    model, columns = _gradients(time_s, noise, s, c)
    error = size - model
    single = error.astype(np.float32)
    return (
        np.einsum("pn,pn->p", error, error),
        np.matmul(columns, single[..., None])[..., 0].astype(np.float64),
        np.matmul(columns, columns.transpose(0, 2, 1)).astype(np.float64),
    )


def _moved(s: Complex, c: Complex, move: Real, fastest: float) -> tuple[Complex, Complex]:
    log_c = np.zeros_like(c)
    change = np.zeros_like(s)
    log_c[:, 0], change[:, 0] = move[:, 0], move[:, 1]
    for i in range(1, s.shape[1]):
        first = 4 * i - 2
        log_c[:, i] = move[:, first] + 1j * move[:, first + 1]
        change[:, i] = move[:, first + 2] + 1j * move[:, first + 3]
    log_c = np.clip(log_c.real, -_STEEPEST, _STEEPEST) + 1j * log_c.imag
    new = s + change
    rate = np.clip(-new.real, T60_LOG / SLOWEST_T60_S, fastest)
    return -rate + 1j * new.imag, c * np.exp(log_c)
