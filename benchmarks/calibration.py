"""Whether the comparison's intervals and verdicts hold what they say, on simulated takes with a known truth.

Each comparison draws one instrument of the package's tables of repeats, two sides with a known difference (a body
curve plus deviations of single harmonics), and takes that scatter as the tables say: Student t scatter of each level,
tilts of takes and notes, a smooth wobble. The estimator never sees these figures except through its own pooled prior.

    python -m benchmarks.calibration --comparisons 200
"""

import argparse
import csv
import math
import time
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from importlib import resources

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, stats

from timbre_match.compare import colour, compare
from timbre_match.compare.body_curve import reference_level
from timbre_match.compare.comparison import Comparison
from timbre_match.compare.playing import Evidence, gather
from timbre_match.compare.target import as_target
from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.measure.recipe import Recipe
from timbre_match.units import note_name, note_to_hz

Array = NDArray[np.float64]

MARGIN_DB = 3.0
TOP_HZ = 10_000.0
LOWEST_NOTE = 55  # G3
HIGHEST_NOTE = 76  # E5; thirty notes go on above it
FLOOR_RANGE_DB = (-75.0, -60.0)


@dataclass(frozen=True, kw_only=True, slots=True)
class Playing:
    """How one instrument of the tables scatters per take."""

    family: str
    centre_hz: Array
    scale_db: Array
    tail_df: float
    take_tilt_db: float
    note_tilt_db: float
    wobble_db: float


@dataclass(frozen=True, kw_only=True, slots=True)
class Truth:
    """The difference of the two sides.

    Each bump has a centre in Hz, a depth in dB and a full width at half depth in octaves; `slope_db` is per octave.
    """

    bumps: tuple[tuple[float, float, float], ...] = ()
    slope_db: float = 0.0
    own_db: float = 0.0

    def curve(self, freq_hz: Array) -> Array:
        """Difference in dB at `freq_hz`, without the single harmonics' own deviations."""
        octave = np.log2(freq_hz / 1000.0)
        total = self.slope_db * octave
        for centre_hz, depth_db, width in self.bumps:
            distance = (octave - math.log2(centre_hz / 1000.0)) / width
            total = total + depth_db * np.exp(-4.0 * math.log(2.0) * distance**2)
        return np.asarray(total)


@dataclass(frozen=True, kw_only=True, slots=True)
class Outcome:
    """What one comparison got right."""

    error_over_half_width: Array
    half_width_db: Array
    lone_error_db: Array
    lone_half_width_db: Array
    curve_inside: Array
    simultaneous: bool
    colour_db: float
    true_colour_db: float
    colour_inside: bool
    closeness_percent: float
    true_closeness_percent: float
    closeness_inside: bool
    different: int
    false_different: int
    alike: int
    false_alike: int
    regions: int
    found: bool
    centre_octaves: float
    size_db: float
    seconds: float


def playing_of(instrument: str) -> Playing:
    bands = [row for row in _table("repeatability.csv") if row["instrument"] == instrument]
    structure = next(row for row in _table("take_structure.csv") if row["instrument"] == instrument)
    low = np.array([float(row["band_low_hz"]) for row in bands])
    high = np.array([float(row["band_high_hz"]) for row in bands])
    robust = np.array([float(row["sd_per_take_db_robust"]) for row in bands])
    plain = np.array([float(row["sd_per_take_db_rms"]) for row in bands])
    tail_df = _tail_df(float(np.median(plain / robust)))
    middle = float(structure["wobble_common_to_take_sd_db_median"])
    worst = float(structure["wobble_common_to_take_sd_db_p90"])
    return Playing(
        family=instrument,
        centre_hz=np.sqrt(np.maximum(low, high / 2.0) * high),
        scale_db=robust / (1.4826 * stats.t.ppf(0.75, tail_df)),
        tail_df=tail_df,
        take_tilt_db=float(structure["tilt_common_to_take_sd_db_per_octave"]),
        note_tilt_db=float(structure["tilt_per_note_sd_db_per_octave"]),
        wobble_db=math.hypot(middle, worst / 1.645),
    )


def instruments() -> list[str]:
    return [row["instrument"] for row in _table("take_structure.csv")]


