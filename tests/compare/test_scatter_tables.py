"""Tables of scatter from simulated takes whose tilts, wobble and scatter are known.

The draws share nothing with the estimators: the wobble is a smooth curve with no regard to bands, and the truth of the
robust figures comes from integrals over Student's t. Bounds are three standard errors, whose formula stands beside
each; those of variance components are the textbook ones of normal moments (a squared normal variable with variance v
has the variance 2 v^2).
"""

import csv
import dataclasses
import math
from collections.abc import Callable
from importlib import resources
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import integrate, interpolate, optimize, stats

from tests.compare.simulated import base_levels, profile, recipe
from timbre_match.compare import repeatability
from timbre_match.compare.scatter_tables import (
    LEAST_HARMONICS,
    BandScatter,
    TakeStructure,
    repeatability_rows,
    structure_rows,
    table_text,
)
from timbre_match.errors import ComparisonError
from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.units import note_to_hz

Array = NDArray[np.float64]

NOTES = ("G3", "A3", "B3", "C#4", "D4", "E4", "F#4", "A4", "B4", "C#5", "D5", "E5")
HIGH_NOTES = ("C6", "C#6", "D6", "D#6", "E6")
LOWEST_OCTAVE, HIGHEST_OCTAVE = -1.5, 3.0
"""Where the takes' notes share enough to show a wobble, over 1 kHz: below 354 Hz no half octave holds five of them."""


@dataclasses.dataclass(frozen=True, kw_only=True)
class Truth:
    """Standard deviations per take in dB or dB per octave; scatter is Student t with `df` degrees of freedom."""

    take_tilt: float = 0.0
    note_tilt: float = 0.0
    wobble: float = 0.0
    scale: float = 1.0
    df: float = 5.0
    notes: tuple[str, ...] = NOTES

    @property
    def scatter_variance(self) -> float:
        return self.scale**2 * self.df / (self.df - 2.0)

    def slope_variance(self) -> float:
        """Sampling variance of a note's least-squares slope, mean over the notes."""
        spans = [np.log2(np.arange(1, base_levels(note).size + 1)) for note in self.notes]
        return self.scatter_variance * float(np.mean([1.0 / (x.size * np.var(x)) for x in spans]))


def smooth_curve(rng: np.random.Generator, sd: float) -> interpolate.CubicSpline:
    """A curve through heights an octave apart, less its straight line over the range of the harmonics."""
    places = np.arange(-3.3, 4.5)
    heights = rng.normal(0, sd, places.size)
    grid = np.linspace(LOWEST_OCTAVE, HIGHEST_OCTAVE, 200)
    line = np.polyfit(grid, interpolate.CubicSpline(places, heights)(grid), 1)
    return interpolate.CubicSpline(places, heights - np.polyval(line, places))


def played(rng: np.random.Generator, truth: Truth, curve: interpolate.CubicSpline, floor_db: float = -90.0) -> Take:
    tilt = rng.normal(0, truth.take_tilt)
    recipes = []
    for note in truth.notes:
        level = base_levels(note)
        octave = np.log2(note_to_hz(note) * np.arange(1, level.size + 1) / 1000.0)
        level = level + (tilt + rng.normal(0, truth.note_tilt)) * octave + curve(octave)
        recipes.append(recipe(note, level + truth.scale * rng.standard_t(truth.df, level.size), floor_db=floor_db))
    return Take(recordings=(Source(file="take.wav", sha256="0" * 64),), notes=tuple(recipes))


def made_of(takes: tuple[Take, ...], family: str = "viol") -> Profile:
    return Profile(instrument="Heron", stage="", family=family, a4_hz=440.0, takes=takes)


