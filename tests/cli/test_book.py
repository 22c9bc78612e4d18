"""The commands of the bench book."""

import unicodedata
from pathlib import Path

import numpy as np
import pytest

from tests.cli.outputs import PLAYED, content, parsed, short_note
from tests.command_line import CommandLine, run_process
from tests.intake.sounds import write
from tests.keep.books import NAMES
from timbre_match.units import note_to_hz

CONDITIONS = {
    "date": "2026-03-01",
    "room": "workshop, by the window",
    "microphone": "small condenser",
    "microphone_distance_m": 0.7,
    "player": "the maker",
    "bow": "the light one",
    "strings": "gut",
    "temperature_c": 21.5,
    "humidity_percent": 45.0,
    "a4_hz": 442.0,
    "remarks": "after a week of rain",
}
OPTIONS = (
    *("--date", "2026-03-01", "--room", "workshop, by the window", "--microphone", "small condenser"),
    *("--distance", "0.7", "--player", "the maker", "--bow", "the light one", "--strings", "gut"),
    *("--temperature", "21.5", "--humidity", "45", "--a4", "442", "--remark", "after a week of rain"),
)
COMMANDS = (
    *("add", "log", "list", "show", "notes", "rename", "aside", "remeasure", "profile"),
    *("check", "backup", "restore", "export", "import"),
)


