"""Two machines' books come together through export and import: the union of their rows, and nothing twice."""

import json
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import timbre_match as tm
from tests.keep.books import profile_of
from tests.keep.examples import profile
from timbre_match.compare.target import Target
from timbre_match.errors import FileVersionError, OutputError, SavedFileError, TimbreMatchError
from timbre_match.keep.files import save_profile, save_target


def filled(path: Path, sessions: list[tuple[str, bytes]]) -> Path:
    """A book with sessions of instruments, each of one take with the given content."""
    with tm.BenchBook.open(path) as book:
        for instrument, content in sessions:
            book.add_profile(profile_of(content, instrument=instrument))
    return path


def content_of(path: Path) -> dict[str, set[str]]:
    """Which sessions each instrument has, by their identifiers."""
    with tm.BenchBook.open(path, create=False) as book:
        return {
            line.name: {session.uuid for stage in book.show(line.name).stages for session in stage.sessions}
            for line in book.list(all_of_them=True)
        }


def carry(source: Path, target: Path) -> None:
    """Export one book and take it in to another."""
    file = source.with_suffix(".json")
    with tm.BenchBook.open(source, create=False) as book:
        book.export(file)
    with tm.BenchBook.open(target) as book:
        book.take_in(file)


def test_two_machines_have_the_same_book_in_the_end(tmp_path: Path) -> None:
    one = filled(tmp_path / "one.sqlite", [("Heron", b"a"), ("Heron", b"b"), ("Wren", b"c")])
    two = filled(tmp_path / "two.sqlite", [("heron", b"d"), ("Lark", b"e")])
    with tm.BenchBook.open(two) as book:
        book.rename("Lark", "Skylark")
        book.add_target(Target(name="wanted", members=(profile(),)))
        book.set_aside("heron", session=1)
    for _ in range(2):
        carry(one, two)
        carry(two, one)
    both = content_of(one)
    assert {name: len(sessions) for name, sessions in both.items()} == {"heron": 3, "Wren": 1, "Skylark": 1}
    assert content_of(two) == both
    with tm.BenchBook.open(one) as book:
        assert [target.name for target in book.targets()] == ["wanted"]
        assert book.show("Skylark").earlier_names == ("Lark",)
        assert sum(session.set_aside for stage in book.show("heron").stages for session in stage.sessions) == 1
        counts = book.check().counts
    with tm.BenchBook.open(two) as book:
        # Places are of one machine alone.
        assert book.check().counts == counts
    three = tmp_path / "three.sqlite"
    carry(two, three)
    carry(one, three)
    assert content_of(three) == both


_sessions = st.lists(
    st.tuples(st.sampled_from(["Heron", "HERON", "Wren"]), st.binary(min_size=1, max_size=1)), max_size=4
)


