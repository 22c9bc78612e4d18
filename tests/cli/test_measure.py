"""The command `measure`."""

import hashlib
import os
from pathlib import Path

import numpy as np
import pytest

import timbre_match as tm
from tests.cli.outputs import HARMONIC_KEYS, NOTE_KEYS, PLAYED, PROFILE_ADDED, PROFILE_CONTRACT, assert_same, content
from tests.command_line import CommandLine


def test_profile_has_exactly_the_contract_s_keys(profile: Path, sounds: Path) -> None:
    whole = content(profile)
    assert whole.keys() == PROFILE_CONTRACT | PROFILE_ADDED
    assert (whole["format"], whole["version"]) == ("timbre-match/profile", 1)
    assert (whole["instrument"], whole["stage"], whole["family"], whole["a4_hz"]) == ("Wren", "", "violin", 440.0)
    assert whole["session"] == {"date": "", "room": "", "microphone": ""}
    assert len(whole["takes"]) == 2
    for number, take in enumerate(whole["takes"], start=1):
        assert take.keys() == {"recordings", "notes"}
        file = sounds / f"take_{number}.wav"
        assert take["recordings"] == [{"file": file.name, "sha256": hashlib.sha256(file.read_bytes()).hexdigest()}]
        assert [note["note"] for note in take["notes"]] == list(PLAYED)
        for note in take["notes"]:
            assert note.keys() == NOTE_KEYS | {"points_per_cycle", "harmonics"}
            assert [harmonic["k"] for harmonic in note["harmonics"]] == list(range(1, len(note["harmonics"]) + 1))
            for harmonic in note["harmonics"]:
                assert harmonic.keys() == HARMONIC_KEYS
                assert (harmonic["level_db"] is None) == (not harmonic["heard"])


def test_levels_are_those_that_were_synthesised(profile: Path) -> None:
    # amplitudes 1/k for k = 1 ... 20, so 20 log10(1/k) less the level of the whole
    power = np.array([1.0 / k**2 for k in range(1, 21)])
    true_db = 10.0 * np.log10(power / power.sum())
    for take in content(profile)["takes"]:
        for note in take["notes"]:
            levels = [harmonic["level_db"] for harmonic in note["harmonics"][:20]]
            assert levels == pytest.approx(true_db, abs=0.1)
            assert not any(harmonic["heard"] for harmonic in note["harmonics"][22:])


def test_measure_says_what_it_did(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    out = tmp_path / "wren.json"
    ended = run("measure", sounds / "take_1.wav", "--out", out, "--instrument", "Wren", "--stage", "in the white")
    assert (ended.code, ended.err) == (0, "")
    assert "Wren" in ended.out
    assert "in the white" in ended.out
    assert str(out) in ended.out
    assert [path.name for path in tmp_path.iterdir()] == [out.name]


def test_the_session_is_noted(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    out = tmp_path / "wren.json"
    noted = ("--date", "2026-03-01", "--room", "workshop", "--microphone", "small condenser, 0.7 m")
    ended = run("measure", sounds / "single" / "2_A4.flac", "--out", out, *noted)
    assert (ended.code, ended.err) == (0, "")
    assert content(out)["session"] == {
        "date": "2026-03-01",
        "room": "workshop",
        "microphone": "small condenser, 0.7 m",
    }


def test_the_session_is_noted_from_python(sounds: Path) -> None:
    session = tm.Session(date="2026-03-01", room="workshop")
    assert tm.measure_profile([sounds / "single" / "2_A4.flac"], session=session).session == session


def test_a_folder_is_one_take(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    out = tmp_path / "p.json"
    assert run("measure", sounds / "single", sounds / "take_1.wav", "--out", out).code == 0
    first, second = content(out)["takes"]
    assert [source["file"] for source in first["recordings"]] == ["0_G3.flac", "1_D4.flac", "2_A4.flac"]
    assert [note["note"] for note in first["notes"]] == [note["note"] for note in second["notes"]] == list(PLAYED)


def test_side_by_side_gives_the_same_profile(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    written = []
    for jobs in ("1", "2"):
        out = tmp_path / f"jobs_{jobs}.json"
        ended = run("measure", sounds / "single", sounds / "take_2.wav", "--out", out, "--jobs", jobs)
        assert (ended.code, ended.err) == (0, "")
        written.append(out.read_bytes())
    assert_same(written[0], written[1])


def test_measure_goes_on_without_the_bad_ones(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    out = tmp_path / "p.json"
    ended = run("measure", sounds / "letter.wav", sounds / "take_1.wav", sounds / "none.wav", "--out", out)
    assert ended.code == 3
    assert ended.err.count("timbre-match: ") == 2
    assert "letter.wav" in ended.err
    assert "none.wav" in ended.err
    assert [source["file"] for take in content(out)["takes"] for source in take["recordings"]] == ["take_1.wav"]


def test_measure_without_a_single_good_one(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    ended = run("measure", sounds / "letter.wav", sounds / "none.wav", "--out", tmp_path / "p.json")
    ended.assert_plain_error("letter.wav", "none.wav", "likely cause", "what to do")
    assert not list(tmp_path.iterdir())


def test_a_place_that_cannot_be_written_is_named_before_the_work(
    run: CommandLine, sounds: Path, tmp_path: Path
) -> None:
    # Had the recording been read first, the message would be about that.
    for out, said in ((tmp_path / "missing" / "p.json", "folder does not exist"), (tmp_path, "this is a folder")):
        ended = run("measure", sounds / "letter.wav", "--out", out)
        ended.assert_plain_error(str(out), said, "what to do")
        assert "letter.wav" not in ended.err
    assert not list(tmp_path.iterdir())


def test_an_interrupted_command_leaves_what_was_there(
    run: CommandLine, sounds: Path, profile: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    earlier = profile.read_bytes()
    out = tmp_path / "p.json"
    out.write_bytes(earlier)

    def interrupt(handle: int) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    ended = run("measure", sounds / "take_1.wav", "--out", out)
    assert (ended.code, ended.out) == (130, "")
    assert ended.err == "timbre-match: interrupted; no file was left half written\n"
    assert_same(out.read_bytes(), earlier)
    assert [path.name for path in tmp_path.iterdir()] == [out.name]
