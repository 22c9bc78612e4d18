"""Whether intervals and verdicts of decay times hold what they say, on simulated takes with a known truth.

Each comparison draws two plucked instruments: decay times that differ by a curve, by note and by partial, and takes
that scatter by partial, by note and as a whole. The estimator knows none of these figures.

    python -m benchmarks.sustain --comparisons 100
"""

import argparse
import math
import time
from dataclasses import dataclass

import numpy as np

from tests.compare.plucked import NOTES, bell, plucked
from timbre_match.compare.sustain import INAUDIBLE, compare_sustain
from timbre_match.compare.target import as_target
from timbre_match.units import note_to_hz


@dataclass(frozen=True, kw_only=True, slots=True)
class Case:
    """What differs (natural logarithms), and how takes scatter."""

    name: str
    takes: int
    size: float = 0.0
    note: float = 0.0
    scatter: float = 0.2
    uneven: float = 0.0


CASES = (
    Case(name="nothing differs", takes=1),
    Case(name="nothing differs", takes=3),
    Case(name="nothing differs, calm takes", takes=3, scatter=0.08),
    Case(name="a stretch 40 % shorter", takes=1, size=-0.5, note=0.1),
    Case(name="a stretch 40 % shorter", takes=2, size=-0.5, note=0.1),
    Case(name="a stretch 40 % shorter", takes=3, size=-0.5, note=0.1),
    Case(name="a stretch 40 % shorter", takes=5, size=-0.5, note=0.1),
    Case(name="the same, half of the partials beat", takes=3, size=-0.5, note=0.1, uneven=0.3),
    Case(name="a stretch 80 % longer, wild takes", takes=3, size=0.6, note=0.1, scatter=0.4),
)


def run(case: Case, comparisons: int) -> str:
    """One row of the table."""
    held, curve_held, wrong, different, alike, far, regions, found, seconds = [], [], 0, 0, 0, 0, 0, 0, 0.0
    for seed in range(comparisons):
        rng = np.random.default_rng(seed)
        centre_hz = float(np.exp(rng.uniform(math.log(200.0), math.log(2000.0))))
        change = bell(centre_hz, case.size, 1.0)
        shift = {note: float(rng.normal(0, case.note)) for note in NOTES}
        common = {"takes": case.takes, "scatter": case.scatter, "uneven": case.uneven}
        instrument = plucked(2 * seed, decay=change, of_note=shift, **common)  # type: ignore[arg-type]
        target = plucked(2 * seed + 1, **common)  # type: ignore[arg-type]
        began = time.perf_counter()
        sustain, _ = compare_sustain(instrument, as_target(target), np.random.default_rng(seed))
        seconds += time.perf_counter() - began
        if sustain is None:
            continue
        inside = []
        for one in sustain.harmonics:
            truth = float(change(np.array([one.k * note_to_hz(one.note)]))[0]) + shift[one.note]
            inside.append(math.log(one.ratio.low) <= truth <= math.log(one.ratio.high))
            if one.verdict in ("longer", "shorter"):
                different += 1
                wrong += truth == 0.0 or (truth > 0) != (one.verdict == "longer")
            elif one.verdict == "alike":
                alike += 1
                far += not math.log(INAUDIBLE[0]) < truth < math.log(INAUDIBLE[1])
        held.append(float(np.mean(inside)))
        points = sustain.curve[::12]
        truths = change(np.array([point.freq_hz for point in points]))
        curve_held.append(
            float(
                np.mean(
                    [
                        math.log(point.ratio.low) <= truth <= math.log(point.ratio.high)
                        for point, truth in zip(points, truths, strict=True)
                    ]
                )
            )
        )
        regions += bool(sustain.regions)
        found += any(one.low_hz <= centre_hz <= one.high_hz for one in sustain.regions)
    hits = f"{found / comparisons:.0%}" if case.size else "·"
    false = f"{regions / comparisons:.0%}" if not case.size else "·"
    return (
        f"{case.name:40}{case.takes:6}{np.mean(held):10.1%}{np.mean(curve_held):8.1%}{different:8}{wrong:7}{alike:7}"
        f"{far:6}{false:>8}{hits:>8}{seconds / comparisons:8.2f}"
    )


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--comparisons", type=int, default=100)
    comparisons = parser.parse_args().comparisons
    print(
        f"{'case':40}{'takes':>6}{'partials':>10}{'curve':>8}{'differ':>8}{'wrong':>7}{'alike':>7}{'far':>6}"
        f"{'false':>8}{'found':>8}{'s each':>8}"
    )
    for case in CASES:
        print(run(case, comparisons), flush=True)


if __name__ == "__main__":
    main()
