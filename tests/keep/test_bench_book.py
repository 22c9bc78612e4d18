"""What goes into the bench book comes out again, and nothing in it is ever changed."""

import sqlite3
import unicodedata
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

import timbre_match as tm
from tests.keep.books import NAMES, log_without_measuring, profile_of
from tests.keep.examples import profile
from timbre_match.compare.target import Target
from timbre_match.errors import BookError, TimbreMatchError, UnknownNameError
from timbre_match.keep.book_names import name_key
from timbre_match.keep.book_place import place_of
from timbre_match.keep.files import profile_to_json


@pytest.fixture
def book(tmp_path: Path) -> Path:
    path = tmp_path / "book.sqlite"
    with tm.BenchBook.open(path) as opened:
        opened.add("Heron 7", family="violin", remarks="one-piece back")
    return path


def take(folder: Path, content: bytes = b"sound") -> Path:
    path = folder / f"{content.decode()}.wav"
    path.write_bytes(content)
    return path


@pytest.mark.parametrize("name", NAMES)
def test_any_name_comes_back(name: str, tmp_path: Path) -> None:
    with tm.BenchBook.open(tmp_path / "book.sqlite") as opened:
        opened.add(name, family=name, remarks=name)
    log_without_measuring(tmp_path / "book.sqlite", name, name, [take(tmp_path)], room=name)
    with tm.BenchBook.open(tmp_path / "book.sqlite", create=False) as opened:
        (line,) = opened.list()
        assert (line.name, line.family, line.remarks, line.last_stage) == (name,) * 4
        (stage,) = opened.show(name).stages
        assert stage.name == name
        assert stage.sessions[0].conditions.room == name
        assert opened.profile(name, stage=name).stage == name


@given(st.text(st.characters(exclude_categories=["Cs"]), max_size=40))
def test_names_have_one_key_whatever_their_spelling(name: str) -> None:
    assert name_key(name_key(name)) == name_key(name)
    assert name_key(name.upper().lower()) == name_key(name.upper())
    assert name_key(f"  {name}\t") == name_key(name)
    assert name_key(unicodedata.normalize("NFD", name)) == name_key(unicodedata.normalize("NFC", name))


@pytest.mark.parametrize("name", ["", "   ", "\u200b\u202e", "half \ud83d"])
def test_a_name_that_cannot_be_seen_is_refused(name: str, book: Path) -> None:
    with tm.BenchBook.open(book) as opened, pytest.raises(UnknownNameError):
        opened.add(name, family="violin")


@pytest.mark.parametrize("again", ["Heron 7", "HERON  7", " heron\u00a07 "])
def test_a_name_is_given_once(again: str, book: Path) -> None:
    with tm.BenchBook.open(book) as opened, pytest.raises(BookError, match="already"):
        opened.add(again, family="viola")


def test_a_session_is_written_as_it_was(book: Path, tmp_path: Path) -> None:
    files = [take(tmp_path, b"one"), take(tmp_path, b"two")]
    uuid = log_without_measuring(book, "heron 7", "in the white", files, keep_audio=True, room="workshop")
    with tm.BenchBook.open(book, create=False) as opened:
        shown = opened.show("Heron 7")
        (session,) = shown.stages[0].sessions
        assert (session.uuid, session.number, session.conditions) == (uuid, 1, tm.Conditions(room="workshop"))
        recordings = [recording for each in session.takes for recording in each.recordings]
        assert [recording.path for recording in recordings] == [str(file) for file in files]
        for recording, file in zip(recordings, files, strict=True):
            assert recording.measured
            assert recording.kept is not None
            assert recording.kept.read_bytes() == file.read_bytes()
        # The very text of a profile file.
        measured = profile_of(b"one", b"two", instrument="heron 7")
        assert profile_to_json(opened.profile("Heron 7")) == profile_to_json(measured)


def test_stages_come_in_the_order_of_their_first_session(book: Path, tmp_path: Path) -> None:
    with tm.BenchBook.open(book) as opened:
        for stage, date in (("varnished", "2026-05-01"), ("in the white", "2026-03-01"), ("set up", "2026-06-01")):
            conditions = tm.Conditions(date=date)
            measured = profile_of(date.encode(), stage=stage)
            assert opened.add_profile(measured, conditions=conditions)
        shown = opened.show("Heron 7")
        assert [stage.name for stage in shown.stages] == ["in the white", "varnished", "set up"]
        assert [stage.sessions[0].number for stage in shown.stages] == [2, 1, 3]
        assert opened.profile("Heron 7").stage == "set up"
        assert opened.profile("Heron 7", stage="VARNISHED").stage == "varnished"
        assert opened.profile("Heron 7", session=2).stage == "in the white"


def test_the_same_recording_is_no_second_session(book: Path, tmp_path: Path) -> None:
    file = take(tmp_path)
    log_without_measuring(book, "Heron 7", "in the white", [file])
    with pytest.raises(BookError, match="in session 1"):
        log_without_measuring(book, "Heron 7", "varnished", [file])
    with tm.BenchBook.open(book) as opened:
        opened.set_aside("Heron 7", session=1)
    log_without_measuring(book, "Heron 7", "varnished", [file])
    with tm.BenchBook.open(book) as opened:
        assert opened.list()[0].session_count == 1
        assert opened.list()[0].last_stage == "varnished"
        assert [stage.name for stage in opened.show("Heron 7").stages] == ["varnished", "in the white"]


