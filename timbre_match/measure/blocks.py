"""Cycles to the DTFS coefficients of blocks: harmonics on every P-th bin, the floor on the bins between them."""

from dataclasses import dataclass

import numpy as np
import scipy.fft
import scipy.signal
from numpy.typing import NDArray

_BLOCK_S = 0.1
_FEWEST_FOR_HANN = 6
_DIP_DB = 6.0
_HANN_INDEPENDENT = 0.51
"""1 / (1 + 2 (2/3)^2 + 2 (1/6)^2): a Hann window's bins are correlated by 2/3 and 1/6 (Harris 1978)."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Blocks:
    """DTFS coefficients of overlapping blocks of P cycles each.

    Attributes
    ----------
    harmonics : complex array, shape (blocks, harmonics)
        c_k of every block for k = 1, 2, ..., in the unit of the cycles.
    floor_power : float64 array, shape (harmonics,)
        Noise power within a harmonic's own bin, from the bins between the harmonics.
    floor_freedom : float
        Degrees of freedom (complex values averaged) behind each value of `floor_power`.
    linear_gain, square_gain : float
        Variance factors of a mean over the blocks: of a value linear in the noise, relative to one block, and of the
        noise's own power. Both are 1 / blocks where blocks do not overlap.
    """

    harmonics: NDArray[np.complex128]
    floor_power: NDArray[np.float64]
    floor_freedom: float
    linear_gain: float
    square_gain: float


def analyse_blocks(cycles: NDArray[np.floating], count: int, f0_hz: float) -> Blocks:
    """Coefficients of blocks of cycles by the analysis equation.

    Blocks last about 0.1 s under a Hann window and overlap by half; a note of few cycles is cut into rectangular
    blocks. A bow change inside the note (blocks more than 6 dB under the usual power) is left out.

    Parameters
    ----------
    cycles : array, shape (cycles, points)
        The transform keeps their precision.
    count : int
        Number of harmonics wanted, below points / 2.
    f0_hz : float

    Returns
    -------
    Blocks
    """
    per_block, window = _block_shape(len(cycles), cycles.shape[1], f0_hz)
    length = len(window)
    hop = (max(1, per_block // 2) if per_block >= _FEWEST_FOR_HANN else per_block) * cycles.shape[1]
    frames = np.lib.stride_tricks.sliding_window_view(cycles.ravel(), length)[::hop]
    weight = (window / window.sum()).astype(cycles.dtype)
    spectra = scipy.fft.rfft(frames * weight, axis=1)[:, : (count + 1) * per_block]
    harmonics = spectra[:, per_block : count * per_block + 1 : per_block]
    total = (harmonics.real**2 + harmonics.imag**2).sum(axis=1)
    usual = total > np.median(total) * 10.0 ** (-_DIP_DB / 10.0)
    if usual.mean() < 0.75:
        usual[:] = True
    blocks = int(usual.sum())
    linear_gain, square_gain = _overlap_gains(window, hop, blocks)
    parts = spectra.view(cycles.dtype)
    each = (usual / blocks).astype(cycles.dtype)
    power = np.einsum("b,bk,bk->k", each, parts, parts).reshape(-1, 2).sum(axis=1, dtype=np.float64)
    floor_power, freedom = _floor(power, per_block, count, 1.0 / square_gain)
    return Blocks(
        harmonics=harmonics[usual].astype(np.complex128),
        floor_power=floor_power,
        floor_freedom=freedom,
        linear_gain=linear_gain,
        square_gain=square_gain,
    )


def _block_shape(cycles: int, points: int, f0_hz: float) -> tuple[int, NDArray[np.float64]]:
    """Cycles per block and the window over it."""
    wanted = max(_FEWEST_FOR_HANN, 2 * round(_BLOCK_S * f0_hz / 2))
    # Three overlapping blocks at the least, so that scatter within the note can be seen.
    per_block = min(wanted, 2 * (cycles // 4))
    if per_block >= _FEWEST_FOR_HANN:
        return per_block, np.asarray(scipy.signal.get_window("hann", per_block * points))
    per_block = max(2, min(4, cycles // 2))
    return per_block, np.ones(per_block * points)


def _overlap_gains(window: NDArray[np.float64], hop: int, blocks: int) -> tuple[float, float]:
    """Variance factors for the mean over overlapping blocks in white noise (Welch 1967, IEEE Trans. AU-15:70)."""
    energy = float(np.sum(window**2))
    linear, square = 0.0, 0.0
    for lag in range(blocks):
        shift = lag * hop
        overlap = float(np.sum(window[shift:] * window[: len(window) - shift])) / energy if shift < len(window) else 0.0
        if overlap == 0.0:
            break
        pairs = blocks if lag == 0 else 2 * (blocks - lag)
        linear += pairs * overlap
        square += pairs * overlap**2
    return linear / blocks**2, square / blocks**2


def _floor(power: NDArray[np.float64], per_block: int, count: int, shape: float) -> tuple[NDArray[np.float64], float]:
    """Noise power per bin around each harmonic, and the degrees of freedom behind it.

    The median over the bins of the gaps on both sides is not moved by a sympathetic string or a hum in one of them; its
    bias against the mean is that of a gamma variable (Wilson & Hilferty 1931, PNAS 17:684).
    """
    guard = max(1, per_block // 4) if per_block < _FEWEST_FOR_HANN else max(2, per_block // 4)
    offsets = np.arange(guard, per_block - guard + 1)
    gaps = power[: (count + 1) * per_block].reshape(count + 1, per_block)[:, offsets]
    both = np.concatenate([gaps[:-1], gaps[1:]], axis=1)
    # The gap below the fundamental holds rumble that is no noise of the note.
    both[0, : len(offsets)] = gaps[1]
    # The median of two is their mean, which needs no correction.
    bias = (1.0 - 1.0 / (9.0 * shape)) ** 3 if both.shape[1] > 2 else 1.0
    # A median knows as much as 2 / pi of the values in a mean; neighbouring bins under a Hann window say much the same.
    independent = 2.0 / np.pi * (_HANN_INDEPENDENT if per_block >= _FEWEST_FOR_HANN else 1.0)
    return np.median(both, axis=1) / bias, max(1.0, shape * both.shape[1] * independent)
