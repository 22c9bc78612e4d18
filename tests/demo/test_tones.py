"""The demo's recordings are found, and their README tells the truth that they were made with."""

from pathlib import Path

import pytest

from timbre_match.demo import tones
from timbre_match.demo.plucked_workshop import (
    FINCH_AFTER_THE_WINTER,
    FINCH_STRUNG_UP,
    PLUCKED_NOTES,
    PLUCKED_STAGES,
    meant_pluck,
    plucked_file_name,
    true_partials,
)
from timbre_match.demo.plucking import WrittenPluck
from timbre_match.demo.workshop import HERON, STAGES, WREN_IN_THE_WHITE, WREN_VARNISHED, file_name
from timbre_match.errors import TimbreMatchError


def test_takes_come_in_the_order_of_the_build() -> None:
    found = tones.takes()
    assert list(found) == [HERON, WREN_IN_THE_WHITE, WREN_VARNISHED]
    for stage, paths in found.items():
        assert [path.name for path in paths] == [file_name(stage, take) for take in (1, 2, 3)]
        assert all(path.is_file() for path in paths)


def test_plucked_takes_come_in_the_order_of_the_stages() -> None:
    found = tones.plucked_takes()
    assert list(found) == [FINCH_STRUNG_UP, FINCH_AFTER_THE_WINTER]
    for stage, paths in found.items():
        assert [path.name for path in paths] == [plucked_file_name(stage, take) for take in (1, 2, 3)]
        assert all(path.is_file() for path in paths)


def test_installed_copy_is_found_beside_the_package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(tones, "_PLACES", (tmp_path / "nothing", tmp_path))
    for stage in STAGES:
        for take in (1, 2, 3):
            (tmp_path / file_name(stage, take)).touch()
    for plucked in PLUCKED_STAGES:
        for take in (1, 2, 3):
            (tmp_path / plucked_file_name(plucked, take)).touch()
    assert tones.tones_folder() == tmp_path
    (tmp_path / file_name(HERON, 2)).unlink()
    with pytest.raises(TimbreMatchError, match="not all there") as caught:
        tones.tones_folder()
    assert "timbre_match.demo.render" in caught.value.remedy


def test_readme_states_every_change() -> None:
    readme = (tones.tones_folder() / "README.md").read_text(encoding="utf-8")
    for stage in STAGES:
        rows = [line for line in readme.splitlines() if line.startswith(f"| {stage.instrument}, {stage.name} |")]
        assert len(rows) == max(len(stage.changes), 1)
        for row, change in zip(rows, stage.changes, strict=False):
            cells = [cell.strip() for cell in row.split("|")]
            assert cells[2:5] == [f"{change.low_hz:.0f}", f"{change.high_hz:.0f}", f"{change.gain_db:+.1f}"]


@pytest.mark.parametrize("written", PLUCKED_NOTES, ids=lambda written: written.note)
def test_readme_states_each_strings_stiffness_and_beats(written: WrittenPluck) -> None:
    readme = (tones.tones_folder() / "README.md").read_text(encoding="utf-8")
    (row,) = [line for line in readme.splitlines() if line.startswith(f"| {written.note} |")]
    b, beating = (cell.strip() for cell in row.split("|")[2:4])
    truth = true_partials(FINCH_STRUNG_UP, meant_pluck(written))
    assert float(b) == pytest.approx(truth.inharmonicity_b, rel=0.003)
    assert tuple(int(k) for k in beating.split(",")) == written.string.both_ways


def test_readme_states_the_change_of_sustain() -> None:
    readme = (tones.tones_folder() / "README.md").read_text(encoding="utf-8")
    for stage in PLUCKED_STAGES:
        rows = [line for line in readme.splitlines() if line.startswith(f"| {stage.instrument}, {stage.name} |")]
        assert len(rows) == max(len(stage.changes), 1)
        for row, change in zip(rows, stage.changes, strict=False):
            cells = [cell.strip() for cell in row.split("|")]
            assert cells[2:5] == [f"{change.low_hz:.0f}", f"{change.high_hz:.0f}", f"{change.t60_factor:g} times"]
