"""Input that cannot be measured: a clear message, exit status 1, no traceback, nothing written.

Among several recordings the good ones are measured all the same, the others listed, and the exit status is 3.
"""

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import soundfile

from tests.command_line import CommandLine, run_process
from tests.intake.sounds import RATE, played_note, write


def zero_bytes(folder: Path) -> Path:
    path = folder / "nothing.wav"
    path.touch()
    return path


def text_renamed(folder: Path) -> Path:
    path = folder / "letter.wav"
    path.write_text("Dear Sir, this is not a recording.\n" * 100)
    return path


def truncated_flac(folder: Path) -> Path:
    path = write(folder / "cut.flac", played_note())
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    return path


def silence(folder: Path) -> Path:
    return write(folder / "silence.flac", np.zeros(3 * RATE))


def quiet_dither(folder: Path) -> Path:
    steps = np.random.default_rng(1).integers(-1, 2, 3 * RATE)
    return write(folder / "dither.wav", steps / 2.0**15, subtype="PCM_16")


def pure_noise(folder: Path) -> Path:
    return write(folder / "noise.wav", 0.1 * np.random.default_rng(2).standard_normal(3 * RATE))


def click(folder: Path) -> Path:
    samples = np.zeros(2 * RATE)
    samples[RATE : RATE + RATE // 50] = 0.5 * np.random.default_rng(3).standard_normal(RATE // 50)
    return write(folder / "click.wav", samples)


def click_alone(folder: Path) -> Path:
    return write(folder / "short.wav", 0.5 * np.random.default_rng(4).standard_normal(RATE // 50))


def not_numbers(folder: Path) -> Path:
    samples = np.array(played_note())
    samples[RATE] = np.nan
    return write(folder / "nan.wav", samples, subtype="FLOAT")


def telephone(folder: Path) -> Path:
    return write(folder / "telephone.wav", played_note(rate=8000), rate=8000)


def million_zeros(folder: Path) -> Path:
    path = folder / "zeros.wav"
    soundfile.write(path, np.zeros(2_000_000), RATE)
    return path


def zeros_of_no_format(folder: Path) -> Path:
    path = folder / "zeros_alone.wav"
    path.write_bytes(bytes(2_000_000))
    return path


def missing(folder: Path) -> Path:
    return folder / "missing.wav"


def empty_folder(folder: Path) -> Path:
    path = folder / "empty"
    path.mkdir()
    return path


def folder_without_recordings(folder: Path) -> Path:
    path = folder / "papers"
    path.mkdir()
    (path / "bill.txt").write_text("one violin")
    return path


HOSTILE: dict[Callable[[Path], Path], str] = {
    zero_bytes: "0 bytes",
    text_renamed: "not a recording",
    truncated_flac: "breaks off",
    silence: "silent",
    quiet_dither: "",
    pure_noise: "no held note",
    click: "too short to hold a note",
    click_alone: "too short to hold a note",
    not_numbers: "not usable numbers",
    telephone: "8000 Hz",
    million_zeros: "silent",
    zeros_of_no_format: "not a recording",
    missing: "no such file",
    empty_folder: "no recording in this folder",
    folder_without_recordings: "no recording in this folder",
}
"""What is handed in, and words that the message must hold."""

each_hostile = pytest.mark.parametrize("make", HOSTILE, ids=lambda make: make.__name__)


@pytest.fixture
def results(tmp_path: Path) -> Path:
    """An empty folder for what a command writes."""
    folder = tmp_path / "results"
    folder.mkdir()
    return folder


@each_hostile
def test_measured_alone(run: CommandLine, make: Callable[[Path], Path], tmp_path: Path, results: Path) -> None:
    path = make(tmp_path)
    ended = run("measure", path, "--out", results / "p.json")
    ended.assert_plain_error(str(path), HOSTILE[make], "likely cause: ", "what to do: ")
    assert not list(results.iterdir())


@each_hostile
def test_listed_alone(run: CommandLine, make: Callable[[Path], Path], tmp_path: Path) -> None:
    path = make(tmp_path)
    ended = run("notes", path)
    ended.assert_plain_error(str(path), "what to do: ")


@each_hostile
def test_listed_as_json(run: CommandLine, make: Callable[[Path], Path], tmp_path: Path) -> None:
    path = make(tmp_path)
    ended = run("notes", path, "--json")
    assert ended.code == 1
    (entry,) = json.loads(ended.out)["recordings"]
    assert entry["recording"] == str(path)
    assert entry["notes"] == []
    assert entry["error"] in ended.err


@pytest.mark.parametrize("jobs", ["1", "2"])
def test_among_good_ones(run: CommandLine, jobs: str, tmp_path: Path, results: Path) -> None:
    good = [write(tmp_path / f"good_{n}.wav", played_note(440.0, held_s=0.7 + 0.1 * n, gap_s=0.25)) for n in (1, 2)]
    bad = [make(tmp_path) for make in HOSTILE]
    out = results / "p.json"
    ended = run("measure", good[0], *bad, good[1], "--out", out, "--jobs", jobs)
    assert ended.code == 3
    assert "Traceback" not in ended.err
    assert ended.err.count("timbre-match: ") == len(bad)
    for path, words in zip(bad, HOSTILE.values(), strict=True):
        assert f"timbre-match: {path}: " in ended.err
        assert words in ended.err
    takes = json.loads(out.read_text())["takes"]
    assert [source["file"] for take in takes for source in take["recordings"]] == ["good_1.wav", "good_2.wav"]
    assert [path.name for path in results.iterdir()] == [out.name]


def test_bad_ones_inside_the_folder_of_a_take(run: CommandLine, tmp_path: Path, results: Path) -> None:
    take = tmp_path / "take"
    take.mkdir()
    write(take / "good.wav", played_note(440.0, held_s=0.7, gap_s=0.25))
    zero_bytes(take)
    text_renamed(take)
    ended = run("measure", take, "--out", results / "p.json")
    assert ended.code == 3
    assert ended.err.count("timbre-match: ") == 2
    (only,) = json.loads((results / "p.json").read_text())["takes"]
    assert [source["file"] for source in only["recordings"]] == ["good.wav"]


def test_an_unreadable_file(run: CommandLine, tmp_path: Path, results: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write(tmp_path / "locked.wav", played_note())
    path.chmod(0)
    if os.access(path, os.R_OK):
        # Nothing is locked to the superuser, whom this test may run as.
        whole = Path.read_bytes

        def refuse(self: Path) -> bytes:
            if self == path:
                raise PermissionError(13, "Permission denied", str(path))
            return whole(self)

        monkeypatch.setattr(Path, "read_bytes", refuse)
    ended = run("measure", path, "--out", results / "p.json")
    ended.assert_plain_error(str(path), "may not be read", "likely cause: ", "what to do: ")
    assert not list(results.iterdir())


def test_a_pipe_is_not_waited_for(tmp_path: Path) -> None:
    path = tmp_path / "pipe.wav"
    os.mkfifo(path)
    run_process("notes", path, timeout_s=60.0).assert_plain_error(str(path), "pipe", "what to do: ")


# saved files


@pytest.fixture(scope="module")
def profile(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("profile")
    path = folder / "good.json"
    recording = write(folder / "good.wav", played_note(440.0, held_s=0.7, gap_s=0.25))
    assert run_process("measure", recording, "--out", path).code == 0
    return path


def wrong_type(content: Any) -> str:
    content["takes"][0]["notes"][0]["harmonics"][2]["level_db"] = "loud"
    return "takes[0].notes[0].harmonics[2].level_db"


def missing_key(content: Any) -> str:
    del content["takes"][0]["notes"][0]["f0_hz"]
    return "takes[0].notes[0].f0_hz"


def later_version(content: Any) -> str:
    content["version"] = 2
    return "version is 2"


def no_takes(content: Any) -> str:
    content["takes"] = []
    return "takes"


SPOILT: tuple[Callable[[Any], str], ...] = (wrong_type, missing_key, later_version, no_takes)


@pytest.mark.parametrize("spoil", SPOILT)
@pytest.mark.parametrize("command", ["compare", "compare with it", "target", "export"])
def test_a_spoilt_profile(
    run: CommandLine, command: str, spoil: Callable[[Any], str], profile: Path, tmp_path: Path, results: Path
) -> None:
    content = json.loads(profile.read_text())
    place = spoil(content)
    bad = tmp_path / "bad.json"
    bad.write_text(json.dumps(content))
    ways: dict[str, list[str | Path]] = {
        "compare": ["compare", bad, "--target", profile, "--out", results / "c.json"],
        "compare with it": ["compare", profile, "--target", bad, "--json"],
        "target": ["target", profile, bad, "--name", "both", "--out", results / "t.json"],
        "export": ["export", bad, "--format", "csv", "--out", results / "p.csv"],
    }
    run(*ways[command]).assert_plain_error(str(bad), place, "likely cause: ", "what to do: ")
    assert not list(results.iterdir())


@pytest.mark.parametrize(
    "data",
    [b"", b"{", b"[]", b"\xff\xfe\x00", b"[" * 100_000, b'{"format": 1}', b"NaN"],
    ids=lambda data: repr(data[:14]),
)
def test_a_file_that_is_no_profile(run: CommandLine, data: bytes, tmp_path: Path, results: Path) -> None:
    bad = tmp_path / "bad.json"
    bad.write_bytes(data)
    ended = run("export", bad, "--format", "json", "--out", results / "p.json")
    ended.assert_plain_error(str(bad), "likely cause: ", "what to do: ")
    assert not list(results.iterdir())
