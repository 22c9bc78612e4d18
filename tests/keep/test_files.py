"""Saved files: the contract's keys, the round trip, and everything that can be wrong with a file."""

import contextlib
import copy
import json
import math
from collections.abc import Callable
from dataclasses import fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.keep.examples import COMPARISON, SHA, SUGGESTIONS, profile, profiles, recipe, ringing_recipe
from timbre_match.compare.records import Interval
from timbre_match.compare.target import Target
from timbre_match.errors import FileVersionError, OutputError, SavedFileError
from timbre_match.keep.files import (
    comparison_to_json,
    load_comparison,
    load_profile,
    load_target,
    profile_to_json,
    save_comparison,
    save_profile,
    save_target,
)
from timbre_match.measure.profile import Profile, Session
from timbre_match.measure.records import Recipe, Ringing

Content = dict[str, Any]


def saved(tmp_path: Path, content: object) -> Path:
    path = tmp_path / "saved.json"
    path.write_bytes(content if isinstance(content, bytes) else json.dumps(content).encode())
    return path


def as_content(one: Profile) -> Content:
    content: Content = json.loads(profile_to_json(one))
    return content


def assert_same(one: Profile, other: Profile) -> None:
    """Equal to within the rounding that the module states."""
    assert (one.instrument, one.stage, one.family) == (other.instrument, other.stage, other.family)
    assert one.session == other.session
    assert one.a4_hz == pytest.approx(other.a4_hz, abs=1e-6)
    assert [take.recordings for take in one.takes] == [take.recordings for take in other.takes]
    for take, other_take in zip(one.takes, other.takes, strict=True):
        for note, other_note in zip(take.notes, other_take.notes, strict=True):
            assert_same_values(note, other_note)


def assert_same_values(one: Recipe | Ringing, other: Recipe | Ringing) -> None:
    for field in fields(one):
        value, other_value = getattr(one, field.name), getattr(other, field.name)
        if isinstance(value, Ringing):
            assert isinstance(other_value, Ringing)
            assert_same_values(value, other_value)
        elif value is None or isinstance(value, str | int | tuple):
            assert value == other_value
        else:
            close = np.isclose(value, other_value, rtol=0, atol=6e-5, equal_nan=True)
            assert np.all(close | ~np.isfinite(value)), field.name


def test_a_ringing_note_comes_back_with_its_decays(tmp_path: Path) -> None:
    one = profile(takes=1)
    one = replace(one, takes=(replace(one.takes[0], notes=(ringing_recipe(),)),))
    save_profile(one, tmp_path / "profile.json")
    assert_same(one, load_profile(tmp_path / "profile.json"))
    (note,) = as_content(one)["takes"][0]["notes"]
    assert note["inharmonicity_b"] == 3.7e-5
    assert [harmonic["t60_s"] for harmonic in note["harmonics"]] == [4.25, 3.5, None, 2.0, 1.0]
    assert note["harmonics"][1]["beat_hz"] == 1.25
    assert "beat_hz" not in note["harmonics"][0]


def test_ringing_notes_of_older_files_have_no_decays(tmp_path: Path) -> None:
    content = as_content(profile())
    content["takes"][0]["notes"][0]["kind"] = "ringing"
    note = load_profile(saved(tmp_path, content)).takes[0].notes[0]
    assert (note.kind, note.ringing) == ("ringing", None)


@pytest.mark.parametrize(
    ("key", "value", "where"),
    [
        ("decay", "slow", r"takes\[0\].notes\[0\].harmonics\[1\].decay"),
        ("decay", None, r"harmonics\[1\].decay"),
        ("t60_s", -1.0, r"takes\[0\].notes\[0\].harmonics\[1\].t60_s"),
        ("t60_s", None, r"harmonics\[1\].t60_s"),
        ("late_db", "loud", r"harmonics\[1\].late_db"),
    ],
)
def test_wrong_decays_are_named_with_their_path(tmp_path: Path, key: str, value: object, where: str) -> None:
    one = profile(takes=1)
    content = as_content(replace(one, takes=(replace(one.takes[0], notes=(ringing_recipe(),)),)))
    content["takes"][0]["notes"][0]["harmonics"][1][key] = value
    with pytest.raises(SavedFileError, match=where):
        load_profile(saved(tmp_path, content))