def two_takes_each(seed: int, truth: Truth, count: int) -> tuple[list[Profile], Array]:
    """Profiles, and the standard deviation per take that the wobble of each happens to have over the range."""
    rng = np.random.default_rng(seed)
    grid = np.linspace(LOWEST_OCTAVE, HIGHEST_OCTAVE, 400)
    profiles, wobble = [], []
    for _ in range(count):
        curves = [smooth_curve(rng, truth.wobble) for _ in range(2)]
        profiles.append(made_of(tuple(played(rng, truth, curve) for curve in curves)))
        wobble.append(float(np.std(curves[0](grid) - curves[1](grid))) / math.sqrt(2.0))
    return profiles, np.array(wobble)


@pytest.mark.parametrize(
    "truth",
    [
        Truth(take_tilt=0.45, note_tilt=0.5, wobble=0.3, scale=1.5),
        Truth(take_tilt=0.0, note_tilt=0.6, scale=1.0, df=4.5),
        Truth(take_tilt=0.5, note_tilt=0.0, wobble=0.3, scale=2.0, df=30.0),
    ],
    ids=["all", "notes alone", "takes alone"],
)
def test_tilts_come_back(truth: Truth) -> None:
    count, notes = 120, len(NOTES)
    row = structure_rows(two_takes_each(1, truth, count)[0])[0]
    own = truth.note_tilt**2 + truth.slope_variance()
    take_se = math.sqrt(2.0 / count) * (truth.take_tilt**2 + own / notes)
    note_se = math.sqrt(2.0 / (count * (notes - 1))) * own
    assert row.take_pairs == count
    assert abs(row.tilt_common_to_take_sd_db_per_octave**2 - truth.take_tilt**2) < 3.0 * take_se
    assert abs(row.tilt_per_note_sd_db_per_octave**2 - truth.note_tilt**2) < 3.0 * note_se


def test_wobble_comes_back() -> None:
    # Scatter so small that the wobble of each pair is seen as it is; the bound is for what half-octave means flatten:
    # 1 - sin(pi/4) / (pi/4) = 10 % at a period of two octaves, the shortest that heights an octave apart can have.
    profiles, wobble = two_takes_each(2, Truth(take_tilt=0.4, note_tilt=0.4, wobble=1.0, scale=0.1), 100)
    row = structure_rows(profiles)[0]
    assert row.wobble_common_to_take_sd_db_median == pytest.approx(float(np.median(wobble)), rel=0.1)
    assert row.wobble_common_to_take_sd_db_p90 == pytest.approx(float(np.quantile(wobble, 0.9)), rel=0.1)


def test_sampling_error_is_no_wobble() -> None:
    truth = Truth(take_tilt=0.4, note_tilt=0.5, scale=1.5)
    count = 120
    row = structure_rows(two_takes_each(3, truth, count)[0])[0]
    # Mean squares of some ten half-octave means of the scatter: their own mean, and their standard deviation about it.
    per_band = np.mean([base_levels(note).size for note in NOTES]) * len(NOTES) / 11.0
    naive = truth.scatter_variance / per_band
    se_of_median = math.sqrt(math.pi / 2.0 / count) * naive * math.sqrt(2.0 / 9.0)
    assert row.wobble_common_to_take_sd_db_median**2 < 3.0 * se_of_median < naive


def difference_of_t(df: float) -> tuple[float, float, float, float]:
    """Median and 95th percentile of |T - T'| for two Student t variables, and the densities of |T - T'| there."""
    reach = float(stats.t.ppf(1.0 - 1e-7, df))
    grid = np.sinh(np.linspace(-math.asinh(reach), math.asinh(reach), 4001))
    weight = stats.t.pdf(grid, df)

    def below(size: float) -> float:
        return 2.0 * float(integrate.trapezoid(weight * stats.t.cdf(grid + size, df), grid)) - 1.0

    def density(size: float) -> float:
        return 2.0 * float(integrate.trapezoid(weight * stats.t.pdf(grid + size, df), grid))

    middle = float(optimize.brentq(lambda size: below(size) - 0.5, 0.1, 10.0))
    far = float(optimize.brentq(lambda size: below(size) - 0.95, 0.1, 30.0))
    return middle, far, density(middle), density(far)


