"""The command line: every command, what it writes where, and how it ends."""

import csv
import hashlib
import importlib.metadata
import json
import math
import os
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

from tests.command_line import CommandLine, Ended, run_process
from tests.intake.sounds import RATE, played_note, write
from timbre_match.demo.workshop import NOTES, WREN_IN_THE_WHITE
from timbre_match.keep.files import load_comparison, load_profile
from timbre_match.units import note_to_hz

PLAYED = ("G3", "D4", "A4")

# The contract: keys that programs outside this repository read.
NOTE_KEYS = {"note", "f0_hz", "cents", "start_s", "end_s", "cycles", "kind"}
PROFILE_KEYS = {"format", "version", "instrument", "stage", "family", "a4_hz", "takes"}
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
CURVE_KEYS = {"freq_hz", "difference_db", "low_db", "high_db", "simultaneous_low_db", "simultaneous_high_db"}
REGION_KEYS = {"low_hz", "high_hz", "difference_db", "low_db", "high_db", "verdict", "harmonics", "notes"}
SUGGESTION_KEYS = {"rank", "region", "evidence", "moves", "cautions"}


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> CommandLine:
    return CommandLine(capsys, monkeypatch)


def short_note(f0_hz: float, gain: float = 1.0) -> np.ndarray[Any, np.dtype[np.float64]]:
    return gain * played_note(f0_hz, held_s=0.7, gap_s=0.25)