def test_renamed_and_set_aside(book: Path) -> None:
    with tm.BenchBook.open(book) as opened:
        opened.add("Wren", family="violin")
        with pytest.raises(BookError, match="already"):
            opened.rename("Wren", "heron 7")
        opened.rename("Heron 7", "HERON 7")
        opened.rename("heron 7", "Grey Heron")
        shown = opened.show("grey heron")
        assert (shown.name, shown.earlier_names, shown.remarks) == (
            "Grey Heron",
            ("Heron 7", "HERON 7"),
            "one-piece back",
        )
        with pytest.raises(UnknownNameError, match="Heron 7") as error:
            opened.show("Heron 7")
        assert "Grey Heron" in error.value.cause
        opened.set_aside("Grey Heron")
        assert [line.name for line in opened.list()] == ["Wren"]
        assert [line.name for line in opened.list(all_of_them=True)] == ["Grey Heron", "Wren"]
        with pytest.raises(BookError, match="set aside"):
            opened.add("Grey Heron", family="violin")
        opened.set_aside("Grey Heron", aside=False)
        assert len(opened.list()) == 2


@pytest.mark.parametrize("wrong", ["Herun 7", "heron7"])
def test_a_slip_in_the_name_is_answered_with_the_right_one(wrong: str, book: Path) -> None:
    with tm.BenchBook.open(book) as opened, pytest.raises(UnknownNameError) as error:
        opened.show(wrong)
    assert '"Heron 7"' in error.value.cause


def test_no_row_is_ever_changed_or_deleted(book: Path, tmp_path: Path) -> None:
    log_without_measuring(book, "Heron 7", "in the white", [take(tmp_path)])
    with tm.BenchBook.open(book) as opened:
        opened.add_target(Target(name="wanted", members=(profile(),)))
        opened.set_aside("Heron 7", session=1)
    connection = sqlite3.connect(book)
    tables = [row[0] for row in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")]
    assert len(tables) > 10
    for table in tables:
        if connection.execute(f"SELECT COUNT(*) FROM {table}").fetchone()[0] == 0:
            continue
        column = connection.execute(f"SELECT name FROM pragma_table_info('{table}') LIMIT 1").fetchone()[0]
        for statement in (f"UPDATE {table} SET {column} = {column}", f"DELETE FROM {table}"):
            with pytest.raises(sqlite3.IntegrityError, match="never changed or deleted"):
                connection.execute(statement)
    connection.close()


def test_targets_are_kept_under_their_name(book: Path) -> None:
    first = Target(name="The five that players liked", members=(profile(),))
    later = Target(name="the five that players liked", members=(profile(), profile(instrument="No. 42")))
    with tm.BenchBook.open(book) as opened:
        assert opened.add_target(first)
        assert not opened.add_target(first)
        assert opened.add_target(later)
        assert [target.name for target in opened.targets()] == [later.name]
        assert len(opened.target("The Five That Players Liked").members) == 2
        with pytest.raises(UnknownNameError):
            opened.target("the six")


def test_a_profile_is_taken_in_once(book: Path) -> None:
    with tm.BenchBook.open(book) as opened:
        new = profile(instrument="Wren")
        assert opened.add_profile(new)
        assert not opened.add_profile(new)
        assert opened.show("Wren").family == "violin"
        assert opened.show("Wren").stages[0].sessions[0].conditions.date == "2026-03-01"
        with pytest.raises(TimbreMatchError, match="empty"):
            opened.add_profile(profile(instrument=""))


def test_the_book_is_where_it_is_said_to_be(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("TIMBRE_MATCH_BOOK", str(tmp_path / "variable.sqlite"))
    assert place_of(tmp_path / "named.sqlite").book == tmp_path / "named.sqlite"
    assert place_of().book == tmp_path / "variable.sqlite"
    monkeypatch.delenv("TIMBRE_MATCH_BOOK")
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path / "data"))
    assert place_of().book.name == "bench_book.sqlite"
    assert place_of().own


@pytest.mark.parametrize(
    "wrong",
    [
        {"date": "2026-02-30"},
        {"humidity_percent": 101.0},
        {"temperature_c": float("nan")},
        {"microphone_distance_m": -1.0},
        {"a4_hz": 4400.0},
        {"room": "half \ud83d"},
    ],
)
def test_conditions_that_cannot_be(wrong: dict[str, str | float]) -> None:
    with pytest.raises(UnknownNameError):
        tm.Conditions(**wrong)  # type: ignore[arg-type]


def test_a_moved_recording_is_found_again(book: Path, tmp_path: Path) -> None:
    files = [take(tmp_path, content) for content in (b"moved", b"altered", b"stays", b"deleted")]
    log_without_measuring(book, "Heron 7", "in the white", files)
    (tmp_path / "archive" / "2026").mkdir(parents=True)
    files[0].rename(tmp_path / "archive" / "2026" / "renamed.wav")
    files[1].write_bytes(b"ALTERED")
    files[3].unlink()
    with tm.BenchBook.open(book) as opened:
        checked = opened.check()
        assert not checked.sound
        lying = {state.file: state.lying for state in checked.recordings}
        assert lying == {
            "moved.wav": "missing",
            "altered.wav": "altered",
            "stays.wav": "in place",
            "deleted.wav": "missing",
        }
        again = opened.check(look_in=[tmp_path / "archive"])
        found = {state.file: state for state in again.recordings}
        assert found["moved.wav"].lying == "in place"
        assert found["moved.wav"].place == str(tmp_path / "archive" / "2026" / "renamed.wav")
        assert found["deleted.wav"].lying == "missing"


def test_a_file_name_that_is_no_text(book: Path, tmp_path: Path) -> None:
    path = Path(str(tmp_path / "na") + "\udcefve.wav")
    try:
        path.write_bytes(b"sound")
    except OSError:
        pytest.skip("this system has no such names")
    log_without_measuring(book, "Heron 7", "in the white", [tmp_path / path.name])
    with tm.BenchBook.open(book) as opened:
        assert opened.check().recordings[0].lying == "in place"
        opened.export(tmp_path / "out.json")
