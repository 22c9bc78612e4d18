"""What the maker is told about takes as a whole: doubles, takes that share no note, channels, notes not found."""

from pathlib import Path

import numpy as np
import pytest
import soundfile

from timbre_match.errors import NoHeldNoteError, RecordingError
from timbre_match.intake.notes import held_notes
from timbre_match.intake.recording import Recording
from timbre_match.measure.recipe import measure_recipe
from timbre_match.measure.takes import Listening, measure_takes

RATE = 44_100


def tone(f0_hz: float, seed: int = 0) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    time_s = np.arange(RATE) / RATE
    sound = sum(np.cos(2.0 * np.pi * k * f0_hz * time_s + k * k) / k for k in range(1, 9))
    return np.asarray(0.1 * sound + 1e-4 * np.random.default_rng(seed).standard_normal(RATE))


def written(path: Path, samples: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> Path:
    soundfile.write(path, samples, RATE, subtype="PCM_24")
    return path


def test_the_same_recording_twice_is_one_take(tmp_path: Path) -> None:
    first = written(tmp_path / "a.wav", tone(440.0))
    copy = written(tmp_path / "copy.wav", tone(440.0))
    measured = measure_takes([first, copy], Listening())
    assert len(measured.profile.takes) == 1
    assert "same recording" in str(measured.failures[0])


def test_takes_without_a_common_note_are_pointed_out(tmp_path: Path) -> None:
    places = [written(tmp_path / "a.wav", tone(440.0)), written(tmp_path / "b.wav", tone(523.25))]
    assert any("No note is in all takes" in warning for warning in measure_takes(places, Listening()).warnings)
    again = [places[0], written(tmp_path / "c.wav", tone(440.0, seed=1))]
    assert not measure_takes(again, Listening()).warnings


def test_channels_that_differ_are_pointed_out(tmp_path: Path) -> None:
    sound = tone(440.0)
    left = written(tmp_path / "left.wav", np.stack([sound, 0.3 * sound], axis=1))
    right = written(tmp_path / "right.wav", np.stack([0.3 * sound, sound], axis=1))
    assert any("--channel" in warning for warning in measure_takes([left, right], Listening()).warnings)
    assert not measure_takes([left, right], Listening(channel=1)).warnings


def test_the_family_decides_whether_notes_ring(tmp_path: Path) -> None:
    time_s = np.arange(RATE) / RATE
    plucked = written(tmp_path / "p.wav", np.concatenate([np.zeros(RATE // 4), tone(220.0) * 10.0 ** (-2.0 * time_s)]))
    for family, kind in (
        ("", "ringing"),
        ("hurdy-gurdy", "ringing"),
        ("classical guitar", "ringing"),
        ("viola", "held"),
    ):
        (take,) = measure_takes([plucked], Listening(), family=family).profile.takes
        assert [(note.kind, note.ringing is not None) for note in take.notes] == [(kind, kind == "ringing")]


def test_a_note_that_was_played_but_not_found_is_named(tmp_path: Path) -> None:
    measured = measure_takes([written(tmp_path / "a.wav", tone(440.0))], Listening(notes=("A4", "D4")))
    assert "Not found: D4." in measured.warnings


def test_a_note_named_too_low_is_doubted(tmp_path: Path) -> None:
    sounds = written(tmp_path / "g.wav", tone(392.0))
    low = measure_takes([sounds], Listening(notes=("G3",))).warnings
    assert any(
        warning.startswith("G3 was read as it was named, but only every second") and "G4" in warning for warning in low
    )
    assert not measure_takes([sounds], Listening(notes=("G4",))).warnings
    twelfth = written(tmp_path / "d.wav", tone(3 * 196.0))
    low = measure_takes([twelfth], Listening(notes=("G3",))).warnings
    assert any("every third" in warning and "D5" in warning for warning in low)


def test_a_folder_without_recordings(tmp_path: Path) -> None:
    with pytest.raises(RecordingError, match="no recording in this folder"):
        measure_takes([tmp_path], Listening())


@pytest.mark.parametrize("offset", [0.05, 0.2, 0.5])
def test_an_offset_moves_no_boundary(offset: float) -> None:
    quiet = np.zeros(RATE // 2)
    sound = np.concatenate([quiet, tone(196.0), quiet]) + 1e-4 * np.random.default_rng(3).standard_normal(2 * RATE)

    def found(samples: np.ndarray[tuple[int], np.dtype[np.float64]]) -> tuple[float, float]:
        recording = Recording(
            file="", sha256="", samples=samples, sample_rate_hz=RATE, channel=1, channel_count=1, warnings=()
        )
        (note,) = held_notes(recording)
        return note.start_s, note.end_s

    assert found(sound + offset) == pytest.approx(found(sound), abs=0.011)


def test_a_note_of_which_nothing_is_heard_is_an_error() -> None:
    clean = np.concatenate([tone(1760.0), np.zeros(RATE)])
    facts = {"file": "hiss.wav", "sha256": "", "sample_rate_hz": RATE, "channel": 1, "channel_count": 1}
    (note,) = held_notes(Recording(samples=clean, warnings=(), **facts))  # type: ignore[arg-type]
    hiss = 0.1 * np.random.default_rng(8).standard_normal(2 * RATE)
    with pytest.raises(NoHeldNoteError, match="stands out of the noise"):
        measure_recipe(Recording(samples=hiss, warnings=(), **facts), note)  # type: ignore[arg-type]
