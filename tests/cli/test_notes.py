"""The command `notes`."""

from pathlib import Path

import numpy as np
import pytest

from tests.cli.outputs import NOTE_KEYS, PLAYED, parsed, short_note
from tests.command_line import CommandLine
from tests.intake.sounds import RATE, write
from timbre_match.units import note_to_hz


def test_notes_as_a_table(run: CommandLine, sounds: Path) -> None:
    ended = run("notes", sounds / "take_1.wav")
    assert (ended.code, ended.err) == (0, "")
    lines = [line.split() for line in ended.out.splitlines()]
    assert [words[0] for words in lines if words and words[0] in PLAYED] == list(PLAYED)


def test_notes_as_json_have_the_contract_s_keys(run: CommandLine, sounds: Path) -> None:
    ended = run("notes", sounds / "take_1.wav", "--json")
    assert (ended.code, ended.err) == (0, "")
    whole = parsed(ended.out)
    assert whole.keys() == {"recordings"}
    (recording,) = whole["recordings"]
    assert recording.keys() == {"recording", "sample_rate_hz", "channel", "channel_count", "warnings", "notes"}
    assert recording["sample_rate_hz"] == RATE
    assert [note["note"] for note in recording["notes"]] == list(PLAYED)
    for note, name in zip(recording["notes"], PLAYED, strict=True):
        assert note.keys() == NOTE_KEYS
        assert note["f0_hz"] == pytest.approx(note_to_hz(name), rel=1e-4)
        assert abs(note["cents"]) < 0.2
        assert note["kind"] == "held"
        assert 0 < note["start_s"] < note["end_s"]
        assert note["cycles"] == pytest.approx((note["end_s"] - note["start_s"]) * note["f0_hz"], abs=1.0)


def test_notes_of_good_and_bad_recordings(run: CommandLine, sounds: Path) -> None:
    ended = run("notes", sounds / "letter.wav", sounds / "take_1.wav", "--json")
    assert ended.code == 3
    bad, good = parsed(ended.out)["recordings"]
    assert bad["notes"] == []
    assert "letter.wav" in bad["error"]
    assert "error" not in good
    assert len(good["notes"]) == len(PLAYED)
    assert "letter.wav" in ended.err
    assert "Traceback" not in ended.err


def test_notes_of_bad_recordings_only(run: CommandLine, sounds: Path) -> None:
    run("notes", sounds / "letter.wav").assert_plain_error("letter.wav", "likely cause", "what to do")


def test_a_folder_stands_for_its_recordings(run: CommandLine, sounds: Path) -> None:
    ended = run("notes", sounds / "single", sounds / "take_1.wav", "--json")
    assert (ended.code, ended.err) == (0, "")
    recordings = parsed(ended.out)["recordings"]
    single = [str(sounds / "single" / name) for name in ("0_G3.flac", "1_D4.flac", "2_A4.flac")]
    assert [entry["recording"] for entry in recordings] == [*single, str(sounds / "take_1.wav")]
    assert [[note["note"] for note in entry["notes"]] for entry in recordings] == [["G3"], ["D4"], ["A4"], [*PLAYED]]


def test_a_folder_without_recordings(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    said = ("no recording in this folder", str(tmp_path), "likely cause", "what to do")
    run("notes", tmp_path).assert_plain_error(*said)
    run("measure", tmp_path, "--out", tmp_path / "p.json").assert_plain_error(*said)
    ended = run("notes", sounds / "take_1.wav", tmp_path, sounds / "single", "--json")
    assert ended.code == 3
    recordings = parsed(ended.out)["recordings"]
    assert [len(entry["notes"]) for entry in recordings] == [3, 0, 1, 1, 1]
    assert recordings[1].keys() == {"recording", "warnings", "error", "notes"}
    assert recordings[1]["error"] in ended.err


def test_notes_that_were_played(run: CommandLine, sounds: Path) -> None:
    ended = run("notes", sounds / "take_1.wav", "--notes", "D4, a4", "--json")
    assert [note["note"] for note in parsed(ended.out)["recordings"][0]["notes"]] == ["D4", "A4"]


def test_tuning_reference(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    low = write(tmp_path / "low.wav", short_note(415.0))
    named = {}
    for a4 in ("440", "415"):
        (note,) = parsed(run("notes", low, "--a4", a4, "--json").out)["recordings"][0]["notes"]
        named[a4] = (note["note"], round(note["cents"]))
    # 1200 log2(415 / 440) = -101.27 cents, which is 1.27 cents below G#4
    assert named == {"440": ("G#4", -1), "415": ("A4", 0)}


def test_channels_are_chosen_and_never_mixed(run: CommandLine, tmp_path: Path) -> None:
    both = np.stack([short_note(440.0, 0.3), short_note(293.66)], axis=1)
    stereo = write(tmp_path / "stereo.wav", both)
    heard = {}
    for options in ((), ("--channel", "1"), ("--channel", "2")):
        (recording,) = parsed(run("notes", stereo, *options, "--json").out)["recordings"]
        assert recording["channel_count"] == 2
        heard[options] = (recording["channel"], [note["note"] for note in recording["notes"]])
    assert heard == {(): (2, ["D4"]), ("--channel", "1"): (1, ["A4"]), ("--channel", "2"): (2, ["D4"])}
    run("notes", stereo, "--channel", "3").assert_plain_error("stereo.wav", "channel 3", "what to do")