@pytest.fixture
def book(run: CommandLine, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A book with one instrument, where the environment variable says."""
    path = tmp_path / "bench.sqlite"
    monkeypatch.setenv("TIMBRE_MATCH_BOOK", str(path))
    assert run("book", "add", "Heron 7", "--family", "violin", "--remark", "one-piece back").code == 0
    return path


@pytest.fixture(scope="session")
def control(sounds: Path) -> Path:
    """A take of an instrument that does not change."""
    return write(sounds / "control.wav", np.concatenate([short_note(note_to_hz(note), 0.9) for note in PLAYED]))


@pytest.mark.usefixtures("book")
def test_a_session_from_logging_to_the_profile(run: CommandLine, sounds: Path, control: Path, tmp_path: Path) -> None:
    takes = (sounds / "take_1.wav", sounds / "take_2.wav")
    ended = run(
        *("book", "log", "heron 7", "--stage", "in the white", *takes),
        *("--control", control, "--control-name", "Old Faithful", "--keep-audio", *OPTIONS),
    )
    assert (ended.code, ended.err) == (0, "")
    assert "Heron 7" in ended.out
    assert "2 takes, 6 notes; 1 take of the control" in ended.out
    shown = parsed(run("book", "show", "Heron 7", "--json").out)
    assert (shown["name"], shown["family"], shown["remarks"]) == ("Heron 7", "violin", "one-piece back")
    ((session,),) = [stage["sessions"] for stage in shown["stages"]]
    assert session["conditions"] == CONDITIONS
    assert [(take["role"], take["number"]) for take in session["takes"]] == [
        ("instrument", 1),
        ("instrument", 2),
        ("control", 1),
    ]
    for take, file in zip(session["takes"], (*takes, control), strict=True):
        (recording,) = take["recordings"]
        assert (recording["file"], recording["path"]) == (file.name, str(file))
        assert Path(recording["kept"]).read_bytes() == file.read_bytes()
    assert [(each["role"], each["instrument"]) for each in session["measurements"]] == [
        ("instrument", "Heron 7"),
        ("control", "Old Faithful"),
    ]
    page = run("book", "show", "Heron 7").out
    assert all(word in page for word in ("in the white", "Old Faithful", "0.7 m", "21.5 °C", "45 % humidity", "gut"))
    listed = parsed(run("book", "list", "--json").out)
    (line,) = listed["instruments"]
    assert (line["session_count"], line["last_stage"], line["last_day"]) == (1, "in the white", "2026-03-01")
    now, then = tmp_path / "now.json", tmp_path / "then.json"
    assert run("book", "profile", "Heron 7", "--out", now).code == 0
    assert run("book", "profile", "Heron 7", "--control", "--out", then).code == 0
    assert content(now)["session"] == {
        "date": "2026-03-01",
        "room": "workshop, by the window",
        "microphone": "small condenser, 0.7 m",
    }
    assert (content(now)["stage"], content(now)["a4_hz"]) == ("in the white", 442.0)
    assert content(then)["instrument"] == "Old Faithful"
    assert run("compare", now, "--target", then).code == 0


@pytest.mark.usefixtures("book")
def test_the_good_takes_are_logged_and_the_others_listed(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    silent = write(tmp_path / "breath.wav", 0.1 * np.random.default_rng(2).standard_normal(2 * 44_100))
    ended = run(
        *("book", "log", "Heron 7", "--stage", "varnished"),
        *(sounds / "take_1.wav", sounds / "letter.wav", silent, "--control", sounds / "none.wav"),
    )
    assert ended.code == 3
    assert ended.err.count("timbre-match: ") == 3
    assert all(name in ended.err for name in ("letter.wav", "breath.wav", "none.wav"))
    assert "no control" in ended.out
    (stage,) = parsed(run("book", "show", "Heron 7", "--json").out)["stages"]
    takes = stage["sessions"][0]["takes"]
    assert [recording["file"] for take in takes for recording in take["recordings"]] == ["take_1.wav", "breath.wav"]
    checked = run("book", "check", "--json")
    assert checked.code == 0
    assert [(each["file"], each["take_number"]) for each in parsed(checked.out)["unmeasured"]] == [("breath.wav", 2)]
    assert "breath.wav" in run("book", "check").out


@pytest.mark.usefixtures("book")
def test_nothing_is_logged_where_nothing_can_be_used(run: CommandLine, sounds: Path) -> None:
    ended = run("book", "log", "Heron 7", "--stage", "varnished", sounds / "letter.wav")
    ended.assert_plain_error("letter.wav", "likely cause", "what to do")
    assert parsed(run("book", "show", "Heron 7", "--json").out)["stages"] == []


@pytest.mark.usefixtures("book")
def test_a_recording_is_not_take_and_control_at_once(run: CommandLine, sounds: Path) -> None:
    take = sounds / "take_1.wav"
    run("book", "log", "Heron 7", "--stage", "varnished", take, "--control", take).assert_plain_error("of the control")


@pytest.mark.usefixtures("book")
def test_measured_anew_and_the_earlier_stays(run: CommandLine, sounds: Path, tmp_path: Path) -> None:
    folder = tmp_path / "take"
    folder.mkdir()
    for file in (sounds / "single").glob("*.flac"):
        (folder / file.name).write_bytes(file.read_bytes())
    assert run("book", "log", "Heron 7", "--stage", "varnished", folder, "--keep-audio").code == 0
    before, after = tmp_path / "before.json", tmp_path / "after.json"
    assert run("book", "profile", "Heron 7", "--out", before).code == 0
    for file in folder.iterdir():
        file.unlink()
    # From the copies in the book's own folder, and yet under the names that they were logged with.
    # The file with the A4 holds none of the notes that are named now.
    assert run("book", "remeasure", "Heron 7", "--notes", "G3 D4").code == 3
    assert run("book", "profile", "Heron 7", "--out", after).code == 0
    assert [note["note"] for note in content(before)["takes"][0]["notes"]] == list(PLAYED)
    assert content(after)["takes"][0]["recordings"] == content(before)["takes"][0]["recordings"][:2]
    ((session,),) = [stage["sessions"] for stage in parsed(run("book", "show", "Heron 7", "--json").out)["stages"]]
    assert len(session["measurements"]) == 2
    assert "measured 2 times" in run("book", "show", "Heron 7").out


def test_checked_backed_up_restored_and_carried_over(
    run: CommandLine, sounds: Path, book: Path, tmp_path: Path
) -> None:
    take = tmp_path / "take.wav"
    take.write_bytes((sounds / "take_1.wav").read_bytes())
    assert run("book", "log", "Heron 7", "--stage", "varnished", take, "--keep-audio").code == 0
    drive = tmp_path / "drive"
    drive.mkdir()
    assert run("book", "backup", drive / "copy.sqlite").code == 0
    assert run("book", "check").code == 0
    take.write_bytes(b"altered")
    altered = run("book", "check")
    assert altered.code == 1
    assert str(take) in altered.out
    take.unlink()
    missing = run("book", "check", "--json")
    assert missing.code == 1
    assert [each["lying"] for each in parsed(missing.out)["recordings"]] == ["in place", "missing"]
    assert run("book", "rename", "Heron 7", "Grey Heron").code == 0
    restored = run("book", "restore", drive / "copy.sqlite")
    assert restored.code == 0
    assert [line["name"] for line in parsed(run("book", "list", "--json").out)["instruments"]] == ["Heron 7"]
    (replaced,) = book.parent.glob("bench_replaced_*.sqlite")
    assert replaced.name in restored.out.replace("\n", "")
    assert run("book", "export", tmp_path / "out.json").code == 0
    other = tmp_path / "other.sqlite"
    for new in ("1 instrument, 1 session, 1 measurement new, 0 known", "nothing new, 1 known"):
        assert new in run("book", "import", tmp_path / "out.json", "--book", other).out
    assert run("book", "list", "--book", other).out == run("book", "list").out


@pytest.mark.usefixtures("book")
def test_set_aside_and_back(run: CommandLine) -> None:
    assert "1 instrument" not in run("book", "list").out
    assert run("book", "aside", "Heron 7").code == 0
    hidden = run("book", "list").out
    assert "Heron 7" not in hidden
    assert "1 instrument set aside" in hidden
    assert "Heron 7" in run("book", "list", "--all").out
    assert run("book", "aside", "Heron 7", "--back").code == 0
    assert "Heron 7" in run("book", "list").out
    run("book", "aside", "Heron 7", "--session", "3").assert_plain_error("no session 3")


@pytest.mark.parametrize("name", NAMES)
def test_names_are_inert_in_what_is_printed(name: str, run: CommandLine, tmp_path: Path) -> None:
    book = tmp_path / "book.sqlite"
    name += "\u202e\x1b]0;owned\x07"
    printed = [
        run("book", "add", name, "--family", name, "--remark", name, "--book", book),
        run("book", "add", name, "--family", name, "--book", book),
        run("book", "list", "--book", book),
        run("book", "show", name, "--book", book),
        run("book", "show", f"{name} no. 2", "--book", book),
        run("book", "aside", name, "--book", book),
        run("book", "rename", name, f"{name} no. 2", "--book", book),
    ]
    assert [ended.code for ended in printed] == [0, 1, 0, 0, 1, 0, 0]
    for ended in printed:
        for sign in ended.out + ended.err:
            assert sign == "\n" or unicodedata.category(sign) not in ("Cc", "Cf"), repr(sign)
        assert all(len(line) <= 200 for line in ended.out.splitlines())
    listed = parsed(run("book", "list", "--all", "--json", "--book", book).out)
    assert [line["name"] for line in listed["instruments"]] == [f"{name} no. 2"]


def test_which_notes_to_play(run: CommandLine) -> None:
    plan = run("book", "notes", "violin").out
    assert all(note in plan for note in ("G3", "D4", "A4", "E5"))
    assert "common practice, no source" in plan
    assert parsed(run("book", "notes", "cello", "--json").out)["notes"][0] == "C2"
    assert "eight notes or more" in run("book", "notes", "nyckelharpa").out
    run("book", "notes", "guitar").assert_plain_error("may mean")


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help(run: CommandLine, command: str) -> None:
    ended = run("book", command, "--help")
    assert ended.code == 0
    assert command in run("book", "--help").out


@pytest.mark.parametrize(
    "arguments",
    [
        ["add", "Heron"],
        ["add", "--family", "violin"],
        ["log", "Heron", "a.wav"],
        ["log", "Heron", "--stage", "varnished"],
        ["log", "Heron", "a.wav", "--stage", "varnished", "--date", "yesterday"],
        ["log", "Heron", "a.wav", "--stage", "varnished", "--humidity", "120"],
        ["log", "Heron", "a.wav", "--stage", "varnished", "--notes", "H7"],
        ["aside", "Heron", "--session", "0"],
        ["backup"],
        ["polish"],
    ],
    ids=" ".join,
)
def test_wrong_usage_ends_with_2(run: CommandLine, arguments: list[str], tmp_path: Path) -> None:
    ended = run("book", *arguments, *([] if arguments == ["polish"] else ["--book", str(tmp_path / "book.sqlite")]))
    assert (ended.code, ended.out) == (2, "")
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("command", ["list", "show", "check", "backup", "export", "log", "rename", "aside", "profile"])
def test_where_there_is_no_book(run: CommandLine, command: str, tmp_path: Path) -> None:
    arguments: dict[str, list[str]] = {
        "show": ["Heron"],
        "backup": [str(tmp_path / "b.sqlite")],
        "export": [str(tmp_path / "e.json")],
        "log": ["Heron", "a.wav", "--stage", "varnished"],
        "rename": ["Heron", "Wren"],
        "aside": ["Heron"],
        "profile": ["Heron", "--out", str(tmp_path / "p.json")],
    }
    ended = run("book", command, *arguments.get(command, []), "--book", tmp_path / "book.sqlite")
    ended.assert_plain_error("no bench book here yet", "book add")
    assert not list(tmp_path.iterdir())


def test_a_true_process_with_a_place_of_its_own(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("TIMBRE_MATCH_BOOK", raising=False)
    for variable in ("XDG_DATA_HOME", "HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(variable, str(tmp_path))
    assert run_process("book", "add", "Häher 鷺 🎻", "--family", "violin").code == 0
    ended = run_process("book", "list", "--json")
    assert parsed(ended.out)["instruments"][0]["name"] == "Häher 鷺 🎻"
    assert Path(parsed(ended.out)["book"]).is_relative_to(tmp_path.resolve())
    assert run_process("book", "list", encoding="ascii").code == 0