@pytest.mark.parametrize("df", [4.5, 30.0])
@pytest.mark.parametrize("notes", [NOTES, HIGH_NOTES])
def test_scatter_of_harmonics_comes_back(df: float, notes: tuple[str, ...]) -> None:
    truth = Truth(scale=1.7, df=df, notes=notes)
    assert min(base_levels(note).size for note in notes) in (12, LEAST_HARMONICS)
    rows = repeatability_rows(two_takes_each(4, truth, 100 if notes == NOTES else 300)[0])
    middle, far, middle_density, far_density = difference_of_t(df)
    kurtosis = 3.0 + 3.0 / (df - 4.0)  # a difference of two halves the excess of Student's t, 6 / (df - 4)
    sd = math.sqrt(truth.scatter_variance)
    for row in rows:
        n = row.n_overtone_pairs
        # Errors of sample quantiles, sqrt(p (1 - p) / n) over the density, and what the alignment may add (docstring).
        robust = 1.4826 * truth.scale * middle / math.sqrt(2.0)
        assert row.sd_per_take_db_robust == pytest.approx(robust, rel=0.03 + 3 * 0.5 / math.sqrt(n) / middle_density)
        p95 = truth.scale * far / math.sqrt(2.0)
        assert row.p95_abs_db == pytest.approx(p95, rel=0.07 + 3 * math.sqrt(0.0475 / n) / far_density / far)
        assert row.sd_per_take_db_rms == pytest.approx(sd, rel=0.07 + 3 * 0.5 * math.sqrt((kurtosis - 1.0) / n))


@pytest.mark.parametrize("note_tilt", [0.0, 0.6])
def test_robust_tilt_is_free_of_sampling_error(note_tilt: float) -> None:
    truth = Truth(note_tilt=note_tilt, scale=1.5)
    count = 100 * len(NOTES)
    tilt = repeatability_rows(two_takes_each(5, truth, 100)[0])[0].tilt_sd_db_per_octave_robust
    # A robust variance of n normal values has the relative standard error 2 * 1.17 / sqrt(n): Rousseeuw & Croux 1993
    # (JASA 88:1273) give the median absolute deviation an efficiency of 37 % against the standard deviation.
    error = 2.0 * 1.17 / math.sqrt(count) * (note_tilt**2 + truth.slope_variance())
    assert abs(tilt**2 - note_tilt**2) < 3.0 * error < truth.slope_variance()


def test_every_pair_of_takes_and_every_clear_harmonic_counts() -> None:
    rng = np.random.default_rng(6)
    truth = Truth(scale=0.5, notes=("G3", "A3"))
    flat = smooth_curve(rng, 0.0)
    takes = tuple(played(rng, truth, flat, floor_db=-45.0) for _ in range(3))
    clear = [{(one.note, int(k)) for one in take.notes for k in one.k[one.level_db >= -33.0]} for take in takes]
    expected = sum(len(clear[a] & clear[b]) for a, b in ((0, 1), (0, 2), (1, 2)))
    # Many profiles of the same takes, so that every band has enough pairs for a row.
    rows = repeatability_rows([made_of(takes)] * 50)
    assert 3 * LEAST_HARMONICS < expected < sum(one.k.size for take in takes for one in take.notes)
    assert sum(row.n_overtone_pairs for row in rows) == 50 * expected


def test_a_note_that_is_played_again_is_paired_in_order() -> None:
    once = profile(1, takes=2, notes=("A4",), scatter_db=1.0)
    first, second = (take.notes[0] for take in once.takes)
    source = once.takes[0].recordings
    again = made_of(
        (Take(recordings=source, notes=(first, second)), Take(recordings=source, notes=(second, first, first)))
    )
    plain = repeatability_rows([made_of(once.takes)] * 50)
    twice = repeatability_rows([again] * 50)
    assert [row.n_overtone_pairs for row in twice] == [2 * row.n_overtone_pairs for row in plain]
    assert [row.sd_per_take_db_rms for row in twice] == pytest.approx([row.sd_per_take_db_rms for row in plain])