@settings(max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(first=_sessions, second=_sessions)
def test_merging_is_the_union_and_the_order_makes_no_difference(
    first: list[tuple[str, bytes]], second: list[tuple[str, bytes]], tmp_path_factory: pytest.TempPathFactory
) -> None:
    folder = tmp_path_factory.mktemp("merging")
    one, two = filled(folder / "one.sqlite", first), filled(folder / "two.sqlite", second)
    with tm.BenchBook.open(one) as book, tm.BenchBook.open(two) as other:
        expected = {
            session.uuid
            for each in (book, other)
            for line in each.list()
            for stage in each.show(line.name).stages
            for session in stage.sessions
        }
    carry(one, two)
    carry(two, one)
    carry(one, two)
    found, other_found = content_of(one), content_of(two)
    assert sorted(map(sorted, found.values())) == sorted(map(sorted, other_found.values()))
    assert set().union(*found.values()) == expected
    assert sum(map(len, found.values())) == len(expected)


def test_profiles_come_over_to_the_last_byte(tmp_path: Path) -> None:
    one = filled(tmp_path / "one.sqlite", [("Heron", b"a")])
    carry(one, tmp_path / "two.sqlite")
    with tm.BenchBook.open(one) as book, tm.BenchBook.open(tmp_path / "two.sqlite") as other:
        save_profile(book.profile("Heron"), tmp_path / "one_p.json")
        save_profile(other.profile("Heron"), tmp_path / "two_p.json")
        assert other.check().damage == ()
    assert (tmp_path / "one_p.json").read_bytes() == (tmp_path / "two_p.json").read_bytes()


def test_one_name_for_two_kinds_of_instrument(tmp_path: Path) -> None:
    for name, family in (("one", "violin"), ("two", "cello")):
        with tm.BenchBook.open(tmp_path / f"{name}.sqlite") as book:
            book.add("Heron", family=family)
    carry(tmp_path / "one.sqlite", tmp_path / "two.sqlite")
    with tm.BenchBook.open(tmp_path / "two.sqlite") as book:
        assert {line.name: line.family for line in book.list()} == {"Heron": "cello", "Heron (2)": "violin"}


def test_single_instruments_profiles_and_targets(tmp_path: Path) -> None:
    one = filled(tmp_path / "one.sqlite", [("Heron", b"a"), ("Wren", b"b")])
    with tm.BenchBook.open(one) as book:
        book.export(tmp_path / "wren.json", instruments=["wren"])
        save_profile(book.profile("Heron"), tmp_path / "heron.json")
    save_target(Target(name="wanted", members=(profile(),)), tmp_path / "target.json")
    with tm.BenchBook.open(tmp_path / "two.sqlite") as book:
        assert (book.take_in(tmp_path / "wren.json").instruments, len(book.list())) == (1, 1)
        assert book.take_in(tmp_path / "heron.json").sessions == 1
        assert book.take_in(tmp_path / "heron.json").known == 1
        assert book.take_in(tmp_path / "target.json").targets == 1


def test_a_profile_that_is_in_the_book_already(tmp_path: Path) -> None:
    one = filled(tmp_path / "one.sqlite", [("Heron", b"a")])
    with tm.BenchBook.open(one) as book:
        save_profile(book.profile("Heron"), tmp_path / "heron.json")
        assert book.take_in(tmp_path / "heron.json").known == 1


def wrong_version(content: dict[str, object]) -> None:
    content["version"] = 2


def wrong_uuid(content: dict[str, object]) -> None:
    content["instruments"][0]["uuids"] = ["'; DROP TABLE sessions"]  # type: ignore[index]


def wrong_date(content: dict[str, object]) -> None:
    content["instruments"][0]["stages"][0]["sessions"][0]["conditions"]["date"] = "yesterday"  # type: ignore[index]


def wrong_profile(content: dict[str, object]) -> None:
    session = content["instruments"][0]["stages"][0]["sessions"][0]  # type: ignore[index]
    session["measurements"][0]["profile"]["takes"] = []


@pytest.mark.parametrize("spoil", [wrong_version, wrong_uuid, wrong_date, wrong_profile])
def test_what_is_wrong_is_refused_as_a_whole(spoil: object, tmp_path: Path) -> None:
    one, file = filled(tmp_path / "one.sqlite", [("Heron", b"a")]), tmp_path / "one.json"
    with tm.BenchBook.open(one) as book:
        book.export(file)
    content = json.loads(file.read_text())
    assert callable(spoil)
    spoil(content)
    file.write_text(json.dumps(content))
    with tm.BenchBook.open(tmp_path / "two.sqlite") as book:
        with pytest.raises(FileVersionError if spoil is wrong_version else TimbreMatchError) as error:
            book.take_in(file)
        assert str(file) in str(error.value)
        assert book.list() == ()


def test_another_file_is_neither_taken_in_nor_written_over(tmp_path: Path) -> None:
    one, letter = filled(tmp_path / "one.sqlite", [("Heron", b"a")]), tmp_path / "letter.txt"
    letter.write_text("Dear Sir")
    with tm.BenchBook.open(one) as book:
        with pytest.raises(OutputError):
            book.export(letter)
        with pytest.raises(SavedFileError):
            book.take_in(letter)
    assert letter.read_text() == "Dear Sir"