def test_only_ringing_notes_have_an_inharmonicity(tmp_path: Path) -> None:
    content = as_content(profile())
    content["takes"][0]["notes"][0]["inharmonicity_b"] = 1e-4
    with pytest.raises(SavedFileError, match="inharmonicity_b is given of ringing notes alone"):
        load_profile(saved(tmp_path, content))


@settings(deadline=None, max_examples=50)
@given(one=profiles())
def test_profile_loaded_and_saved_again_is_the_same(tmp_path_factory: pytest.TempPathFactory, one: Profile) -> None:
    path = tmp_path_factory.mktemp("keep") / "profile.json"
    save_profile(one, path)
    first = path.read_bytes()
    loaded = load_profile(path)
    assert_same(one, loaded)
    save_profile(loaded, path)
    assert path.read_bytes() == first


def test_profile_has_exactly_the_keys_of_the_contract() -> None:
    content = as_content(profile())
    assert list(content) == ["format", "version", "instrument", "stage", "family", "a4_hz", "session", "takes"]
    assert content["session"] == {"date": "2026-03-01", "room": "workshop", "microphone": "small condenser, 0.7 m"}
    assert (content["format"], content["version"]) == ("timbre-match/profile", 1)
    take = content["takes"][0]
    assert list(take) == ["recordings", "notes"]
    assert take["recordings"] == [{"file": "take 1.flac", "sha256": SHA}]
    note = take["notes"][0]
    keys = "note f0_hz cents start_s end_s cycles points_per_cycle kind harmonics"
    assert list(note) == keys.split()
    assert note["harmonics"][1:] == [
        {
            "k": 2,
            "freq_hz": 880.5,
            "level_db": -6.25,
            "se_db": 0.125,
            "floor_db": -72.0,
            "heard": True,
            "phase_rad": 0.5,
        },
        {"k": 3, "freq_hz": 1320.75, "level_db": None, "se_db": None, "floor_db": -73.0, "heard": False}
        | {"phase_rad": None},
    ]


def test_comparison_has_exactly_the_keys_of_the_contract() -> None:
    content = json.loads(comparison_to_json(COMPARISON, SUGGESTIONS))
    assert (content["format"], content["version"]) == ("timbre-match/comparison", 1)
    assert content["colour_distance_db"] == {"value": 3.4, "low": 2.9, "high": 3.9, "own": None}
    assert content["closeness_percent"] == {"value": 71.0, "low": 64.0, "high": 77.0}
    assert content["repeatability"] == {"source": "prior", "takes": 1, "target_takes": 5}
    keys = "note k freq_hz difference_db low_db high_db p verdict takes_needed"
    assert list(content["harmonics"][0]) == keys.split()
    keys = "freq_hz difference_db low_db high_db simultaneous_low_db simultaneous_high_db"
    assert list(content["body_curve"][0]) == keys.split()
    keys = "low_hz high_hz difference_db low_db high_db verdict harmonics notes"
    assert list(content["regions"][0]) == keys.split()
    assert list(content["suggestions"][0]) == ["rank", "region", "evidence", "moves", "cautions"]
    assert content["harmonics"][0]["p"] == 1.25e-7


def test_comparison_round_trip(tmp_path: Path) -> None:
    path = tmp_path / "comparison.json"
    save_comparison(COMPARISON, SUGGESTIONS, path)
    assert load_comparison(path) == (COMPARISON, SUGGESTIONS)


def test_target_round_trip_keeps_its_members_whole(tmp_path: Path) -> None:
    target = Target(name="the five", members=(profile(), profile(instrument="No. 38", takes=1)))
    path = tmp_path / "target.json"
    save_target(target, path)
    loaded = load_target(path)
    assert loaded.name == "the five"
    for member, other in zip(target.members, loaded.members, strict=True):
        assert_same(member, other)


