"""Exports: a table that a spreadsheet cannot be tricked with, and periods that hold the recipe."""

import csv
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import soundfile

from tests.keep.examples import SHA, profile, recipe, ringing_recipe
from timbre_match.errors import OutputError
from timbre_match.keep.export import COLUMNS, averaged_cycle, export_csv, export_cycles, export_json
from timbre_match.keep.files import profile_to_json
from timbre_match.measure.dtfs import analyse
from timbre_match.measure.profile import Profile, Source, Take


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, strict=True))


def test_one_row_per_take_note_and_harmonic(tmp_path: Path) -> None:
    export_csv(profile(), tmp_path / "table.csv")
    table = rows(tmp_path / "table.csv")
    assert [(row["take"], row["note"], row["k"]) for row in table] == [
        (take, note, k) for take in "12" for note, ks in (("A4", "123"), ("F#5", "12")) for k in ks
    ]
    assert table[1] == {
        "instrument": "No. 41",
        "stage": "in the white",
        "family": "violin",
        "take": "1",
        "recording": "take 1.flac",
        "note": "A4",
        "f0_hz": "440.25",
        "cents": "0.9834",
        "start_s": "0.25",
        "end_s": "2.125",
        "kind": "held",
        "k": "2",
        "freq_hz": "880.5",
        "level_db": "-6.25",
        "se_db": "0.125",
        "floor_db": "-72.0",
        "heard": "true",
        "phase_rad": "0.5",
        **dict.fromkeys(COLUMNS[18:], ""),
    }
    not_heard = table[2]
    assert [not_heard[name] for name in ("level_db", "se_db", "heard", "phase_rad")] == ["", "", "false", ""]


def test_ringing_notes_fill_the_columns_of_their_decays(tmp_path: Path) -> None:
    one = profile(takes=1)
    export_csv(replace(one, takes=(replace(one.takes[0], notes=(ringing_recipe(),)),)), tmp_path / "table.csv")
    table = rows(tmp_path / "table.csv")
    assert [row["decay"] for row in table] == ["plain", "beating", "", "two-stage", "unclear"]
    assert {row["inharmonicity_b"] for row in table} == {"3.7e-05"}
    assert [row["t60_s"] for row in table] == ["4.25", "3.5", "", "2.0", "1.0"]
    assert [table[3][name] for name in ("early_t60_s", "late_t60_s", "late_db")] == ["1.5", "4.5", "-14.5"]
    assert [table[1][name] for name in ("beat_hz", "beat_depth_db", "late_db")] == ["1.25", "9.5", ""]


def test_lines_end_as_rfc_4180_says(tmp_path: Path) -> None:
    export_csv(profile(), tmp_path / "table.csv")
    data = (tmp_path / "table.csv").read_bytes()
    assert data.startswith(",".join(COLUMNS).encode() + b"\r\n")
    assert data.endswith(b"\r\n")
    assert data.count(b"\n") == data.count(b"\r\n") == 11


@pytest.mark.parametrize("name", ["=cmd()", "+1", "-2+3", "@SUM(A1)", "\t=1", "\r=1", '=HYPERLINK("x","y")'])
def test_formulas_are_defused_in_every_text(tmp_path: Path, name: str) -> None:
    take = replace(profile().takes[0], recordings=(Source(file=name, sha256=SHA),))
    evil = Profile(instrument=name, stage=name, family=name, a4_hz=440.0, takes=(take,))
    export_csv(evil, tmp_path / "table.csv")
    for row in rows(tmp_path / "table.csv"):
        for column in ("instrument", "stage", "family", "recording"):
            assert row[column] == "'" + name
        assert row["level_db"] == "" or float(row["level_db"]) < 0.0


@pytest.mark.parametrize("name", ['quote " and, comma', "line\r\nbreak", "小提琴 🎻", "a=b", "", "O'Hara"])
def test_other_names_come_back_as_they_are(tmp_path: Path, name: str) -> None:
    export_csv(profile(instrument=name), tmp_path / "table.csv")
    assert {row["instrument"] for row in rows(tmp_path / "table.csv")} == {name}


