"""The command `compare`."""

import json
from pathlib import Path

import numpy as np

from tests.cli.outputs import (
    PLAYED,
    assert_comparison_keys,
    assert_figures,
    assert_same,
    content,
    parsed,
    short_note,
)
from tests.command_line import CommandLine
from tests.intake.sounds import write
from timbre_match.units import note_to_hz


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
    assert [entry["margin_db"] for entry in whole.values()] == [0.1, 20.0]
    # Two one-sided tests at 5 % (Schuirmann 1987) are passed where the 90 % interval lies within the margin.
    for entry in whole.values():
        for row in entry["harmonics"]:
            reach = abs(row["difference_db"]) + 1.6449 / 1.96 * (row["high_db"] - row["low_db"]) / 2.0
            assert (row["verdict"] == "alike") == (reach <= entry["margin_db"])
    assert all(row["verdict"] == "alike" for row in whole["20"]["harmonics"])
    assert any(row["verdict"] == "unsettled" for row in whole["0.1"]["harmonics"])


def test_compare_for_human_eyes(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    ended = run("compare", profile, "--target", profile, "--figures", tmp_path / "figures")
    assert (ended.code, ended.err) == (0, "")
    assert "Colour distance" in ended.out
    assert "Closeness" in ended.out
    assert str(tmp_path / "figures") in ended.out
    assert_figures(tmp_path / "figures")


def in_session(profile: Path, out: Path, **noted: str) -> Path:
    out.write_text(json.dumps(content(profile) | {"session": noted}), encoding="utf-8")
    return out


def test_another_session_is_pointed_out_unless_there_is_a_control(
    run: CommandLine, profile: Path, tmp_path: Path
) -> None:
    now = in_session(profile, tmp_path / "now.json", date="2026-03-01", room="workshop")
    then = in_session(profile, tmp_path / "then.json", date="2026-01-10", room="Workshop")
    said = "recorded in another session than the target (date 2026-03-01 against 2026-01-10)"
    assert said in run("compare", now, "--target", then).out

    def remarks(*control: str | Path) -> list[str]:
        whole = parsed(run("compare", now, "--target", then, "--json", *control).out)
        return [remark for remark in whole["remarks"] if "recorded in" in remark]

    (remark,) = remarks()
    assert remark.startswith(said)
    control = [tmp_path / "control_now.json", tmp_path / "control_then.json"]
    for place, gain, source in ((control[0], 0.6, now), (control[1], 0.8, then)):
        sound = write(
            place.with_suffix(".wav"), np.concatenate([short_note(note_to_hz(note), gain) for note in PLAYED])
        )
        assert run("measure", sound, "--out", place, "--instrument", "Tit", "--family", "violin").code == 0
        in_session(place, place, **content(source)["session"])
    assert remarks("--control-now", control[0], "--control-then", control[1]) == []
    (exchanged,) = remarks("--control-now", control[1], "--control-then", control[0])
    assert exchanged.startswith("the control now was not recorded in the instrument's session")
    assert "the control then was recorded in another session than the target" in exchanged


def test_a_control_of_the_same_recordings_is_refused(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    control, out = tmp_path / "tit.json", tmp_path / "c.json"
    assert run("measure", write(tmp_path / "tit.wav", short_note(note_to_hz("D4"), 0.6)), "--out", control).code == 0
    ended = run(
        "compare", profile, "--target", profile, "--control-now", control, "--control-then", control, "--out", out
    )
    ended.assert_plain_error("control now", "tit.wav", "control then", "likely cause", "what to do")
    assert not out.exists()


def test_the_same_recordings_on_both_sides_are_said_to_be_that(run: CommandLine, profile: Path) -> None:
    whole = parsed(run("compare", profile, "--target", profile, "--json").out)
    assert any(remark.startswith("instrument and target are the same recordings") for remark in whole["remarks"])


def test_places_that_cannot_be_written_are_named_before_the_work(
    run: CommandLine, profile: Path, tmp_path: Path
) -> None:
    # Had the profile been read first, the message would be about that.
    (tmp_path / "file").touch()
    for option, place in (("--out", tmp_path / "missing" / "c.json"), ("--figures", tmp_path / "file")):
        ended = run("compare", tmp_path / "none.json", "--target", profile, option, place)
        ended.assert_plain_error(str(place), "what to do")
        assert "none.json" not in ended.err
    assert [path.name for path in tmp_path.iterdir()] == ["file"]


def test_nothing_in_common(run: CommandLine, profile: Path, tmp_path: Path) -> None:
    other = tmp_path / "other.json"
    assert run("measure", write(tmp_path / "c6.wav", short_note(1046.5)), "--out", other).code == 0
    before = sorted(tmp_path.iterdir())
    ended = run("compare", profile, "--target", other, "--out", tmp_path / "c.json", "--figures", tmp_path / "figures")
    ended.assert_plain_error("likely cause", "what to do")
    assert sorted(tmp_path.iterdir()) == before