@pytest.fixture(scope="module")
def sounds(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two takes of three notes, a folder with each note as a file, and a file that is no recording."""
    folder = tmp_path_factory.mktemp("sounds")
    for take, gain in ((1, 1.0), (2, 0.7)):
        write(folder / f"take_{take}.wav", np.concatenate([short_note(note_to_hz(note), gain) for note in PLAYED]))
    (folder / "single").mkdir()
    for order, note in enumerate(PLAYED):
        write(folder / "single" / f"{order}_{note}.flac", short_note(note_to_hz(note)))
    (folder / "single" / "remarks.txt").write_text("gut strings, 55 % humidity\n")
    (folder / "letter.wav").write_text("Dear Sir, this is not a recording.\n" * 50)
    return folder


@pytest.fixture(scope="module")
def profile(sounds: Path) -> Path:
    path = sounds / "wren.json"
    takes = [sounds / "take_1.wav", sounds / "take_2.wav"]
    ended = run_process("measure", *takes, "--out", path, "--instrument", "Wren", "--family", "violin")
    assert (ended.code, ended.err) == (0, "")
    return path


def parsed(text: str) -> Any:
    """JSON and nothing else, without the numbers that JSON does not know."""
    return json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} in JSON"))


def content(path: Path) -> Any:
    return parsed(path.read_text(encoding="utf-8"))


def assert_same(one: object, other: object) -> None:
    """Like an equality assertion, but without a line-by-line comparison of whole profiles, which can take minutes."""
    same = one == other
    assert same


# notes


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


# measure


def test_profile_has_exactly_the_contract_s_keys(profile: Path, sounds: Path) -> None:
    whole = content(profile)
    assert whole.keys() == PROFILE_KEYS
    assert (whole["format"], whole["version"]) == ("timbre-match/profile", 1)
    assert (whole["instrument"], whole["stage"], whole["family"], whole["a4_hz"]) == ("Wren", "", "violin", 440.0)
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


def test_a_folder_that_is_not_there_is_named(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    ended = run("measure", sounds / "take_1.wav", "--out", tmp_path / "missing" / "p.json")
    assert ended.code == 1
    assert "folder does not exist" in ended.err
    assert "what to do" in ended.err
    assert "Traceback" not in ended.err
    assert not list(tmp_path.iterdir())


def test_an_interrupted_command_leaves_what_was_there(
    run: CommandLine, sounds: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    out = tmp_path / "p.json"
    out.write_text("the earlier profile")

    def interrupt(handle: int) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    ended = run("measure", sounds / "take_1.wav", "--out", out)
    assert ended.code not in (0, 3)
    assert "Traceback" not in ended.err
    assert out.read_text() == "the earlier profile"
    assert [path.name for path in tmp_path.iterdir()] == [out.name]


# target


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


# compare


def assert_comparison_keys(whole: Any) -> None:
    assert whole.keys() == COMPARISON_CONTRACT | COMPARISON_ADDED
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


def test_compare_prints_json_and_nothing_else(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    out = tmp_path / "c.json"
    ended = run("compare", profile, "--target", profile, "--json", "--out", out)
    assert (ended.code, ended.err) == (0, "")
    whole = parsed(ended.out)
    assert_same(whole, content(out))
    assert_comparison_keys(whole)
    assert whole["harmonics"]
    assert whole["body_curve"]


def test_an_instrument_against_itself(run: CommandLine, profile: Path) -> None:
    whole = parsed(run("compare", profile, "--target", profile, "--json").out)
    assert whole["regions"] == []
    assert whole["suggestions"] == []
    assert {entry["verdict"] for entry in whole["harmonics"]} <= {"alike", "unsettled"}
    # Estimates are means of random draws: what is left of nothing is the error of that mean, far inside each interval.
    assert all(
        abs(entry["difference_db"]) < 0.06 * (entry["high_db"] - entry["low_db"]) for entry in whole["harmonics"]
    )


def test_margin_is_passed_on(run: CommandLine, profile: Path) -> None:
    whole = {
        margin: parsed(run("compare", profile, "--target", profile, "--margin", margin, "--json").out)
        for margin in ("0.1", "20")
    }
    alike = {margin: sum(row["verdict"] == "alike" for row in entry["harmonics"]) for margin, entry in whole.items()}
    assert [entry["margin_db"] for entry in whole.values()] == [0.1, 20.0]
    # A harmonic or two in the middle of few can define the reference level, and is then known by definition.
    assert alike["0.1"] < 0.5 * alike["20"]
    assert alike["20"] == len(whole["20"]["harmonics"])


def test_compare_for_human_eyes(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    ended = run("compare", profile, "--target", profile, "--figures", tmp_path / "figures")
    assert (ended.code, ended.err) == (0, "")
    assert "Colour distance" in ended.out
    assert "Closeness" in ended.out
    assert str(tmp_path / "figures") in ended.out
    assert_figures(tmp_path / "figures")


def assert_figures(folder: Path) -> None:
    for name in ("recipes", "differences", "body_curve"):
        assert (folder / f"{name}.png").read_bytes().startswith(b"\x89PNG\r\n\x1a\n")
        assert "<svg" in (folder / f"{name}.svg").read_text(encoding="utf-8")[:2000]


def test_nothing_in_common(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    other = tmp_path / "other.json"
    assert run("measure", write(tmp_path / "c6.wav", short_note(1046.5)), "--out", other).code == 0
    before = sorted(tmp_path.iterdir())
    ended = run("compare", profile, "--target", other, "--out", tmp_path / "c.json", "--figures", tmp_path / "figures")
    ended.assert_plain_error("likely cause", "what to do")
    assert sorted(tmp_path.iterdir()) == before


# export


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


# demo


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


# how commands end


@pytest.mark.parametrize(
    "arguments",
    [
        ["polish"],
        ["notes"],
        ["measure", "a.wav"],
        ["measure", "--out", "p.json"],
        ["compare", "p.json"],
        ["compare", "p.json", "--target", "t.json", "--margin", "0"],
        ["compare", "p.json", "--target", "t.json", "--control-now", "c.json"],
        ["compare", "p.json", "--target", "t.json", "--control-then", "c.json"],
        ["export", "p.json", "--format", "xls", "--out", "x"],
        ["notes", "a.wav", "--a4", "300"],
        ["notes", "a.wav", "--channel", "0"],
        ["notes", "a.wav", "--notes", "H7"],
        ["notes", "a.wav", "--notes", ""],
        ["measure", "a.wav", "--out", "p.json", "--jobs", "0"],
        ["measure", "a.wav", "--out", "p.json", "--louder"],
    ],
    ids=" ".join,
)
def test_wrong_usage_ends_with_2(
    run: CommandLine, arguments: list[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    ended = run(*arguments)
    assert ended.code == 2
    assert ended.out == ""
    assert ended.err
    assert "Traceback" not in ended.err
    assert not list(tmp_path.iterdir())


def test_a_wrong_note_name_is_explained(run: CommandLine) -> None:
    ended = run("notes", "a.wav", "--notes", "G3 H7")
    assert "H7" in ended.err
    assert "--notes" in ended.err


@pytest.mark.parametrize("command", ["notes", "measure", "target", "compare", "export", "demo"])
def test_every_command_has_help(run: CommandLine, command: str) -> None:
    ended = run(command, "--help")
    assert ended.code == 0
    assert command in ended.out
    assert run(command, "-h").out == ended.out


def test_help_lists_every_command(run: CommandLine) -> None:
    out = run("--help").out
    assert all(command in out for command in ("notes", "measure", "target", "compare", "export", "demo"))


def test_version_is_the_installed_one(run: CommandLine) -> None:
    try:
        version = importlib.metadata.version("timbre-match")
    except importlib.metadata.PackageNotFoundError:
        pytest.skip("timbre-match is not installed here, only on the path")
    assert run("--version").out == f"timbre-match {version}\n"


def test_exit_codes_and_streams_of_a_true_process(sounds: Path, tmp_path: Path) -> None:
    good, bad, out = sounds / "single" / "2_A4.flac", sounds / "letter.wav", tmp_path / "p.json"
    assert parsed(run_process("notes", good, "--json").out)["recordings"][0]["notes"][0]["note"] == "A4"
    part = run_process("measure", bad, good, "--out", out)
    assert part.code == 3
    assert "letter.wav" in part.err
    assert "letter.wav" not in part.out
    assert content(out)["takes"]
    wrong = run_process("measure", good)
    assert (wrong.code, wrong.out) == (2, "")
    run_process("notes", bad).assert_plain_error("letter.wav", "likely cause", "what to do")


def test_a_terminal_that_lacks_the_signs(profile: Path) -> None:
    ended = run_process("compare", profile, "--target", profile, encoding="ascii")
    assert (ended.code, ended.err) == (0, "")
    assert "? stronger" in ended.out


def test_a_name_that_is_no_text(tmp_path: Path) -> None:
    path = tmp_path / os.fsdecode(b"na\xefve.wav")
    write(tmp_path / "plain.wav", short_note(440.0)).rename(path)
    ended = run_process("notes", path, "--json")
    assert (ended.code, ended.err) == (0, "")
    assert os.fsencode(parsed(ended.out)["recordings"][0]["recording"]) == os.fsencode(path)
    assert run_process("notes", path).code == 0