def test_name_that_is_no_text_does_not_stop_the_table(tmp_path: Path) -> None:
    export_csv(profile(instrument="caf\udce9"), tmp_path / "table.csv")
    assert {row["instrument"] for row in rows(tmp_path / "table.csv")} == {"caf?"}


def test_json_is_the_profile_file(tmp_path: Path) -> None:
    export_json(profile(), tmp_path / "profile.json")
    assert (tmp_path / "profile.json").read_text(encoding="utf-8") == profile_to_json(profile())


def test_period_holds_the_recipe() -> None:
    # By the analysis equation: |a_k| is proportional to 10^(level / 20), and the angle of a_k is the phase.
    levels_db = (-3.0, -10.0, np.nan, -20.0)
    one = recipe(levels_db=levels_db)
    period = averaged_cycle([one])
    coefficients = analyse(period)
    amplitudes_db = 20 * np.log10(np.abs(coefficients[[1, 2, 4]]))
    assert amplitudes_db - amplitudes_db[0] == pytest.approx(np.array([0.0, -7.0, -17.0]), abs=1e-9)
    assert np.angle(coefficients[[1, 2, 4]]) == pytest.approx(one.phase_rad[[0, 1, 3]], abs=1e-9)
    assert np.abs(coefficients[[0, 3, 5, 1000]]).max() < 1e-12
    assert period.shape == (2048,)
    assert np.abs(period).max() == pytest.approx(10 ** (-1 / 20))


def test_levels_are_averaged_where_heard_and_phases_are_the_first_take_s() -> None:
    first = recipe(levels_db=(-1.0, -10.0, np.nan))
    second = replace(recipe(levels_db=(-1.0, -14.0, -20.0)), phase_rad=np.array([0.0, 2.0, -1.5]))
    coefficients = analyse(averaged_cycle([first, second]))
    amplitudes_db = 20 * np.log10(np.abs(coefficients[1:4]))
    assert amplitudes_db - amplitudes_db[0] == pytest.approx(np.array([0.0, -11.0, -19.0]), abs=1e-9)
    assert np.angle(coefficients[1:4]) == pytest.approx(np.array([0.0, 0.5, -1.5]), abs=1e-9)


def test_harmonics_beyond_the_points_are_left_out() -> None:
    period = averaged_cycle([recipe("A0", 27.5, (-1.0,) * 1100)])
    assert abs(analyse(period)[1024]) < 1e-12
    assert np.isfinite(period).all()


def test_cycles_are_written_one_per_note(tmp_path: Path) -> None:
    export_cycles(profile(), tmp_path / "cycles")
    assert sorted(path.name for path in (tmp_path / "cycles").iterdir()) == ["A4.wav", "Fs5.wav"]
    samples, rate = soundfile.read(tmp_path / "cycles" / "A4.wav")
    assert (len(samples), rate) == (2048, 48_000)
    assert np.abs(samples).max() <= 10 ** (-1 / 20) + 2**-23
    assert soundfile.info(tmp_path / "cycles" / "A4.wav").subtype == "PCM_24"
    levels_db = 20 * np.log10(np.abs(analyse(samples)[1:3]))
    assert levels_db[1] - levels_db[0] == pytest.approx(-4.75, abs=1e-4)


def test_same_profile_gives_the_same_bytes(tmp_path: Path) -> None:
    for name in ("one", "two"):
        export_cycles(profile(), tmp_path / name)
    assert (tmp_path / "one" / "A4.wav").read_bytes() == (tmp_path / "two" / "A4.wav").read_bytes()


def test_profile_without_a_heard_harmonic_gives_no_folder(tmp_path: Path) -> None:
    silent = replace(profile(), takes=(Take(recordings=(), notes=(recipe(levels_db=(np.nan,)),)),))
    with pytest.raises(OutputError, match="no heard harmonic"):
        export_cycles(silent, tmp_path / "cycles")
    assert list(tmp_path.iterdir()) == []