def test_plain_profile_is_a_target_of_one_member(tmp_path: Path) -> None:
    save_profile(profile(), tmp_path / "profile.json")
    loaded = load_target(tmp_path / "profile.json")
    assert len(loaded.members) == 1
    assert_same(profile(), loaded.members[0])


def test_names_in_any_script_come_back(tmp_path: Path) -> None:
    one = profile(instrument="Geige „Jiří“ 小提琴 🎻\u202e\n=cmd()", stage="\x00")
    save_profile(one, tmp_path / "profile.json")
    assert_same(one, load_profile(tmp_path / "profile.json"))


def test_unknown_keys_are_ignored(tmp_path: Path) -> None:
    content = as_content(profile())
    content["room"] = {"t60_s": 0.4}
    content["takes"][0]["notes"][0]["harmonics"][0]["t60_s"] = 2.5
    assert_same(profile(), load_profile(saved(tmp_path, content)))


def test_older_files_without_a_session_have_none_noted(tmp_path: Path) -> None:
    content = as_content(profile())
    del content["session"]
    silent = replace(profile(), session=Session())
    assert_same(silent, load_profile(saved(tmp_path, content)))
    target = {"format": "timbre-match/target", "version": 1, "name": "the five", "members": [content]}
    assert_same(silent, load_target(saved(tmp_path, target)).members[0])


def test_a_session_may_be_noted_in_part(tmp_path: Path) -> None:
    content = as_content(profile())
    content["session"] = {"room": "workshop"}
    assert load_profile(saved(tmp_path, content)).session == Session(room="workshop")


def set_at(*steps: str | int, to: object) -> Callable[[Content], None]:
    def change(content: Content) -> None:
        inner: Any = content
        for step in steps[:-1]:
            inner = inner[step]
        inner[steps[-1]] = to

    return change


def drop(*steps: str | int) -> Callable[[Content], None]:
    def change(content: Content) -> None:
        inner: Any = content
        for step in steps[:-1]:
            inner = inner[step]
        del inner[steps[-1]]

    return change


DEEP = ("takes", 0, "notes", 1, "harmonics", 1)
PLACE = r"takes\[0\]\.notes\[1\]\.harmonics\[1\]"

