r"""The discrete-time Fourier series: the analysis and synthesis equations, array in, array out.

For a signal of period N,

.. math:: a_k = \frac1N \sum_{n=0}^{N-1} x[n]\, e^{-j 2\pi k n / N}, \qquad
          x[n] = \sum_{k=0}^{N-1} a_k\, e^{\,j 2\pi k n / N}

(Oppenheim & Willsky, *Signals and Systems*, chapter on Fourier series of discrete-time periodic signals).
"""

import numpy as np
import scipy.fft
from numpy.typing import ArrayLike, NDArray


def analyse(cycles: ArrayLike) -> NDArray[np.complex128]:
    """DTFS coefficients of whole cycles.

    Parameters
    ----------
    cycles : array, shape (..., N)
        One period of N samples along the last axis; real or complex, any unit.

    Returns
    -------
    array, shape (..., N), complex
        a_k for k = 0 ... N - 1, in the unit of `cycles`. Coefficients repeat every N, so a_{-k} stands at N - k.

    Raises
    ------
    ValueError
        If the last axis is empty or there is none.
    """
    array = np.asarray(cycles)
    _check(array, "cycles")
    return np.asarray(scipy.fft.fft(array, axis=-1, norm="forward"), dtype=np.complex128)


def synthesise(coefficients: ArrayLike) -> NDArray[np.complex128]:
    """One period from its DTFS coefficients, the inverse of :func:`analyse`.

    Parameters
    ----------
    coefficients : array, shape (..., N)
        a_k for k = 0 ... N - 1.

    Returns
    -------
    array, shape (..., N), complex
        x[n] for n = 0 ... N - 1. The imaginary part is rounding alone where a_{N-k} is the conjugate of a_k.

    Raises
    ------
    ValueError
        If the last axis is empty or there is none.
    """
    array = np.asarray(coefficients)
    _check(array, "coefficients")
    return np.asarray(scipy.fft.ifft(array, axis=-1, norm="forward"), dtype=np.complex128)


def coefficient(cycles: ArrayLike, k: int) -> NDArray[np.complex128]:
    """Sum the analysis equation as it is written, for a single coefficient a_k with any integer k.

    Parameters
    ----------
    cycles : array, shape (..., N)
    k : int
        Any integer, also negative or beyond N - 1: coefficients repeat every N.

    Returns
    -------
    array, shape (...), complex
    """
    array = np.asarray(cycles)
    _check(array, "cycles")
    points = array.shape[-1]
    turns = np.arange(points) * (k % points) % points
    return np.asarray(array @ np.exp(-2j * np.pi * turns / points) / points, dtype=np.complex128)


def _check(array: NDArray[np.generic], name: str) -> None:
    if array.ndim == 0 or array.shape[-1] == 0:
        raise ValueError(f"{name} has shape {array.shape}; the last axis must hold one period of at least one point")
