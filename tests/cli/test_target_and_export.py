"""The commands `target` and `export`: what is made of profiles."""

import csv
from pathlib import Path

import numpy as np
import pytest
import soundfile

from tests.cli.outputs import assert_same, content
from tests.command_line import CommandLine


def test_target_keeps_its_members_whole(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    out = tmp_path / "t.json"
    ended = run("target", profile, profile, "--name", "the last two", "--out", out)
    assert (ended.code, ended.err) == (0, "")
    whole = content(out)
    assert whole.keys() == {"format", "version", "name", "members"}
    assert (whole["format"], whole["version"], whole["name"]) == ("timbre-match/target", 1, "the last two")
    head = {"format", "version"}
    body = {key: value for key, value in content(profile).items() if key not in head}
    assert_same(whole["members"], [body, body])


def test_target_of_something_else(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    ended = run("target", sounds / "take_1.wav", "--name", "x", "--out", tmp_path / "t.json")
    ended.assert_plain_error("take_1.wav", "likely cause", "what to do")
    assert not list(tmp_path.iterdir())


def test_export_csv_has_a_row_per_take_note_and_harmonic(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    out = tmp_path / "wren.csv"
    assert run("export", profile, "--format", "csv", "--out", out).code == 0
    with out.open(newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    counted = [
        (str(number), note["note"], str(harmonic["k"]))
        for number, take in enumerate(content(profile)["takes"], start=1)
        for note in take["notes"]
        for harmonic in note["harmonics"]
    ]
    assert [(row["take"], row["note"], row["k"]) for row in rows] == counted


def test_export_json_is_the_profile(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    out = tmp_path / "copy.json"
    assert run("export", profile, "--format", "json", "--out", out).code == 0
    assert_same(out.read_bytes(), profile.read_bytes())


def test_export_cycles_are_one_period_per_note(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    out = tmp_path / "cycles"
    assert run("export", profile, "--format", "cycles", "--out", out).code == 0
    assert sorted(path.name for path in out.iterdir()) == ["A4.wav", "D4.wav", "G3.wav"]
    period, _ = soundfile.read(out / "A4.wav")
    assert len(period) == 2048
    amplitude = np.abs(np.fft.rfft(period))[1:21]
    assert amplitude / amplitude[0] == pytest.approx([1.0 / k for k in range(1, 21)], rel=0.01)
