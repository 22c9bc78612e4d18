"""The command `demo`, on recordings whose true differences are known."""

import math
from pathlib import Path
from typing import Any

import pytest

from tests.cli.outputs import assert_comparison_keys, assert_figures, content
from tests.command_line import Ended, run_process
from timbre_match.demo.workshop import NOTES, WREN_IN_THE_WHITE
from timbre_match.keep.files import load_comparison, load_profile


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> tuple[Ended, Path]:
    folder = tmp_path_factory.mktemp("demo") / "out"
    return run_process("demo", "--out", folder), folder


def test_demo_writes_everything(demo: tuple[Ended, Path]) -> None:
    ended, folder = demo
    assert (ended.code, ended.err) == (0, "")
    assert str(folder) in ended.out
    assert sorted(path.name for path in folder.iterdir()) == ["wren_in_the_white", "wren_varnished"]
    for place in folder.iterdir():
        assert_figures(place)
        assert_comparison_keys(content(place / "comparison.json"))
        measured = load_profile(place / "profile.json")
        assert [[recipe.note for recipe in take.notes] for take in measured.takes] == [
            [written.note for written in NOTES]
        ] * 3
        assert "Colour distance" in (place / "comparison.txt").read_text(encoding="utf-8")
        assert (place / "profile.csv").stat().st_size > 0


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