WRONG = {
    "text for a level": (set_at(*DEEP, "level_db", to="loud"), PLACE + r'\.level_db: should be a number.*"loud"'),
    "number as text": (set_at(*DEEP, "level_db", to="-3.5"), PLACE + r"\.level_db: should be a number"),
    "list for a level": (set_at(*DEEP, "level_db", to=[1] * 9), PLACE + r"\.level_db: .*a list \(9 entries\)"),
    "true for a level": (set_at(*DEEP, "level_db", to=True), PLACE + r"\.level_db: .*true or false"),
    "null where heard": (set_at(*DEEP, "level_db", to=None), PLACE + ": level_db is a number where heard is true"),
    "level where not heard": (set_at(*DEEP, "heard", to=False), PLACE + ": level_db .* null where it is false"),
    "1 for heard": (set_at(*DEEP, "heard", to=1), PLACE + r"\.heard: should be true or false"),
    "negative frequency": (
        set_at(*DEEP, "freq_hz", to=-1.0),
        PLACE + r"\.freq_hz: should be greater than 0, but is -1",
    ),
    "no frequency": (drop(*DEEP, "freq_hz"), PLACE + r"\.freq_hz is missing"),
    "gap in k": (set_at(*DEEP, "k", to=3), r"notes\[1\]: harmonics\[1\]\.k is 3; harmonics count 1, 2, 3"),
    "k as 2.0": (set_at(*DEEP, "k", to=2.0), PLACE + r"\.k: should be a whole number"),
    "huge k": (set_at(*DEEP, "k", to=10**4000), PLACE + r"\.k: .*more than 18 digits"),
    "huge level": (set_at(*DEEP, "level_db", to=10**4000), PLACE + r"\.level_db: .*more than 18 digits"),
    "no harmonics": (
        set_at("takes", 0, "notes", 0, "harmonics", to=[]),
        r"notes\[0\]\.harmonics: should hold at least one",
    ),
    "harmonics as a group": (set_at("takes", 0, "notes", 0, "harmonics", to={"1": 2}), "harmonics: should be a list"),
    "no such note": (set_at("takes", 1, "notes", 0, "note", to="H4"), r"takes\[1\]\.notes\[0\]\.note: 'H4' is not"),
    "ends before it starts": (set_at("takes", 0, "notes", 0, "end_s", to=0.1), r"notes\[0\]: end_s \(0\.1\)"),
    "unknown kind": (set_at("takes", 0, "notes", 0, "kind", to="sung"), r"kind: should be 'held' or 'ringing'"),
    "short hash": (
        set_at("takes", 0, "recordings", 0, "sha256", to="abc"),
        r"recordings\[0\]\.sha256: should be 64 hexadecimal digits, but is a text",
    ),
    "no takes": (set_at("takes", to=[]), "takes: should hold at least one entry, but is empty"),
    "no date": (set_at("session", "date", to="2026-02-30"), "session.date: '2026-02-30' is not a date; write it like"),
    "long date": (set_at("session", "date", to="2" * 10_000), r"session\.date: '2{27}\.\.\.' is not a date"),
    "room as number": (set_at("session", "room", to=3), r"session\.room: should be a text, but is a number \(3\)"),
    "half a microphone": (set_at("session", "microphone", to="\ud800"), "session.microphone: the text holds half"),
    "session is null": (set_at("session", to=None), "session: should be a group of keys, but is null"),
    "take is null": (set_at("takes", 1, to=None), r"takes\[1\]: should be a group of keys, but is null"),
    "half a character": (set_at("instrument", to="\ud800"), "instrument: the text holds half a character"),
    "long text": (set_at("a4_hz", to="x" * 10_000), r"a4_hz: should be a number, .*x\.\.\.\)"),
    "no format": (drop("format"), "format is missing"),
    "no version": (drop("version"), "version is missing"),
    "version as text": (set_at("version", to="1"), "version: should be a whole number"),
    "another format": (set_at("format", to="drawing"), 'format is "drawing", not timbre-match/profile'),
    "a target": (set_at("format", to="timbre-match/target"), 'format is "timbre-match/target"'),
}


@pytest.mark.parametrize("name", WRONG)
def test_wrong_content_is_named_with_file_and_path(tmp_path: Path, name: str) -> None:
    change, message = WRONG[name]
    content = copy.deepcopy(as_content(profile()))
    change(content)
    path = saved(tmp_path, content)
    with pytest.raises(SavedFileError, match=message) as caught:
        load_profile(path)
    assert caught.value.where == str(path)
    assert len(caught.value.what) < 250


@pytest.mark.parametrize("version", [0, 2, -1, 10**4000])
@pytest.mark.parametrize("load", [load_profile, load_target, load_comparison])
def test_unknown_version_is_an_error_of_its_own(tmp_path: Path, load: Callable[[Path], object], version: int) -> None:
    content = {"format": "timbre-match/profile", "version": version, "everything": "else differs"}
    with pytest.raises(FileVersionError, match="this program reads version 1"):
        load(saved(tmp_path, content))


NOT_SAVED_FILES = {
    "empty": (b"", "the file is empty"),
    "text": (b"Dear maker", "not JSON: .*line 1, column 1"),
    "cut off": (profile_to_json(profile()).encode()[:700], "not JSON: .*line 1, column"),
    "not UTF-8": (b'{"format": "caf\xe9"}', "byte 15 is not UTF-8"),
    "UTF-16": ('{"format": 1}'.encode("utf-16"), "byte 0 is not UTF-8"),
    "100,000 lists": (b"[" * 100_000 + b"]" * 100_000, "nested far too deep"),
    "100,000 groups": (b'{"a":' * 100_000 + b"1" + b"}" * 100_000, "nested far too deep"),
    "NaN": (b'{"format": NaN}', "NaN is not a number"),
    "infinity": (b'{"format": -Infinity}', "-Infinity is not a number"),
    "million digits": (b'{"version": ' + b"9" * 1_000_000 + b"}", "not a saved file"),
    "a list": (b"[1, 2]", "the file should be a group of keys, but is a list"),
    "null": (b"null", "the file should be a group of keys, but is null"),
}