def simulated_pair(
    rng: np.random.Generator,
    playing: Playing,
    truth: Truth,
    takes: int,
    notes: int,
    *,
    lowest: int = LOWEST_NOTE,
    harmonics: int | None = None,
    floor_db: float | None = None,
) -> tuple[Profile, Profile, dict[tuple[str, int], float]]:
    """Instrument, target, and the true difference of each harmonic by note and k."""
    if notes <= HIGHEST_NOTE - LOWEST_NOTE + 1:
        numbers = np.unique(np.linspace(LOWEST_NOTE, HIGHEST_NOTE, notes).round().astype(int))
    else:
        numbers = np.arange(lowest, lowest + notes)
    names = [note_name(int(number)) for number in numbers]
    peaks = [(rng.uniform(250, 6000), rng.normal(0, 8), rng.uniform(0.2, 0.6)) for _ in range(8)]
    body = Truth(bumps=tuple(peaks))
    floor = rng.uniform(*FLOOR_RANGE_DB) if floor_db is None else floor_db
    base, own, freq = {}, {}, {}
    differences = {}
    for name in names:
        f0 = note_to_hz(name)
        k = np.arange(1, (harmonics or int(TOP_HZ / f0)) + 1)
        freq[name] = np.asarray(k * f0, dtype=np.float64)
        source = -20.0 * np.log10(k) + np.minimum(0.0, -6.0 * np.log2(freq[name] / 3000.0)) + rng.normal(0, 4, k.size)
        base[name] = source + body.curve(freq[name])
        own[name] = truth.own_db * rng.standard_t(5, k.size) / math.sqrt(5.0 / 3.0)
        whole = truth.curve(freq[name]) + own[name]
        differences.update({(name, int(one)): float(value) for one, value in zip(k, whole, strict=True)})

    def profile(with_difference: bool) -> Profile:
        made = []
        for _ in range(takes):
            tilt = rng.normal(0, playing.take_tilt_db)
            wobble = _wobble(rng, playing.wobble_db)
            recipes = []
            for name in names:
                level = base[name] + ((truth.curve(freq[name]) + own[name]) if with_difference else 0.0)
                octave = np.log2(freq[name] / 1000.0)
                scale = np.interp(octave, np.log2(playing.centre_hz / 1000.0), playing.scale_db)
                level = level + (tilt + rng.normal(0, playing.note_tilt_db)) * octave + wobble(octave)
                level = level + scale * rng.standard_t(playing.tail_df, octave.size)
                recipes.append(_recipe(rng, name, freq[name], level, floor))
            made.append(Take(recordings=(Source(file="simulated", sha256=""),), notes=tuple(recipes)))
        label = "instrument" if with_difference else "target"
        return Profile(instrument=label, stage="", family=playing.family, a4_hz=440.0, takes=tuple(made))

    return profile(True), profile(False), differences


def outcome(rng: np.random.Generator, truth: Truth, takes: int, notes: int) -> Outcome:
    playing = playing_of(str(rng.choice(instruments())))
    instrument, target, differences = simulated_pair(rng, playing, truth, takes, notes)
    start = time.process_time()
    comparison = compare(instrument, target, margin_db=MARGIN_DB)
    seconds = time.process_time() - start
    hz = np.array([point.freq_hz for point in comparison.body_curve])
    evidence = gather(instrument, as_target(target))
    curve = truth.curve(hz)
    constant = float(reference_level(curve[None], evidence.loudness(hz))[0])
    curve = curve - constant
    low, high, band_low, band_high = np.array(
        [
            (p.difference_db.low, p.difference_db.high, p.simultaneous_low_db, p.simultaneous_high_db)
            for p in comparison.body_curve
        ]
    ).T
    d = np.array([differences[one.note, one.k] - constant for one in comparison.harmonics])
    value = np.array([one.difference_db.value for one in comparison.harmonics])
    half = np.array([one.difference_db.high - one.difference_db.value for one in comparison.harmonics])
    verdicts = np.array([one.verdict for one in comparison.harmonics])
    called = np.isin(verdicts, ["stronger", "weaker"])
    wrong = called & (np.sign(value) * d <= 0)
    alike = verdicts == "alike"
    lone_value, lone_half = unpooled(evidence)
    found, centre, size = _found(comparison, truth)
    true_bands = colour.all_bands(evidence.note_index, evidence.freq_hz, evidence.target_db, d[None, :])
    true_distance = float(colour.colour_distance(true_bands)[0])
    true_closeness = float(colour.closeness(true_bands, MARGIN_DB)[0])
    distance, close = comparison.colour_distance.distance_db, comparison.closeness_percent
    return Outcome(
        error_over_half_width=np.abs(value - d) / half,
        half_width_db=half,
        lone_error_db=lone_value - d,
        lone_half_width_db=lone_half,
        curve_inside=(low <= curve) & (curve <= high),
        simultaneous=bool(np.all((band_low <= curve) & (curve <= band_high))),
        colour_db=distance.value,
        true_colour_db=true_distance,
        colour_inside=distance.low <= true_distance <= distance.high,
        closeness_percent=close.value,
        true_closeness_percent=true_closeness,
        closeness_inside=close.low <= true_closeness <= close.high,
        different=int(np.sum(called)),
        false_different=int(np.sum(wrong)),
        alike=int(np.sum(alike)),
        false_alike=int(np.sum(alike & (np.abs(d) > MARGIN_DB))),
        regions=len(comparison.regions),
        found=found,
        centre_octaves=centre,
        size_db=size,
        seconds=seconds,
    )


