"""How near the measured levels and fundamentals come to the Cramer-Rao bound, on tones with a known make-up.

Errors are given as multiples of the bound. The tones, the bounds and their sources: `tests/measure/known_tones.py`,
which the tests use with fewer trials.

    python -m benchmarks.accuracy --trials 200
"""

import argparse
import time

import numpy as np

from tests.measure.known_tones import (
    BIAS_LIMIT_DB,
    F0_LIMIT,
    LEVEL_LIMIT,
    SE_LIMIT,
    VIBRATO_LIMIT_DB,
    Setting,
    rms,
    run,
)

FUNDAMENTALS_HZ = (30.0, 110.0, 440.0, 1320.0, 4000.0)
RATES_HZ = (44_100, 48_000, 96_000)
SNRS_DB = (10.0, 60.0)


def main() -> None:
    parser = argparse.ArgumentParser(description="Level and pitch errors as multiples of the Cramer-Rao bound.")
    parser.add_argument("--trials", type=int, default=200, help="tones per setting (200)")
    trials = parser.parse_args().trials
    began = time.perf_counter()
    print(f"Steady tones, {trials} trials a setting. Level and f0: rms error / bound (pooled; worst harmonic).")
    print("   f0 Hz  rate Hz  harm.  SNR dB  missed  level  worst  bias dB (its s.e.)     f0  se/scatter")
    for setting in (
        Setting(f0_hz=f0_hz, sample_rate_hz=rate, snr_db=snr)
        for f0_hz in FUNDAMENTALS_HZ
        for rate in RATES_HZ
        for snr in SNRS_DB
    ):
        found = run(setting, trials, np.random.default_rng(20))
        ratios = np.sqrt(np.mean(found.level_error_db**2, axis=0)) / found.level_bound_db
        bias_db = np.abs(found.level_error_db.mean(axis=0)).max()
        scatter = found.level_error_db.std(axis=0, ddof=1)
        se = rms(found.se_db) / rms(scatter)
        level, f0 = rms(ratios), rms(found.f0_error)
        over = ", ".join(
            name
            for name, missed in (
                ("level", level > LEVEL_LIMIT),
                ("bias", bias_db > BIAS_LIMIT_DB),
                ("f0", f0 > F0_LIMIT),
                ("se", abs(se - 1.0) > SE_LIMIT),
            )
            if missed
        )
        print(
            f"{setting.f0_hz:8.0f} {setting.sample_rate_hz:8d} {setting.harmonics:6d} {setting.snr_db:7.0f}"
            f" {found.missed:7d} {level:6.3f} {ratios.max():6.3f} {bias_db:8.5f}"
            f" ({found.level_bound_db / np.sqrt(trials):.5f}) {f0:8.3f} {se:11.3f}  {over and 'over: '}{over}",
            flush=True,
        )
    few = max(2, trials // 20)
    print(f"\nVibrato of 30 cents at 6 Hz and a drift of 20 cents, 2 s, {few} trials a setting: largest error, dB.")
    print("   f0 Hz  rate Hz  harm.  SNR dB  missed  error")
    for setting in (
        Setting(f0_hz=f0_hz, sample_rate_hz=rate, snr_db=snr, length_s=2.0, vibrato_cents=30.0, drift_cents=20.0)
        for f0_hz in FUNDAMENTALS_HZ
        for rate in RATES_HZ
        for snr in SNRS_DB
    ):
        found = run(setting, few, np.random.default_rng(21))
        worst_db = float(np.abs(found.level_error_db).max(initial=0.0))
        print(
            f"{setting.f0_hz:8.0f} {setting.sample_rate_hz:8d} {setting.harmonics:6d} {setting.snr_db:7.0f}"
            f" {found.missed:7d} {worst_db:6.3f}  {'over' * (worst_db > VIBRATO_LIMIT_DB)}",
            flush=True,
        )
    print(f"\n{time.perf_counter() - began:.0f} s")


if __name__ == "__main__":
    main()
