"""Verdicts: different, alike within the margin, or not settled yet.

Differences and margins in dB; p-values are two-sided unless said otherwise.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

Array = NDArray[np.float64]

FALSE_DISCOVERY_RATE = 0.05
EQUIVALENCE_LEVEL = 0.05
MOST_TAKES = 20
"""More takes a side than this are not practicable."""


def false_discovery_threshold(p: ArrayLike, rate: float = FALSE_DISCOVERY_RATE) -> float:
    """Largest p-value that counts as a discovery; 0 where none does.

    With p_(1) <= ... <= p_(m), the largest p_(i) that is at most i rate / m (Benjamini & Hochberg 1995, Controlling the
    false discovery rate, *J. R. Stat. Soc. B* 57).
    """
    ordered = np.sort(np.asarray(p, dtype=np.float64))
    below = np.flatnonzero(ordered <= rate * np.arange(1, ordered.size + 1) / ordered.size)
    return float(ordered[below[-1]]) if below.size else 0.0


def equivalence_p(difference_db: ArrayLike, se_db: ArrayLike, margin_db: float, df: ArrayLike = np.inf) -> Array:
    """p-value of two one-sided tests that the difference lies within +-margin: the larger of the two.

    Schuirmann, D. J. (1987), A comparison of the two one-sided tests procedure and the power approach, *Journal of
    Pharmacokinetics and Biopharmaceutics* 15. `df` are the degrees of freedom of `se_db`; infinite ones give the normal
    distribution.
    """
    d, se = np.asarray(difference_db, dtype=np.float64), np.asarray(se_db, dtype=np.float64)
    freedom = np.asarray(df, dtype=np.float64)
    return np.asarray(stats.t.sf((margin_db - np.abs(d)) / se, freedom))


def difference_p(difference_db: ArrayLike, se_db: ArrayLike) -> Array:
    """Two-sided p-value of "no difference" for a normal estimate with standard error `se_db`."""
    z = np.asarray(difference_db, dtype=np.float64) / np.asarray(se_db, dtype=np.float64)
    return np.asarray(2.0 * stats.norm.sf(np.abs(z)))


def takes_needed(
    difference_db: Array, playing_variance: Array, own_variance: Array, shared_variance: Array, *,
    takes: float, margin_db: float, threshold: float,
) -> NDArray[np.int64]:  # fmt: skip
    """Fewest takes a side that would settle each harmonic if its estimate stayed; 0 where 20 would not.

    Parameters
    ----------
    difference_db : array, shape (n,)
    playing_variance : array, shape (n,)
        Variance of the harmonic's scatter at present, dB^2; it falls as one over the takes.
    own_variance : array, shape (n,)
        Prior variance of the harmonic's own deviation, dB^2.
    shared_variance : array, shape (n,)
        What body curve, gains and tilts add at present, dB^2; taken to fall as one over the takes.
    takes : float
        Takes a side at present (harmonic mean of the two sides).
    margin_db : float
    threshold : float
        p-value below which a difference counts.
    """
    needed = np.zeros(difference_db.size, dtype=np.int64)
    limit = float(stats.norm.isf(threshold / 2.0))
    one_sided = float(stats.norm.isf(EQUIVALENCE_LEVEL))
    for count in range(MOST_TAKES, int(np.ceil(takes)), -1):
        scatter = playing_variance * takes / count
        sd = np.sqrt(own_variance * scatter / (own_variance + scatter) + shared_variance * takes / count)
        settles = (np.abs(difference_db) > limit * sd) | (np.abs(difference_db) + one_sided * sd < margin_db)
        needed[settles] = count
    return needed