def unpooled(evidence: Evidence) -> tuple[Array, Array]:
    """Each harmonic on its own: mean difference, gains aligned by the median, and a moderated t interval."""
    row = evidence.differences
    value = row.value_db.copy()
    for note in np.unique(row.note):
        value[row.note == note] -= np.median(value[row.note == note])
    return value, np.asarray(stats.t.ppf(0.975, row.scatter_df) * np.sqrt(row.scatter_variance))


def table(title: str, outcomes: list[Outcome]) -> str:
    ratio = np.concatenate([one.error_over_half_width for one in outcomes])
    half = np.concatenate([one.half_width_db for one in outcomes])
    lone_error = np.abs(np.concatenate([one.lone_error_db for one in outcomes]))
    lone_half = np.concatenate([one.lone_half_width_db for one in outcomes])
    pooled_width = np.median(half) * np.quantile(ratio, 0.95)
    lone_width = np.median(lone_half) * np.quantile(lone_error / lone_half, 0.95)
    different = sum(one.different for one in outcomes)
    alike = sum(one.alike for one in outcomes)
    found = [one for one in outcomes if one.found]
    cells = [
        f"{title:24s}",
        f"{100 * np.mean(ratio <= 1):6.1f}",
        f"{100 * np.mean(np.concatenate([one.curve_inside for one in outcomes])):6.1f}",
        f"{100 * np.mean([one.simultaneous for one in outcomes]):6.1f}",
        f"{100 * np.mean([one.colour_inside for one in outcomes]):6.1f}",
        f"{np.mean([one.true_colour_db for one in outcomes]):6.2f}",
        f"{np.mean([one.colour_db for one in outcomes]):6.2f}",
        f"{100 * np.mean([one.closeness_inside for one in outcomes]):6.1f}",
        f"{np.mean([one.true_closeness_percent for one in outcomes]):6.1f}",
        f"{np.mean([one.closeness_percent for one in outcomes]):6.1f}",
        f"{100 * sum(one.false_different for one in outcomes) / max(different, 1):6.1f}",
        f"{different / ratio.size * 100:6.1f}",
        f"{100 * sum(one.false_alike for one in outcomes) / max(alike, 1):6.1f}",
        f"{alike / ratio.size * 100:6.1f}",
        f"{100 * np.mean([one.regions > 0 for one in outcomes]):6.1f}",
        f"{100 * np.mean([one.found for one in outcomes]):6.1f}",
        f"{100 * np.mean([one.centre_octaves <= 1 / 6 for one in found]) if found else math.nan:6.1f}",
        f"{100 * np.mean([abs(one.size_db) <= 1.5 for one in found]) if found else math.nan:6.1f}",
        f"{np.mean([one.size_db for one in found]) if found else math.nan:6.2f}",
        f"{np.median(half):6.2f}",
        f"{pooled_width / lone_width:6.2f}",
        f"{np.mean([one.seconds for one in outcomes]):6.2f}",
    ]
    return " ".join(cells)


HEAD = " ".join(
    [f"{'setting':24s}"]
    + [
        f"{word:>6s}"
        for word in (
            "harm%", "curve%", "simul%", "colou%", "true", "mean", "close%", "true", "mean", "fdr%", "diff%", "falik%",
            "alik%", "regio%", "found%", "centr%", "size%", "dsize", "half", "ratio", "sec",
        )
    ]
)  # fmt: skip


def random_truth(rng: np.random.Generator) -> Truth:
    bumps = tuple(
        (1000.0 * 2.0 ** rng.uniform(-2, 3), rng.normal(0, 2.5), rng.uniform(0.33, 1.2))
        for _ in range(rng.integers(2, 7))
    )
    return Truth(bumps=bumps, slope_db=rng.normal(0, 0.3), own_db=rng.uniform(0.3, 1.8))


def no_difference(rng: np.random.Generator) -> Truth:
    return Truth()


def dip(rng: np.random.Generator) -> Truth:
    centre = 1000.0 * 2.0 ** rng.uniform(math.log2(0.35), math.log2(4.0))
    return Truth(bumps=((centre, -5.0, rng.uniform(1 / 3, 1.0)),), own_db=0.5)


def broad(rng: np.random.Generator) -> Truth:
    return replace(dip(rng), bumps=((1000.0 * 2.0 ** rng.uniform(math.log2(0.4), math.log2(4.0)), -3.0, 1.0),))


KINDS = {"random": random_truth, "itself": no_difference, "dip 5 dB": dip, "broad 3 dB": broad}

