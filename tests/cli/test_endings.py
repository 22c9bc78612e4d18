"""How commands end: wrong usage, help, exit codes and streams of a true process."""

import importlib.metadata
import os
from pathlib import Path

import pytest

from tests.cli.outputs import content, parsed, short_note
from tests.command_line import CommandLine, run_process
from tests.intake.sounds import write


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
        ["measure", "a.wav", "--out", "p.json", "--date", "2026-02-30"],
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


def test_a_wrong_date_is_explained(run: CommandLine, tmp_path: Path) -> None:
    ended = run("measure", "a.wav", "--out", tmp_path / "p.json", "--date", "1.3.2026")
    assert ended.code == 2
    assert all(part in ended.err for part in ("1.3.2026", "--date", "2026-03-01"))


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
