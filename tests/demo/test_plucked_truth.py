"""The Finch's recordings measured, against the truth that the measurement is never told.

The limits are those that ringing notes are held to in `tests/measure/known_strings.py`: B within 5 % or 2e-6, f0 within
0.5 cent, onset levels within 0.5 dB, T60 within 5 %, of partials 20 dB above their floor; or 2.5 standard errors.
"""

from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.intake.sounds import recording_of
from tests.measure.known_strings import (
    B_LIMIT,
    B_SHARE_LIMIT,
    CENTS_LIMIT,
    CLEAR_DB,
    DB_PER_NEPER,
    LEVEL_LIMIT_DB,
    LN_1000,
    NAMED_LIMIT,
    SURE,
    T60_LIMIT,
    Array,
)
from timbre_match.demo import plucked_workshop
from timbre_match.demo.draws import Draws
from timbre_match.demo.plucked_render import ringing_string
from timbre_match.demo.plucked_workshop import (
    FINCH_AFTER_THE_WINTER,
    FINCH_STRUNG_UP,
    PLUCKED_FAMILY,
    PLUCKED_STAGES,
    PluckedStage,
    TruePartials,
    plucks_of_take,
    true_partials,
    true_sustain_factor,
    vibrations,
)
from timbre_match.demo.room import REVERBERATION_S, SAMPLE_RATE_HZ, microphone_noise
from timbre_match.demo.tones import plucked_takes
from timbre_match.intake.notes import held_notes
from timbre_match.measure.profile import Profile
from timbre_match.measure.recipe import Recipe, measure_recipe
from timbre_match.measure.records import Ringing
from timbre_match.measure.takes import Listening, measure_takes

