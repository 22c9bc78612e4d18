"""Recordings and a profile for the tests of the command line."""

from pathlib import Path

import numpy as np
import pytest

from tests.cli.outputs import PLAYED, short_note
from tests.command_line import run_process
from tests.intake.sounds import write
from timbre_match.units import note_to_hz


@pytest.fixture(scope="session")
def sounds(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two takes of three notes, a folder with each note as a file, and a file that is no recording."""
    folder = tmp_path_factory.mktemp("sounds")
    for take, gain in ((1, 1.0), (2, 0.7)):
        write(folder / f"take_{take}.wav", np.concatenate([short_note(note_to_hz(note), gain) for note in PLAYED]))
    (folder / "single").mkdir()
    for order, note in enumerate(PLAYED):
        write(folder / "single" / f"{order}_{note}.flac", short_note(note_to_hz(note)))
    (folder / "single" / "remarks.txt").write_text("gut strings, 55 % humidity\n")
    (folder / "letter.wav").write_text("Dear Sir, this is not a recording.\n" * 50)
    return folder


@pytest.fixture(scope="session")
def profile(sounds: Path) -> Path:
    path = sounds / "wren.json"
    takes = [sounds / "take_1.wav", sounds / "take_2.wav"]
    ended = run_process("measure", *takes, "--out", path, "--instrument", "Wren", "--family", "violin")
    assert (ended.code, ended.err) == (0, "")
    return path