SETTINGS = (
    [("random", takes, notes) for takes in (1, 3, 5) for notes in (4, 12, 30)]
    + [("itself", takes, notes) for takes in (1, 3, 5) for notes in (4, 12, 30)]
    + [("dip 5 dB", 3, 12), ("broad 3 dB", 5, 30)]
)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--comparisons", type=int, default=200)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", default="", help="settings whose name holds this, such as 'itself 3x12'")
    arguments = parser.parse_args()
    print(HEAD)
    for kind, takes, notes in SETTINGS:
        title = f"{kind} {takes}x{notes}"
        if arguments.only not in title:
            continue
        seeds = seeds_of(arguments.seed, kind, takes, notes).spawn(arguments.comparisons)
        with ProcessPoolExecutor(max_workers=arguments.jobs) as pool:
            outcomes = list(pool.map(_one, [(seed, kind, takes, notes) for seed in seeds]))
        print(table(title, outcomes), flush=True)
    if not arguments.only:
        seconds, harmonics = seconds_of_the_largest(arguments.seed)
        print(f"40 notes x 5 takes x 40 harmonics: {seconds:.2f} s of one core ({harmonics} harmonics in common)")


def seeds_of(seed: int, kind: str, takes: int, notes: int) -> np.random.SeedSequence:
    """Seeds of a setting's comparisons; no two settings share them, and no other setting in the list changes them.

    The kind enters by the UTF-8 bytes of its name, read as one number.
    """
    return np.random.SeedSequence([seed, int.from_bytes(kind.encode(), "big"), takes, notes])


def seconds_of_the_largest(seed: int) -> tuple[float, int]:
    """Processor time of one comparison of 40 notes, 5 takes a side and 40 harmonics, and its number of harmonics."""
    rng = np.random.default_rng(seed)
    instrument, target, _ = simulated_pair(
        rng, playing_of("double bass"), random_truth(rng), 5, 40, lowest=31, harmonics=40, floor_db=-200.0
    )
    start = time.process_time()
    comparison = compare(instrument, target, margin_db=MARGIN_DB)
    return time.process_time() - start, len(comparison.harmonics)


def _one(setting: tuple[np.random.SeedSequence, str, int, int]) -> Outcome:
    seed, kind, takes, notes = setting
    rng = np.random.default_rng(seed)
    return outcome(rng, KINDS[kind](rng), takes, notes)


def _found(comparison: Comparison, truth: Truth) -> tuple[bool, float, float]:
    """Whether a region of the right sign covers the truth's only bump; how far off its centre (octaves), size (dB)."""
    if len(truth.bumps) != 1:
        return False, math.nan, math.nan
    centre, depth, _ = truth.bumps[0]
    wanted = "weaker" if depth < 0 else "stronger"
    for region in comparison.regions:
        if region.verdict == wanted and region.low_hz <= centre <= region.high_hz:
            offset = abs(math.log2(math.sqrt(region.low_hz * region.high_hz) / centre))
            return True, offset, region.difference_db.value - depth
    return False, math.nan, math.nan


def _wobble(rng: np.random.Generator, sd_db: float) -> Callable[[Array], Array]:
    places = np.arange(-6.0, 6.0, 0.5)
    heights = rng.normal(0, sd_db, places.size)
    return lambda octave: np.asarray(np.interp(octave, places, heights))


def _recipe(rng: np.random.Generator, name: str, freq_hz: Array, level_db: Array, floor_db: float) -> Recipe:
    share = level_db - 10.0 * np.log10(np.sum(10.0 ** (level_db / 10.0)))
    se = np.full(share.size, 0.2)
    measured = share + se * rng.standard_normal(share.size)
    heard = measured > floor_db + 6.0
    return Recipe(
        note=name,
        f0_hz=float(freq_hz[0]),
        cents=0.0,
        start_s=0.0,
        end_s=1.0,
        cycles=int(freq_hz[0]),
        points_per_cycle=2 * freq_hz.size + 2,
        kind="held",
        k=np.arange(1, share.size + 1),
        freq_hz=freq_hz,
        level_db=np.where(heard, measured, np.nan),
        se_db=np.where(heard, se, np.nan),
        floor_db=np.full(share.size, floor_db),
        heard=heard,
        phase_rad=np.where(heard, 0.0, np.nan),
    )


def _tail_df(ratio: float) -> float:
    def gap(df: float) -> float:
        return math.sqrt(df / (df - 2.0)) / (1.4826 * float(stats.t.ppf(0.75, df))) - ratio

    return 50.0 if gap(50.0) >= 0 else float(optimize.brentq(gap, 2.05, 50.0))


def _table(name: str) -> list[dict[str, str]]:
    text = resources.files("timbre_match.compare").joinpath("data", name).read_text(encoding="utf-8")
    return list(csv.DictReader(text.splitlines()))


if __name__ == "__main__":
    main()
