"""The command `demo`, on recordings whose true differences are known."""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from scipy import stats

from tests.cli.outputs import assert_comparison_keys, assert_figures, content
from tests.command_line import Ended, run_process
from timbre_match.demo.plucked_workshop import (
    FINCH_AFTER_THE_WINTER,
    PLUCKED_NOTES,
    PLUCKED_STAGES,
    PLUCKED_TAKES,
    true_sustain_factor,
)
from timbre_match.demo.workshop import NOTES, STAGES, WREN_IN_THE_WHITE, Stage, true_difference_db
from timbre_match.keep.files import load_comparison, load_profile

_BRIDGE_HILL_HZ = 2450.0


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> tuple[Ended, Path]:
    folder = tmp_path_factory.mktemp("demo") / "out"
    return run_process("demo", "--out", folder), folder


def test_demo_writes_everything(demo: tuple[Ended, Path]) -> None:
    ended, folder = demo
    assert (ended.code, ended.err) == (0, "")
    assert str(folder) in ended.out
    assert sorted(path.name for path in folder.iterdir()) == [
        "finch_after_the_winter",
        "finch_strung_up",
        "wren_in_the_white",
        "wren_varnished",
    ]
    for place in folder.glob("wren_*"):
        assert_figures(place)
        assert_comparison_keys(content(place / "comparison.json"))
        measured = load_profile(place / "profile.json")
        assert [[recipe.note for recipe in take.notes] for take in measured.takes] == [
            [written.note for written in NOTES]
        ] * 3
        assert "Colour distance" in (place / "comparison.txt").read_text(encoding="utf-8")
        assert (place / "profile.csv").stat().st_size > 0


@pytest.mark.parametrize("stage", STAGES[1:], ids=lambda stage: stage.file_stem)
def test_demo_holds_the_truth_of_each_stage(demo: tuple[Ended, Path], stage: Stage) -> None:
    comparison, _ = load_comparison(demo[1] / stage.file_stem / "comparison.json")
    hz = np.array([point.freq_hz for point in comparison.body_curve])
    low = np.array([point.simultaneous_low_db for point in comparison.body_curve])
    high = np.array([point.simultaneous_high_db for point in comparison.body_curve])
    # The curve's knots lie a sixth of an octave apart: it shows what is true on average over that.
    near = hz[:, None] * 2.0 ** np.linspace(-1.0 / 12.0, 1.0 / 12.0, 21)
    truth = np.mean(true_difference_db(stage, near), axis=1)
    assert np.all((low <= truth) & (truth <= high))
    for region in comparison.regions:
        inside = truth[(hz >= region.low_hz) & (hz <= region.high_hz)]
        largest = np.max(inside) if region.verdict == "stronger" else np.min(inside)
        assert region.difference_db.low <= largest <= region.difference_db.high
        assert (largest > 0) == (region.verdict == "stronger")
    assert any(region.low_hz < _BRIDGE_HILL_HZ < region.high_hz for region in comparison.regions)


@pytest.mark.parametrize("change", WREN_IN_THE_WHITE.changes, ids=lambda change: f"{change.gain_db:+g} dB")
def test_demo_finds_what_was_put_into_the_instrument(demo: tuple[Ended, Path], change: Any) -> None:
    comparison, suggestions = load_comparison(demo[1] / "wren_in_the_white" / "comparison.json")
    centre_hz = math.sqrt(change.low_hz * change.high_hz)
    (region,) = [region for region in comparison.regions if region.low_hz < centre_hz < region.high_hz]
    assert region.verdict == ("weaker" if change.gain_db < 0 else "stronger")
    assert region.difference_db.low <= change.gain_db <= region.difference_db.high
    assert abs(region.difference_db.value - change.gain_db) < 1.5
    assert abs(math.log2(math.sqrt(region.low_hz * region.high_hz) / centre_hz)) < 1.0 / 6.0
    assert region in [suggestion.region for suggestion in suggestions]


def test_demo_finds_nothing_else(demo: tuple[Ended, Path]) -> None:
    comparison, _ = load_comparison(demo[1] / "wren_in_the_white" / "comparison.json")
    assert len(comparison.regions) == len(WREN_IN_THE_WHITE.changes)


def test_demo_measures_the_plucked_instrument_and_compares_its_stages(demo: tuple[Ended, Path]) -> None:
    ended, folder = demo
    for stage in PLUCKED_STAGES:
        measured = load_profile(folder / stage.file_stem / "profile.json")
        assert (measured.instrument, measured.stage) == (stage.instrument, stage.name)
        assert [[recipe.note for recipe in take.notes] for take in measured.takes] == [
            [written.note for written in PLUCKED_NOTES]
        ] * PLUCKED_TAKES
        assert all(recipe.kind == "ringing" for take in measured.takes for recipe in take.notes)
        assert (folder / stage.file_stem / "profile.csv").stat().st_size > 0
    earlier, later = (folder / stage.file_stem for stage in PLUCKED_STAGES)
    assert not (earlier / "comparison.json").exists()
    assert_figures(later)
    assert_comparison_keys(content(later / "comparison.json"), ringing=True)
    assert "Finch, after the winter" in ended.out


def test_demo_finds_no_change_of_level_in_the_plucked_instrument(demo: tuple[Ended, Path]) -> None:
    # the winter changed how long its partials last, not how strong they begin
    comparison, suggestions = load_comparison(demo[1] / FINCH_AFTER_THE_WINTER.file_stem / "comparison.json")
    assert comparison.regions == ()
    assert all(suggestion.region is None for suggestion in suggestions)
    assert all(point.simultaneous_low_db <= 0.0 <= point.simultaneous_high_db for point in comparison.body_curve)
    assert not any(harmonic.verdict in ("stronger", "weaker") for harmonic in comparison.harmonics)


def test_demo_finds_the_sustain_that_the_winter_took(demo: tuple[Ended, Path]) -> None:
    comparison, suggestions = load_comparison(demo[1] / FINCH_AFTER_THE_WINTER.file_stem / "comparison.json")
    assert comparison.sustain is not None
    (change,) = FINCH_AFTER_THE_WINTER.changes
    (region,) = comparison.sustain.regions
    assert region.verdict == "shorter"
    assert region.ratio.low <= change.t60_factor <= region.ratio.high
    # each end within the sixth of an octave over which the change dies away
    for found_hz, true_hz in ((region.low_hz, change.low_hz), (region.high_hz, change.high_hz)):
        assert abs(math.log2(found_hz / true_hz)) < change.edge_octaves
    called = [one for one in comparison.sustain.harmonics if one.verdict in ("longer", "shorter")]
    false = [
        one
        for one in called
        if one.verdict == "longer" or true_sustain_factor(FINCH_AFTER_THE_WINTER, one.freq_hz) > 0.99
    ]
    # one in twenty of the verdicts may be false on average (Benjamini & Hochberg 1995), so more than one may be here
    assert len(false) <= stats.binom.ppf(0.999, len(called), 0.05)
    assert len(called) - len(false) >= 14
    low, high = (
        np.array([getattr(point, name) for point in comparison.sustain.curve])
        for name in ("simultaneous_low", "simultaneous_high")
    )
    hz = np.array([point.freq_hz for point in comparison.sustain.curve])
    near = hz[:, None] * 2.0 ** np.linspace(-1.0 / 12.0, 1.0 / 12.0, 21)
    truth = np.exp(np.mean(np.log(true_sustain_factor(FINCH_AFTER_THE_WINTER, near)), axis=1))
    assert np.all((low <= truth) & (truth <= high))
    assert any("Partials between" in suggestion.evidence for suggestion in suggestions)
