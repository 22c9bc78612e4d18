"""Profiles with a known truth for the tests of the comparison."""

import hashlib
from collections.abc import Callable, Mapping

import numpy as np
from numpy.typing import NDArray

from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.measure.recipe import Recipe
from timbre_match.units import note_to_hz

Array = NDArray[np.float64]

NOTES = ("G3", "A3", "B3", "D4", "E4", "F#4", "A4", "B4", "C#5", "E5")
TOP_HZ = 8000.0


def nothing(freq_hz: Array) -> Array:
    return np.zeros(freq_hz.shape)


def dip(centre_hz: float, depth_db: float, width_octaves: float) -> Callable[[Array], Array]:
    """A change with the shape of a bell over log frequency; the width is at half depth."""
    return lambda freq_hz: depth_db * 2.0 ** (-((2.0 * np.log2(freq_hz / centre_hz) / width_octaves) ** 2))


def recipe(note: str, level_db: Array, *, floor_db: float = -90.0, a4_hz: float = 440.0, unheard: int = 0) -> Recipe:
    """A recipe from levels in dB on any scale, turned into shares; the last `unheard` harmonics are lost."""
    share = level_db - 10.0 * np.log10(np.sum(10.0 ** (level_db / 10.0)))
    f0_hz = note_to_hz(note, a4_hz)
    heard = np.arange(share.size) < share.size - unheard
    return Recipe(
        note=note,
        f0_hz=f0_hz,
        cents=0.0,
        start_s=0.0,
        end_s=1.0,
        cycles=100,
        points_per_cycle=2 * share.size + 2,
        kind="held",
        k=np.arange(1, share.size + 1),
        freq_hz=f0_hz * np.arange(1, share.size + 1),
        level_db=np.where(heard, share, np.nan),
        se_db=np.where(heard, 0.2, np.nan),
        floor_db=np.full(share.size, floor_db),
        heard=heard,
        phase_rad=np.where(heard, 0.0, np.nan),
    )


def base_levels(note: str) -> Array:
    """The same irregular source for every profile, dB."""
    k = np.arange(1, int(TOP_HZ / note_to_hz(note)) + 1)
    return np.asarray(-8.0 * np.log2(k) + 3.0 * np.sin(2.7 * k + 5.0 * len(note) + ord(note[0])))


def take_of(recipes: tuple[Recipe, ...], *, file: str = "take.wav") -> Take:
    """A take of one recording, whose SHA-256 is that of the levels: another sound is another recording."""
    heard = hashlib.sha256()
    for one in recipes:
        heard.update(one.note.encode() + one.level_db.tobytes())
    return Take(recordings=(Source(file=file, sha256=heard.hexdigest()),), notes=recipes)


def profile(
    seed: int,
    *,
    change: Callable[[Array], Array] = nothing,
    own: Mapping[tuple[str, int], float] | None = None,
    takes: int = 3,
    notes: tuple[str, ...] = NOTES,
    scatter_db: float = 1.0,
    tilt_db: float = 0.3,
    a4_hz: float = 440.0,
    family: str = "violin",
    unheard: int = 0,
) -> Profile:
    """Takes with normal scatter of each level and a tilt of each note, both in dB as standard deviations."""
    rng = np.random.default_rng(seed)
    made: list[Take] = []
    for _ in range(takes):
        recipes = []
        for note in notes:
            level = base_levels(note)
            k = np.arange(1, level.size + 1)
            freq_hz = np.asarray(note_to_hz(note, a4_hz) * k, dtype=np.float64)
            level = level + change(freq_hz) + np.array([(own or {}).get((note, int(one)), 0.0) for one in k])
            level = level + rng.normal(0, tilt_db) * np.log2(freq_hz / 1000.0) + rng.normal(0, scatter_db, k.size)
            recipes.append(recipe(note, level, a4_hz=a4_hz, unheard=unheard))
        made.append(take_of(tuple(recipes), file=f"{seed}_{len(made) + 1}.wav"))
    return Profile(instrument=f"instrument {seed}", stage="", family=family, a4_hz=a4_hz, takes=tuple(made))
