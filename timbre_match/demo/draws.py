"""Seeded random draws that are the same with every library version.

NumPy promises a stable stream for a bit generator but not for the distributions on top of it. The demo's recordings
are rendered again by a test, perhaps years later, so the distributions are made here from the raw bits.
"""

import numpy as np
from numpy.typing import NDArray


class Draws:
    """A stream of random numbers that belongs to one key.

    Parameters
    ----------
    key : int
        One or more whole numbers >= 0, such as seed, stage and take. Different keys give independent streams
        (NumPy's ``SeedSequence``).
    """

    def __init__(self, *key: int) -> None:
        self._bits = np.random.PCG64(np.random.SeedSequence(key))

    def uniform(self, size: int) -> NDArray[np.float64]:
        """`size` numbers evenly spread over [0, 1), 53 bits each; shape (size,)."""
        raw = np.asarray(self._bits.random_raw(size), dtype=np.uint64)
        return np.asarray((raw >> np.uint64(11)).astype(np.float64) * 2.0**-53)

    def normal(self, size: int) -> NDArray[np.float64]:
        """`size` standard normal numbers (Box & Muller 1958, Ann. Math. Stat. 29:610); shape (size,)."""
        pairs = (size + 1) // 2
        radius = np.sqrt(-2.0 * np.log1p(-self.uniform(pairs)))
        angle = 2.0 * np.pi * self.uniform(pairs)
        return np.concatenate([radius * np.cos(angle), radius * np.sin(angle)])[:size]

    def student_t(self, size: int, degrees: int) -> NDArray[np.float64]:
        """`size` numbers after Student's t with whole `degrees` of freedom, by its definition; shape (size,)."""
        numerator = self.normal(size)
        chi_square = np.sum(self.normal(size * degrees).reshape(degrees, size) ** 2, axis=0)
        return np.asarray(numerator / np.sqrt(chi_square / degrees))

    def between(self, low: float, high: float) -> float:
        """One number evenly spread over [low, high)."""
        return low + (high - low) * float(self.uniform(1)[0])
