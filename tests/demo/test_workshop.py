"""The workshop's truth: what is said to differ is what the bodies do."""

import numpy as np
import pytest

from timbre_match.demo.workshop import (
    HERON,
    NOTES,
    STAGES,
    TAKES,
    WREN_IN_THE_WHITE,
    WREN_VARNISHED,
    Stage,
    body_of,
    file_name,
    true_difference_db,
)
from timbre_match.units import note_number, note_to_hz

FREQ_HZ = np.geomspace(190.0, 16_000.0, 5000)


@pytest.mark.parametrize("stage", STAGES, ids=lambda stage: stage.file_stem)
def test_truth_is_the_ratio_of_the_bodies(stage: Stage) -> None:
    ratio = np.abs(body_of(stage).response(FREQ_HZ) / body_of(HERON).response(FREQ_HZ))
    np.testing.assert_allclose(true_difference_db(stage, FREQ_HZ), 20.0 * np.log10(ratio), atol=1e-9)


def test_varnish_mends_one_region_and_spoils_another() -> None:
    white, varnished = (np.abs(true_difference_db(stage, FREQ_HZ)) for stage in (WREN_IN_THE_WHITE, WREN_VARNISHED))
    nearer, further = FREQ_HZ[varnished < white - 1.0], FREQ_HZ[varnished > white + 1.0]
    # each wide enough for three takes to show: at least a third of an octave
    for region in (nearer, further):
        assert np.log2(region[-1] / region[0]) > 1.0 / 3.0
    assert nearer[-1] < further[0]


def test_every_take_has_a_name_of_its_own() -> None:
    names = {file_name(stage, take) for stage in STAGES for take in range(1, TAKES + 1)}
    assert len(names) == 9


def test_notes_lie_on_their_strings_in_the_violins_range() -> None:
    numbers = [note_number(written.note) for written in NOTES]
    assert numbers == sorted(set(numbers))
    for written in NOTES:
        # first position: from the open string up to a sixth above it
        assert 1.0 <= note_to_hz(written.note) / note_to_hz(written.string.open_note) < 2.0 ** (10 / 12)
        assert abs(written.intonation_cents) <= 6.0
    assert 0 < sum(written.vibrato for written in NOTES) < len(NOTES) / 2
