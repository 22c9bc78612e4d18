"""Samples, rate, channel and SHA-256 of a recording, and what is wrong with them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Recording:
    """One channel of a recording.

    Attributes
    ----------
    file : str
        File name without folder.
    sha256 : str
        SHA-256 of the file's bytes, hex.
    samples : float64 array, shape (n,)
        Full scale is 1; read-only.
    sample_rate_hz : int
    channel, channel_count : int
        The chosen channel (counted from 1) of how many.
    warnings : tuple of str
        What would spoil a measurement, each a plain sentence.
    """

    file: str
    sha256: str
    samples: NDArray[np.float64]
    sample_rate_hz: int
    channel: int
    channel_count: int
    warnings: tuple[str, ...]
