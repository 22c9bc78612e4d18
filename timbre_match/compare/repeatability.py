"""How much a harmonic moves from take to take: the prior figures, and how a few takes are weighed against them.

Levels in dB, frequencies in Hz, tilts in dB per octave. A scatter is a scale per take: the difference of the means of
`m` and `n` takes has the variance scale^2 (1/m + 1/n).
"""

import csv
import functools
import math
from dataclasses import dataclass
from importlib import resources

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import optimize, special, stats

Array = NDArray[np.float64]

GROUPS: dict[str, tuple[str, ...]] = {
    "bowed strings": ("double bass",),
    "reeds": ("bassoon", "oboe", "saxophone"),
    "flute": ("flute",),
    "brass": ("trombone", "french horn"),
    "all instruments": ("bassoon", "double bass", "flute", "french horn", "oboe", "saxophone", "trombone"),
}
"""Instruments of the tables that speak for each group."""

_POOLED = "all instruments"
_GROUP_OF_WORD = {
    "violin": "bowed strings",
    "viola": "bowed strings",
    "cello": "bowed strings",
    "violoncello": "bowed strings",
    "double bass": "bowed strings",
    "contrabass": "bowed strings",
    "viol": "bowed strings",
    "gamba": "bowed strings",
    "bowed": "bowed strings",
    "oboe": "reeds",
    "cor anglais": "reeds",
    "bassoon": "reeds",
    "contrabassoon": "reeds",
    "clarinet": "reeds",
    "saxophone": "reeds",
    "flute": "flute",
    "piccolo": "flute",
    "recorder": "flute",
    "trumpet": "brass",
    "cornet": "brass",
    "trombone": "brass",
    "horn": "brass",
    "french horn": "brass",
    "tuba": "brass",
    "brass": "brass",
}

_TAIL_RANGE = (3.0, 30.0)
_MAD_TO_SD = 1.4826


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class ScatterPrior:
    """What is known of the scatter before any take is heard.

    Attributes
    ----------
    group : str
        Which instruments of the tables speak (a key of :data:`GROUPS`).
    centre_hz, scale_db : arrays, shape (n_bands,)
        Band centres and the scale per take of a single harmonic: the scale of a Student t distribution with
        `tail_df` degrees of freedom that has the robust standard deviation of the table.
    tail_df : float
        Degrees of freedom that give the table's ratio of plain to robust standard deviation.
    take_tilt_db, note_tilt_db : float
        Standard deviation per take of the tilt common to a take and of each note's own tilt, dB per octave.
    wobble_db : float
        Standard deviation per take of the smooth wobble that all notes of a take share, dB.
    """

    group: str
    centre_hz: Array
    scale_db: Array
    tail_df: float
    take_tilt_db: float
    note_tilt_db: float
    wobble_db: float

    def __post_init__(self) -> None:
        for name in ("centre_hz", "scale_db"):
            array: Array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)

    def scale_at(self, freq_hz: ArrayLike) -> Array:
        """Scale per take in dB at `freq_hz`, interpolated over log frequency; the end bands hold beyond the table."""
        octave = np.log2(np.asarray(freq_hz, dtype=np.float64))
        return np.asarray(np.exp(np.interp(octave, np.log2(self.centre_hz), np.log(self.scale_db))))


def group_of(family: str) -> str:
    """Group of the tables that stands nearest to an instrument family; ``"all instruments"`` where none does."""
    words = family.lower().replace("-", " ").replace("_", " ").strip()
    known = [name for name in _GROUP_OF_WORD if f" {name} " in f" {words} "]
    return _GROUP_OF_WORD[max(known, key=len)] if known else _POOLED


@functools.cache
def scatter_prior(family: str) -> ScatterPrior:
    """Prior scatter of an instrument family, from the package's tables (see ``compare/data/README.md``)."""
    group = group_of(family)
    members = GROUPS[group]
    bands = [row for row in _table("repeatability.csv") if row["instrument"] in members]
    structure = [row for row in _table("take_structure.csv") if row["instrument"] in members]
    edges = sorted({(float(row["band_low_hz"]), float(row["band_high_hz"])) for row in bands})
    robust = np.array([_pooled_sd(bands, edge, "sd_per_take_db_robust") for edge in edges])
    plain = np.array([_pooled_sd(bands, edge, "sd_per_take_db_rms") for edge in edges])
    tail_df = _tail_df(float(np.median(plain / robust)))
    pairs = np.array([float(row["take_pairs"]) for row in structure])

    def per_take(column: str) -> float:
        values = np.array([float(row[column]) for row in structure])
        return math.sqrt(float(np.average(values**2, weights=pairs)))

    # The wobble's table gives the middle and the worst tenth of the takes; a normal scale between the two:
    wobble = math.hypot(
        per_take("wobble_common_to_take_sd_db_median"), per_take("wobble_common_to_take_sd_db_p90") / 1.645
    )
    return ScatterPrior(
        group=group,
        centre_hz=np.array([math.sqrt(max(low, high / 2.0) * high) for low, high in edges]),
        scale_db=robust / _robust_sd_of_t(tail_df),
        tail_df=tail_df,
        take_tilt_db=per_take("tilt_common_to_take_sd_db_per_octave"),
        note_tilt_db=per_take("tilt_per_note_sd_db_per_octave"),
        wobble_db=wobble,
    )


