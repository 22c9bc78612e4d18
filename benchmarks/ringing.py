"""How right the measurement of ringing notes is, on strings with known partials, and how fast.

Strings, bounds and limits: `tests/measure/known_strings.py`, which the tests use with fewer trials.

    python -m benchmarks.ringing --trials 20
"""

import argparse
import time
from collections import Counter

import numpy as np

from tests.measure.known_strings import (
    BOUND_LIMIT,
    CENTS_LIMIT,
    LEVEL_LIMIT_DB,
    NAMED_LIMIT,
    POSSIBLE,
    SE_LIMIT,
    SURE,
    T60_LIMIT,
    Array,
    Setting,
    b_limit,
    clear_partials,
    draw_coupled,
    draw_string,
    measured,
    ringing_note,
    rms,
    run,
)
from timbre_match.measure.recipe import measure_recipe

STIFFNESSES = (0.0, 1e-5, 1e-4, 1e-3)
TIMES_S = {40.0: (3.0, 20.0), 110.0: (1.0, 4.0, 12.0), 330.0: (0.6, 2.0, 6.0), 1000.0: (0.4, 1.0, 4.0)}
SNRS_DB = (20.0, 40.0, 60.0)


def main() -> None:
    parser = argparse.ArgumentParser(description="Errors of ringing notes against the truth and the Cramer-Rao bound.")
    parser.add_argument("--trials", type=int, default=20, help="strings per setting (20)")
    trials = parser.parse_args().trials
    began = time.perf_counter()
    accuracy(trials)
    shapes(5 * trials)
    speed()
    print(f"\n{time.perf_counter() - began:.0f} s")


def accuracy(trials: int) -> None:
    print(f"Strings whose partials decay plainly, {trials} a setting.")
    print(f"f0: largest error, share within the limit or, where it is known less well, within {SURE} standard errors;")
    print("B: that share. Level and T60 of partials 20 dB and more above their floor: 95th percentile of the error;")
    print("the same where the bound is under half of the limit; rms error / bound; standard error / rms error.")
    print(
        "  f0 Hz       B   T60 s   SNR missed heard |  cents right |  B right |"
        "  level dB     /bound    se |    T60 %      /bound    se"
    )
    for f0_hz, times_s in TIMES_S.items():
        for b in STIFFNESSES:
            for t60_s in times_s:
                for snr_db in SNRS_DB:
                    setting = Setting(f0_hz=f0_hz, b=b, t60_s=t60_s, snr_db=snr_db)
                    _print_accuracy(setting, trials)


def _print_accuracy(setting: Setting, trials: int) -> None:
    found = run(setting, trials, np.random.default_rng(40))
    if not len(found.cents):
        print(
            f"{setting.f0_hz:7.0f} {setting.b:7.0e} {setting.t60_s:7.1f} {setting.snr_db:5.0f} {found.missed:6d}   none"
        )
        return
    f0_right = float(np.mean(np.abs(found.cents) <= np.maximum(CENTS_LIMIT, SURE * found.cents_se)))
    b_right = float(np.mean(np.abs(found.b) <= np.maximum(b_limit(setting.b), SURE * found.b_se)))
    level, t60 = found.level_db / found.level_bound_db, found.t60 / found.t60_bound
    level_se = rms(found.level_se_db / found.level_bound_db) / max(rms(level), 1e-12)
    t60_se = rms(found.t60_se / found.t60_bound) / max(rms(t60), 1e-12)
    able_db = found.level_bound_db <= POSSIBLE * LEVEL_LIMIT_DB
    able = found.t60_bound <= POSSIBLE * T60_LIMIT
    over = ", ".join(
        name
        for name, missed in (
            ("f0", f0_right < 0.95),
            ("B", b_right < 0.95),
            ("level", wide(found.level_db[able_db]) > LEVEL_LIMIT_DB),
            ("T60", wide(found.t60[able]) > T60_LIMIT),
            ("bound", max(rms(level), rms(t60)) > BOUND_LIMIT),
            ("se", max(abs(level_se - 1.0), abs(t60_se - 1.0)) > SE_LIMIT),
        )
        if missed
    )
    print(
        f"{setting.f0_hz:7.0f} {setting.b:7.0e} {setting.t60_s:7.1f} {setting.snr_db:5.0f} {found.missed:6d}"
        f" {found.heard / len(found.cents):5.1f} | {np.abs(found.cents).max():6.3f} {f0_right:5.2f} | {b_right:7.2f} |"
        f" {wide(found.level_db):5.2f} {wide(found.level_db[able_db]):5.2f} {rms(level):7.2f} {level_se:5.2f} |"
        f" {100 * wide(found.t60):5.1f} {100 * wide(found.t60[able]):5.1f} {rms(t60):7.2f} {t60_se:5.2f}"
        f"  {over and 'over: '}{over}",
        flush=True,
    )


def wide(errors: Array) -> float:
    """The error that 95 of a hundred stay under."""
    return float(np.quantile(np.abs(errors), 0.95)) if errors.size else 0.0


def shapes(trials: int) -> None:
    print(
        f"\nShapes of decay: {trials} strings of eight partials, plain, two-stage or beating; rows true, columns found."
    )
    rng = np.random.default_rng(41)
    counts: dict[str, Counter[str]] = {kind: Counter() for kind in ("plain", "two-stage", "beating")}
    missed, sure_but_wrong = 0, 0
    for _ in range(trials):
        string = draw_coupled(rng)
        found = measured(string)
        if found is None:
            missed += 1
            continue
        recipe, ringing = found
        for index in clear_partials(string, recipe):
            true, shape = string.kinds[index], ringing.decay[index]
            counts[true][str(shape)] += 1
            sure = ringing.t60_se_s[index] < 0.02 * ringing.t60_s[index]
            sure_but_wrong += int(true != "plain" and shape == "plain" and sure)
    for true, row in counts.items():
        total = max(1, sum(row.values()))
        shown = "  ".join(f"{name} {row[name] / total:5.3f}" for name in ("plain", "two-stage", "beating", "unclear"))
        print(f"{true:>10} ({total:4d})  {shown}  {'over' * (row[true] / total < NAMED_LIMIT)}")
    print(f"notes missed: {missed}; not plain, yet reported plain with an error under 2 %: {sure_but_wrong}")


def speed() -> None:
    print("\nSpeed: seconds of ringing measured in a second of one processor, the best of five.")
    rng = np.random.default_rng(42)
    for f0_hz, t60_s in ((82.0, 6.0), (110.0, 12.0), (330.0, 4.0), (660.0, 2.0), (1000.0, 1.0)):
        string = draw_string(Setting(f0_hz=f0_hz, b=5e-5, t60_s=t60_s, snr_db=50.0), rng)
        note = ringing_note(string)
        if note is None:
            print(f"{f0_hz:7.0f} Hz: not found")
            continue
        best_s = np.inf
        for _ in range(5):
            began = time.process_time()
            measure_recipe(string.recording, note)
            best_s = min(best_s, time.process_time() - began)
        length_s = note.end_s - note.start_s
        print(f"{f0_hz:7.0f} Hz  {length_s:5.2f} s  {length_s / best_s:5.1f} times as fast as it sounds")


if __name__ == "__main__":
    main()