def test_families_have_rows_of_their_own() -> None:
    narrow = [profile(seed, takes=2, scatter_db=0.5, family=" Viola") for seed in range(5)]
    wide = [profile(seed, takes=2, scatter_db=2.0, family="cello") for seed in range(5)]
    rows = repeatability_rows([*narrow, *wide])
    assert [row.instrument for row in structure_rows([*narrow, *wide])] == ["cello", "viola"]
    assert rows == (*repeatability_rows(wide), *repeatability_rows(narrow))


def test_tables_have_the_form_that_the_package_reads(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    profiles = [profile(seed, takes=3, family="double bass", tilt_db=0.8) for seed in range(6)]
    bands, structure = repeatability_rows(profiles), structure_rows(profiles)
    texts = {"repeatability.csv": table_text(bands), "take_structure.csv": table_text(structure)}
    (tmp_path / "data").mkdir()
    for name, text in texts.items():
        ours = resources.files("timbre_match.compare").joinpath("data", name).read_text(encoding="utf-8")
        assert text.splitlines()[0] == ours.splitlines()[0]
        (tmp_path / "data" / name).write_text(text, encoding="utf-8")
    monkeypatch.setattr(repeatability, "_table", repeatability._table.__wrapped__)
    monkeypatch.setattr(resources, "files", lambda _: tmp_path)
    prior = repeatability.scatter_prior.__wrapped__("double bass")
    robust = prior.scale_db * 1.4826 * stats.t.ppf(0.75, prior.tail_df)
    assert robust == pytest.approx([row.sd_per_take_db_robust for row in bands], abs=0.005001)
    assert prior.note_tilt_db == pytest.approx(structure[0].tilt_per_note_sd_db_per_octave, abs=0.005001)
    read = list(csv.DictReader(texts["repeatability.csv"].splitlines()))
    assert [int(row["n_overtone_pairs"]) for row in read] == [row.n_overtone_pairs for row in bands]
    assert all(row["instrument"] == "double bass" for row in read)


def test_fields_are_the_columns() -> None:
    for kind, name in ((BandScatter, "repeatability.csv"), (TakeStructure, "take_structure.csv")):
        ours = resources.files("timbre_match.compare").joinpath("data", name).read_text(encoding="utf-8")
        assert [field.name for field in dataclasses.fields(kind)] == ours.splitlines()[0].split(",")


@pytest.mark.parametrize("rows", [repeatability_rows, structure_rows])
def test_one_take_or_no_family_is_refused(rows: Callable[[list[Profile]], object]) -> None:
    with pytest.raises(ComparisonError, match="has one take") as caught:
        rows([profile(1, takes=2), profile(2, takes=1)])
    assert "instrument 2 (violin)" in str(caught.value)
    assert "two takes or more" in str(caught.value)
    with pytest.raises(ComparisonError, match="no instrument family"):
        rows([profile(1, takes=2, family=" ")])


def test_too_little_in_common_is_refused() -> None:
    nine = profile(1, takes=2, notes=("G3", "A3", "B3", "D4", "E4", "F#4", "A4", "B4", "C#5"))
    with pytest.raises(ComparisonError, match="10 notes in common"):
        structure_rows([nine])
    one = profile(1, takes=2, notes=("A4",))
    with pytest.raises(ComparisonError, match="too few harmonics"):
        repeatability_rows([one])
    apart = made_of((profile(1, takes=1, notes=("A4",)).takes[0], profile(1, takes=1, notes=("B4",)).takes[0]))
    with pytest.raises(ComparisonError, match="too few harmonics"):
        repeatability_rows([apart])


def test_copies_of_one_take_are_refused() -> None:
    take = profile(1, takes=1).takes[0]
    with pytest.raises(ComparisonError, match="do not differ"):
        repeatability_rows([made_of((take, take))])