def moderated_variance(variance: ArrayLike, df: ArrayLike, *, prior_df: float, prior_variance: float) -> Array:
    """Variances of few observations shrunk towards a common prior: (d0 s0^2 + d s^2) / (d0 + d).

    Parameters
    ----------
    variance, df : arrays, same shape
        Sample variances s^2 and their degrees of freedom d; where d is 0 the prior alone speaks.
    prior_df, prior_variance : float
        d0 (may be infinite) and s0^2, for instance of :func:`fit_variance_prior`.

    Notes
    -----
    Smyth, G. K. (2004), Linear models and empirical Bayes methods for assessing differential expression in microarray
    experiments, *Statistical Applications in Genetics and Molecular Biology* 3(1).
    """
    s2, d = np.broadcast_arrays(np.asarray(variance, dtype=np.float64), np.asarray(df, dtype=np.float64))
    if math.isinf(prior_df):
        return np.full(s2.shape, prior_variance)
    return np.asarray((prior_df * prior_variance + d * np.where(d > 0, s2, 0.0)) / (prior_df + d))


def fit_variance_prior(variance: ArrayLike, df: ArrayLike) -> tuple[float, float]:
    """Prior degrees of freedom d0 and prior variance s0^2 that make s^2 / s0^2 an F variable with (d, d0).

    Matches the mean and the variance of log s^2, which are digamma and trigamma functions of the degrees of freedom.

    Parameters
    ----------
    variance, df : arrays, same shape, at least two values
        Sample variances (> 0) and their degrees of freedom (> 0).

    Returns
    -------
    prior_df, prior_variance : float
        `prior_df` is infinite where the variances scatter no more than sampling makes them; `prior_variance` is then
        their mean.

    Raises
    ------
    ValueError
        If there are fewer than two variances, or one of them is not positive.

    Notes
    -----
    Smyth (2004), section 6.2.
    """
    s2, d = np.broadcast_arrays(np.asarray(variance, dtype=np.float64), np.asarray(df, dtype=np.float64))
    if s2.size < 2 or np.any(s2 <= 0) or np.any(d <= 0):
        raise ValueError("at least two positive variances with positive degrees of freedom are needed")
    e = np.log(s2) - special.digamma(d / 2.0) + np.log(d / 2.0)
    mean = float(np.mean(e))
    excess = float(np.var(e, ddof=1) - np.mean(special.polygamma(1, d / 2.0)))
    if excess <= 0:
        return math.inf, float(np.mean(s2))
    half = _trigamma_inverse(excess)
    return 2.0 * half, math.exp(mean + float(special.digamma(half)) - math.log(half))


def _trigamma_inverse(value: float) -> float:
    """Argument at which the trigamma function, which falls from infinity to 0, takes `value` > 0."""

    def gap(log_argument: float) -> float:
        return math.log(float(special.polygamma(1, math.exp(log_argument)))) - math.log(value)

    return math.exp(float(optimize.brentq(gap, -20.0, 25.0, xtol=1e-14)))


def _robust_sd_of_t(df: float) -> float:
    """1.4826 times the median absolute deviation of Student's t with unit scale."""
    return _MAD_TO_SD * float(stats.t.ppf(0.75, df))


def _tail_df(ratio: float) -> float:
    """Degrees of freedom of the t distribution whose plain standard deviation is `ratio` times its robust one."""

    def gap(df: float) -> float:
        return math.sqrt(df / (df - 2.0)) / _robust_sd_of_t(df) - ratio

    low, high = _TAIL_RANGE
    if gap(low) <= 0:
        return low
    return high if gap(high) >= 0 else float(optimize.brentq(gap, low, high))


def _pooled_sd(rows: list[dict[str, str]], edge: tuple[float, float], column: str) -> float:
    inside = [row for row in rows if (float(row["band_low_hz"]), float(row["band_high_hz"])) == edge]
    weights = [float(row["n_overtone_pairs"]) for row in inside]
    return math.sqrt(float(np.average([float(row[column]) ** 2 for row in inside], weights=weights)))


@functools.cache
def _table(name: str) -> tuple[dict[str, str], ...]:
    text = resources.files("timbre_match.compare").joinpath("data", name).read_text(encoding="utf-8")
    return tuple(csv.DictReader(text.splitlines()))