@pytest.mark.parametrize("name", NOT_SAVED_FILES)
@pytest.mark.parametrize("load", [load_profile, load_target, load_comparison])
def test_what_is_no_saved_file_is_refused(tmp_path: Path, load: Callable[[Path], object], name: str) -> None:
    data, message = NOT_SAVED_FILES[name]
    with pytest.raises(SavedFileError, match=message):
        load(saved(tmp_path, data))


def test_number_too_large_for_a_float_is_refused(tmp_path: Path) -> None:
    text = profile_to_json(profile()).replace('"a4_hz":442.0', '"a4_hz":1e999')
    with pytest.raises(SavedFileError, match="a4_hz: should be a finite number"):
        load_profile(saved(tmp_path, text.encode()))


def test_byte_order_mark_is_dropped(tmp_path: Path) -> None:
    path = saved(tmp_path, b"\xef\xbb\xbf" + profile_to_json(profile()).encode())
    assert_same(profile(), load_profile(path))


def test_missing_file_and_folder(tmp_path: Path) -> None:
    with pytest.raises(SavedFileError, match="no such file"):
        load_profile(tmp_path / "nothing.json")
    with pytest.raises(SavedFileError, match="a folder or a device"):
        load_profile(tmp_path)
    with pytest.raises(SavedFileError, match="cannot be read"):
        load_profile("n" * 5000)


@settings(deadline=None)
@given(
    steps=st.lists(st.integers(0, 10), min_size=1, max_size=8),
    value=st.recursive(
        st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text()),
        lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
        max_leaves=5,
    ),
)
def test_any_value_anywhere_is_read_or_refused_but_never_a_crash(
    tmp_path_factory: pytest.TempPathFactory, steps: list[int], value: object
) -> None:
    content: Any = as_content(profile())
    inner = content
    for depth, step in enumerate(steps, start=1):
        keys: list[Any] = list(inner) if isinstance(inner, dict) else list(range(len(inner)))
        key = keys[step % len(keys)]
        if depth == len(steps) or not isinstance(inner[key], dict | list):
            inner[key] = value
            break
        inner = inner[key]
    path = saved(tmp_path_factory.mktemp("keep"), content)
    with contextlib.suppress(SavedFileError):
        profile_to_json(load_profile(path))


@pytest.mark.parametrize(
    ("one", "message"),
    [
        (profile(instrument="\udce9"), "the profile cannot be saved: instrument: the text holds half a character"),
        (replace(profile(), a4_hz=math.nan), "the profile cannot be saved: a4_hz: should be a number"),
        (replace(profile(), takes=()), "the profile cannot be saved: takes: "),
    ],
)
def test_what_could_not_be_read_again_is_not_written(tmp_path: Path, one: Profile, message: str) -> None:
    with pytest.raises(OutputError, match=message):
        save_profile(one, tmp_path / "profile.json")
    assert list(tmp_path.iterdir()) == []


def test_infinite_interval_is_not_written() -> None:
    endless = replace(COMPARISON, closeness_percent=Interval(value=50.0, low=-math.inf, high=math.inf))
    with pytest.raises(OutputError, match=r"the comparison cannot be saved: closeness_percent\.low"):
        comparison_to_json(endless, ())


def test_floor_without_any_noise_is_null_and_comes_back_as_nan(tmp_path: Path) -> None:
    quiet = replace(recipe(), floor_db=np.full(3, -np.inf))
    one = replace(profile(), takes=(replace(profile().takes[0], notes=(quiet,)),))
    assert as_content(one)["takes"][0]["notes"][0]["harmonics"][0]["floor_db"] is None
    save_profile(one, tmp_path / "profile.json")
    assert np.isnan(load_profile(tmp_path / "profile.json").takes[0].notes[0].floor_db).all()
