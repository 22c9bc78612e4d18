"""The demo's recordings are found, and their README tells the truth that they were made with."""

from pathlib import Path

import pytest

from timbre_match.demo import tones
from timbre_match.demo.workshop import HERON, STAGES, WREN_IN_THE_WHITE, WREN_VARNISHED, file_name
from timbre_match.errors import TimbreMatchError


def test_takes_come_in_the_order_of_the_build() -> None:
    found = tones.takes()
    assert list(found) == [HERON, WREN_IN_THE_WHITE, WREN_VARNISHED]
    for stage, paths in found.items():
        assert [path.name for path in paths] == [file_name(stage, take) for take in (1, 2, 3)]
        assert all(path.is_file() for path in paths)


def test_installed_copy_is_found_beside_the_package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(tones, "_PLACES", (tmp_path / "nothing", tmp_path))
    for stage in STAGES:
        for take in (1, 2, 3):
            (tmp_path / file_name(stage, take)).touch()
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
