"""What tests of several commands share: sounds to give to them, and checks of what they print and write."""

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.intake.sounds import played_note

PLAYED = ("G3", "D4", "A4")

# The contract: keys that programs outside this repository read.
NOTE_KEYS = {"note", "f0_hz", "cents", "start_s", "end_s", "cycles", "kind"}
PROFILE_CONTRACT = {"format", "version", "instrument", "stage", "family", "a4_hz", "takes"}
PROFILE_ADDED = {"session"}
HARMONIC_KEYS = {"k", "freq_hz", "level_db", "se_db", "floor_db", "heard", "phase_rad"}
COMPARISON_CONTRACT = {
    "format",
    "version",
    "colour_distance_db",
    "closeness_percent",
    "repeatability",
    "harmonics",
    "body_curve",
    "regions",
    "suggestions",
}
COMPARISON_ADDED = {"instrument", "stage", "family", "target", "margin_db", "remarks"}
DIFFERENCE_KEYS = {"note", "k", "freq_hz", "difference_db", "low_db", "high_db", "p", "verdict", "takes_needed"}
RINGING_ADDED = {"sustain", "pluck", "strings"}
CURVE_KEYS = {"freq_hz", "difference_db", "low_db", "high_db", "simultaneous_low_db", "simultaneous_high_db"}
REGION_KEYS = {"low_hz", "high_hz", "difference_db", "low_db", "high_db", "verdict", "harmonics", "notes"}
SUGGESTION_KEYS = {"rank", "region", "evidence", "moves", "cautions"}


def short_note(f0_hz: float, gain: float = 1.0) -> np.ndarray[Any, np.dtype[np.float64]]:
    return gain * played_note(f0_hz, held_s=0.7, gap_s=0.25)


def parsed(text: str) -> Any:
    """JSON and nothing else, without the numbers that JSON does not know."""
    return json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} in JSON"))


def content(path: Path) -> Any:
    return parsed(path.read_text(encoding="utf-8"))


def assert_same(one: object, other: object) -> None:
    """Like an equality assertion, but without a line-by-line comparison of whole profiles, which can take minutes."""
    same = one == other
    assert same


def assert_comparison_keys(whole: Any, *, ringing: bool = False) -> None:
    assert whole.keys() == COMPARISON_CONTRACT | COMPARISON_ADDED | (RINGING_ADDED if ringing else set())
    assert (whole["format"], whole["version"]) == ("timbre-match/comparison", 1)
    assert whole["colour_distance_db"].keys() == {"value", "low", "high", "own"}
    assert whole["closeness_percent"].keys() == {"value", "low", "high"}
    assert whole["repeatability"].keys() == {"source", "takes", "target_takes"}
    for name, keys in (("harmonics", DIFFERENCE_KEYS), ("body_curve", CURVE_KEYS), ("regions", REGION_KEYS)):
        assert all(entry.keys() == keys for entry in whole[name])
    for suggestion in whole["suggestions"]:
        assert suggestion.keys() == SUGGESTION_KEYS
        assert suggestion["region"] is None or suggestion["region"].keys() == REGION_KEYS
        assert all(move.keys() == {"text", "reversible", "basis"} for move in suggestion["moves"])


def assert_figures(folder: Path) -> None:
    for name in ("recipes", "differences", "body_curve"):
        assert (folder / f"{name}.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")
        assert "<svg" in (folder / f"{name}.svg").read_text(encoding="utf-8")[:2000]
