"""What a comparison says of ringing notes: round trip, keys, older files, and files that somebody spoilt."""

import copy
import json
import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from tests.compare.plucked import NOTES, plucked
from tests.keep.examples import COMPARISON, RINGING_COMPARISON, SUGGESTIONS
from timbre_match.compare import compare
from timbre_match.errors import OutputError, SavedFileError
from timbre_match.keep.files import comparison_to_json, load_comparison, save_comparison

Content = dict[str, Any]


def content() -> Content:
    found: Content = json.loads(comparison_to_json(RINGING_COMPARISON, SUGGESTIONS))
    return found


def loaded(tmp_path: Path, body: Content) -> Any:
    path = tmp_path / "c.json"
    path.write_text(json.dumps(body))
    return load_comparison(path)[0]


def test_the_keys_are_those_of_the_contract() -> None:
    body = content()
    assert list(body["sustain"]) == ["source", "harmonics", "notes", "curve", "regions", "apart"]
    sustain = body["sustain"]
    assert list(sustain["harmonics"][0]) == ["note", "k", "freq_hz", "ratio", "low", "high", "p", "verdict"]
    assert list(sustain["notes"][0]) == ["note", "ratio", "low", "high", "p", "verdict", "harmonics"]
    keys = "freq_hz ratio low high simultaneous_low simultaneous_high"
    assert list(sustain["curve"][0]) == keys.split()
    assert list(sustain["regions"][0]) == ["low_hz", "high_hz", "ratio", "low", "high", "verdict", "harmonics", "notes"]
    assert list(sustain["apart"][0]) == ["note", "k", "freq_hz", "instrument", "target"]
    assert list(body["pluck"][0]) == ["note", "instrument", "target", "differs", "taken_out", "set_aside"]
    assert body["pluck"][0]["instrument"] == [{"beta": 0.125, "se": 0.003}, None]
    assert list(body["strings"]) == ["notes", "dull_from_hz"]
    assert list(body["strings"]["notes"][0]) == ["note", "b", "target_b", "ratio", "low", "high", "p", "differs"]
    assert body["version"] == 1


def test_a_comparison_of_held_notes_has_none_of_them() -> None:
    body = json.loads(comparison_to_json(COMPARISON, SUGGESTIONS))
    assert not {"sustain", "pluck", "strings"} & set(body)


def test_round_trip(tmp_path: Path) -> None:
    path = tmp_path / "c.json"
    save_comparison(RINGING_COMPARISON, SUGGESTIONS, path)
    assert load_comparison(path) == (RINGING_COMPARISON, SUGGESTIONS)


def test_a_real_comparison_is_the_same_file_when_loaded_and_saved_again(tmp_path: Path) -> None:
    found = compare(plucked(1, beta=0.11, notes=NOTES[:2], uneven=0.3), plucked(2, beta=0.2, notes=NOTES[:2], takes=1))
    first, second = tmp_path / "a.json", tmp_path / "b.json"
    save_comparison(found, (), first)
    save_comparison(load_comparison(first)[0], (), second)
    assert first.read_bytes() == second.read_bytes()


def test_files_that_were_written_before_stay_readable(tmp_path: Path) -> None:
    body = content()
    for key in ("sustain", "pluck", "strings"):
        del body[key]
    found = loaded(tmp_path, body)
    assert (found.sustain, found.pluck, found.strings) == (None, (), None)


def test_keys_of_later_versions_are_ignored(tmp_path: Path) -> None:
    body = content()
    body["sustain"]["harmonics"][0]["later"] = 1
    body["pluck"][0]["later"] = {}
    assert loaded(tmp_path, body) == RINGING_COMPARISON


@pytest.mark.parametrize(
    ("path", "value", "message"),
    [
        (("sustain", "harmonics", 0, "ratio"), -0.5, r"sustain\.harmonics\[0\]\.ratio: should be greater than 0"),
        (("sustain", "harmonics", 0, "ratio"), "0.5", r"ratio: should be a number, but is a text"),
        (("sustain", "harmonics", 0, "ratio"), True, r"ratio: .*true or false"),
        (("sustain", "harmonics", 0, "high"), 10**4000, r"high: .*more than 18 digits"),
        (("sustain", "harmonics", 0, "verdict"), "stronger", r"verdict: should be 'longer', 'shorter'"),
        (("sustain", "harmonics", 0, "note"), "H4", r"note: 'H4' is not"),
        (("sustain", "harmonics", 0, "k"), 0, r"k: should be greater than or equal to 1"),
        (("sustain", "regions", 0, "low_hz"), None, r"sustain\.regions\[0\]\.low_hz: should be a number, but is null"),
        (("sustain", "apart", 0, "target"), "square", r"sustain\.apart\[0\]\.target: should be 'plain'"),
        (("sustain", "curve"), {}, r"sustain\.curve: should be a list"),
        (("sustain", "source"), "takes", r"sustain\.source: should be 'prior' or 'both'"),
        (("sustain",), [], r"sustain: should be a group of keys"),
        (("pluck",), None, r"pluck: should be a list"),
        (("pluck", 0, "instrument", 0, "beta"), 0.75, r"pluck\[0\]\.instrument\[0\]\.beta: should be less than"),
        (("pluck", 0, "instrument", 0, "beta"), 0.0, r"beta: should be greater than 0"),
        (("pluck", 0, "taken_out"), 1, r"taken_out: should be true or false"),
        (("pluck", 0, "set_aside"), [1.5], r"set_aside\[0\]: should be a whole number"),
        (("strings", "notes", 0, "b"), 0.0, r"strings\.notes\[0\]\.b: should be greater than 0"),
        (("strings", "dull_from_hz"), -1.0, r"strings\.dull_from_hz: should be greater than 0"),
    ],
)
def test_what_somebody_spoilt_is_named(
    tmp_path: Path, path: tuple[str | int, ...], value: object, message: str
) -> None:
    body = copy.deepcopy(content())
    inner: Any = body
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    with pytest.raises(SavedFileError, match=message) as caught:
        loaded(tmp_path, body)
    assert len(caught.value.what) < 250


def test_what_cannot_be_saved_is_refused() -> None:
    sustain = RINGING_COMPARISON.sustain
    assert sustain is not None
    (point,) = sustain.curve
    endless = replace(sustain, curve=(replace(point, simultaneous_high=math.inf),))
    with pytest.raises(OutputError, match=r"sustain\.curve\[0\]\.simultaneous_high"):
        comparison_to_json(replace(RINGING_COMPARISON, sustain=endless), ())
