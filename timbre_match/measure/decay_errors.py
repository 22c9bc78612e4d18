"""What a fitted decay says, level at the onset and T60, and how well it is known."""

import numpy as np
from numpy.typing import NDArray

from timbre_match.measure.decay import T60_LOG, Decays
from timbre_match.measure.fading import gradients

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_PIECES = 24
_SURELY_MORE = 2.5


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


def start_and_decrease(
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


def frequency_se(time_s: Real, one: Decays, noise: Real, noise_factor: float) -> Real:
    """Standard error of a single component's frequency, Hz: its Cramer-Rao bound at the error that the fit leaves."""
    shape = np.exp(2.0 * one.s[:, 0].real[:, None] * time_s)
    weight = shape / shape.sum(axis=1, keepdims=True)
    spread = (weight * time_s**2).sum(axis=1) - (weight * time_s).sum(axis=1) ** 2
    left = np.maximum(one.rest / len(time_s), noise) / noise_factor
    power = np.abs(one.c[:, 0]) ** 2 * shape.sum(axis=1)
    return np.asarray(np.sqrt(0.5 * left / (power * spread)) / (2.0 * np.pi))