_ROOM_GONE = 4.0
"""A partial that lasts for so many reverberation times is still there when the room has answered."""
_FEWEST_BEATS = 3.0
"""In the time of a fall by 60 dB: the slowest beats of `tests/measure/known_strings.py`."""
_ONSET_S = 0.001
"""The onset is found from power over a millisecond."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Measured:
    """A note, what was measured of it, and the truth."""

    recipe: Recipe
    ringing: Ringing
    truth: TruePartials

    @property
    def clear(self) -> NDArray[np.int64]:
        """Indices of the partials whose level and decay are judged."""
        count = min(len(self.recipe.k), len(self.truth.k))
        above_db = np.where(self.recipe.heard, self.recipe.level_db - self.recipe.floor_db, -np.inf)[:count]
        return np.flatnonzero((above_db > CLEAR_DB) & (self.truth.t60_s[:count] > _ROOM_GONE * REVERBERATION_S))

    def level_errors(self) -> tuple[Array, Array]:
        """Errors of the levels in dB, both sides as shares of the judged partials, and their standard errors."""
        found, true = self.recipe.level_db[self.clear], self.truth.level_db[self.clear]
        found, true = (level - 10.0 * np.log10(np.sum(10.0 ** (level / 10.0))) for level in (found, true))
        return found - true, self.recipe.se_db[self.clear]

    def t60_errors(self) -> tuple[Array, Array]:
        """Errors of T60 as a share of it, and their standard errors."""
        true = self.truth.t60_s[self.clear]
        return self.ringing.t60_s[self.clear] / true - 1.0, self.ringing.t60_se_s[self.clear] / true


def _measured(recipe: Recipe, truth: TruePartials) -> Measured:
    assert recipe.ringing is not None
    return Measured(recipe=recipe, ringing=recipe.ringing, truth=truth)


@pytest.fixture(scope="module")
def profiles() -> dict[PluckedStage, Profile]:
    found = {}
    for stage, recordings in plucked_takes().items():
        measured = measure_takes(recordings, Listening(), instrument=stage.instrument, family=PLUCKED_FAMILY)
        assert not measured.failures
        assert not measured.warnings
        found[stage] = measured.profile
    return found


def _notes(stage: PluckedStage, profile: Profile) -> list[Measured]:
    return [
        _measured(recipe, true_partials(stage, pluck))
        for number, take in enumerate(profile.takes, start=1)
        for recipe, pluck in zip(take.notes, plucks_of_take(stage, number), strict=True)
    ]


@pytest.mark.parametrize("stage", PLUCKED_STAGES, ids=lambda stage: stage.name)
def test_recordings_give_the_truth(profiles: dict[PluckedStage, Profile], stage: PluckedStage) -> None:
    level_kept: list[bool] = []
    t60_kept: list[bool] = []
    for note in _notes(stage, profiles[stage]):
        b, truth = note.ringing.inharmonicity_b, note.truth
        assert abs(1200.0 * np.log2(note.recipe.f0_hz / truth.f0_hz)) < CENTS_LIMIT
        limit = max(B_SHARE_LIMIT * truth.inharmonicity_b, B_LIMIT)
        assert abs(b - truth.inharmonicity_b) < max(limit, SURE * note.ringing.inharmonicity_se)
        for kept, (error, se), limit in (
            (level_kept, note.level_errors(), LEVEL_LIMIT_DB),
            (t60_kept, note.t60_errors(), T60_LIMIT),
        ):
            kept.extend(np.abs(error) <= np.maximum(limit, SURE * se))
    assert len(level_kept) > 200
    assert np.mean(level_kept) > 0.95
    assert np.mean(t60_kept) > 0.95


@pytest.mark.parametrize("stage", PLUCKED_STAGES, ids=lambda stage: stage.name)
def test_partials_that_move_both_ways_are_told(profiles: dict[PluckedStage, Profile], stage: PluckedStage) -> None:
    named = []
    for note in _notes(stage, profiles[stage]):
        for index in note.clear:
            shape = note.ringing.decay[index]
            if not note.truth.both_ways[index]:
                assert shape != "beating"
                continue
            if note.truth.beat_hz[index] * note.truth.t60_s[index] > _FEWEST_BEATS:
                named.append(shape == "beating")
            # what beats too slowly for that is not known well, and says so
            if shape == "plain":
                assert note.ringing.t60_se_s[index] > 0.02 * note.ringing.t60_s[index]
    assert len(named) > 25
    assert np.mean(named) >= NAMED_LIMIT


def test_claimed_errors_are_honest_where_no_room_answers(monkeypatch: pytest.MonkeyPatch) -> None:
    # what the room adds in the first tenths of a second is in no claimed error: strings and microphone alone
    monkeypatch.setattr(plucked_workshop, "workshop_room", lambda: np.ones(1))
    level_z: list[float] = []
    t60_z: list[float] = []
    b_z: list[float] = []
    for index, pluck in enumerate(plucks_of_take(FINCH_STRUNG_UP, 1)):
        sound = 0.05 * ringing_string(vibrations(FINCH_STRUNG_UP, pluck), pluck.length_s)
        sound = np.concatenate([np.zeros(SAMPLE_RATE_HZ // 2), sound])
        sound += microphone_noise(len(sound), SAMPLE_RATE_HZ, Draws(3, index))
        recording = recording_of(sound, SAMPLE_RATE_HZ)
        note = max(held_notes(recording), key=lambda found: found.end_s - found.start_s)
        found = _measured(measure_recipe(recording, note), true_partials(FINCH_STRUNG_UP, pluck))
        error, se = found.t60_errors()
        t60_z.extend(error / se)
        error, se = found.level_errors()
        # an onset taken a little late finds what dies fast a little lower
        fast = LN_1000 / found.truth.t60_s[found.clear] * DB_PER_NEPER * _ONSET_S
        level_z.extend(error / np.hypot(se, fast))
        b_z.append((found.ringing.inharmonicity_b - found.truth.inharmonicity_b) / found.ringing.inharmonicity_se)
    assert len(level_z) > 60
    for z in (level_z, t60_z):
        # the middle of |z| is 0.674 for an honest error, and one in a hundred lies beyond 2.6
        assert np.median(np.abs(z)) < 1.25 * 0.6745
        assert np.mean(np.abs(z) < 2.6) > 0.95
    assert np.all(np.abs(b_z) < 3.0)


def test_measured_sustain_tells_what_the_winter_did(profiles: dict[PluckedStage, Profile]) -> None:
    ratio: dict[bool, list[float]] = {True: [], False: []}
    before, after = (_notes(stage, profiles[stage]) for stage in PLUCKED_STAGES)
    names = [note.recipe.note for note in before[:6]]
    for name in names:
        sides = [[note for note in notes if note.recipe.note == name] for notes in (before, after)]
        truth = sides[0][0].truth
        for index in sorted(set.intersection(*(set(note.clear) for side in sides for note in side))):
            factor = float(true_sustain_factor(FINCH_AFTER_THE_WINTER, truth.freq_hz[index]))
            if factor in (0.5, 1.0):
                earlier, later = (np.mean([np.log(note.ringing.t60_s[index]) for note in side]) for side in sides)
                ratio[factor == 0.5].append(float(later - earlier))
    for halved, logs in ratio.items():
        assert len(logs) >= 10
        off = np.mean(logs) - (np.log(0.5) if halved else 0.0)
        assert abs(off) < 3.0 * np.std(logs) / np.sqrt(len(logs))
        assert abs(off) < 0.03
