"""Sustain in tables and in its picture: what they say is what the comparison found."""

import io
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.collections import PathCollection
from matplotlib.image import imread

from tests.compare.plucked import NOTES, bell, plucked
from tests.show import invented
from timbre_match.advise.wording import in_per_cent
from timbre_match.compare import compare
from timbre_match.compare.records import Comparison, Interval, SustainRegion
from timbre_match.compare.target import as_target
from timbre_match.show.figures import render, sustain_figure
from timbre_match.show.marks import SUSTAIN_VERDICTS, ratio_interval
from timbre_match.show.tables import as_text, comparison_summary, profile_summary

USED = NOTES[:4]
INSTRUMENT = plucked(1, decay=bell(400.0, -0.8, 0.8), notes=USED, uneven=0.2)
TARGET = as_target(plucked(2, notes=USED))


@pytest.fixture(scope="module")
def found() -> Comparison:
    return compare(INSTRUMENT, TARGET)


def points(panel: Axes, label: str) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    chosen = [one for one in panel.collections if isinstance(one, PathCollection) and one.get_label() == label]
    return np.concatenate([np.asarray(one.get_offsets()) for one in chosen])


def test_a_ratio_in_per_cent_reads_in_its_direction() -> None:
    assert in_per_cent(Interval(value=0.65, low=0.52, high=0.8)) == "35 % (20 to 48)"
    assert in_per_cent(Interval(value=1.6, low=1.3, high=1.9)) == "60 % (30 to 90)"
    assert in_per_cent(Interval(value=0.9, low=0.7, high=1.1)) == "10 % (−10 to 30)"
    assert ratio_interval(Interval(value=0.65, low=0.52, high=0.8)) == "0.65 (0.52 to 0.80)"


def test_the_table_says_where_partials_die_sooner(found: Comparison) -> None:
    sustain = found.sustain
    assert sustain is not None
    region = SustainRegion(
        low_hz=300.0,
        high_hz=500.0,
        ratio=Interval(value=0.65, low=0.52, high=0.8),
        verdict="shorter",
        harmonics=8,
        notes=5,
    )
    ratio = Interval(value=1.6, low=1.3, high=1.9)
    longer = replace(region, low_hz=1000.0, high_hz=2000.0, ratio=ratio, verdict="longer", harmonics=1)
    told = replace(found, sustain=replace(sustain, regions=(longer, region)))
    text = " ".join(as_text([comparison_summary(told)], 200).split())
    assert "◀ Partials between 300 and 500 Hz die 35 % (20 to 48) sooner, seen in 8 partials of 5 notes." in text
    assert "▶ Partials between 1000 and 2000 Hz ring 60 % (30 to 90) longer, seen in 1 partial of 5 notes." in text
    for note in sustain.notes:
        assert f"{note.note} {ratio_interval(note.ratio)} {note.harmonics}" in text


def test_held_notes_have_no_table_of_sustain() -> None:
    assert "Sustain" not in as_text([comparison_summary(invented.comparison())], 200)


@pytest.mark.parametrize("width", [60, 100, 200])
def test_the_table_fits_its_window(found: Comparison, width: int) -> None:
    assert max(map(len, as_text([comparison_summary(found)], width).splitlines())) <= width


def test_every_partial_is_drawn_once_with_the_takes_mean(found: Comparison) -> None:
    sustain = found.sustain
    assert sustain is not None
    names = [one.note for one in sustain.harmonics] + [one.note for one in sustain.apart]
    *panels, lower = sustain_figure(INSTRUMENT, TARGET, found).axes
    assert len(panels) == len(USED)
    for panel, note in zip(panels, reversed(sustain.notes), strict=True):
        drawn = points(panel, "instrument")
        assert len(drawn) == names.count(note.note)
        recipes = [recipe for take in INSTRUMENT.takes for recipe in take.notes if recipe.note == note.note]
        times = [recipe.ringing.t60_s for recipe in recipes if recipe.ringing is not None]
        assert sorted(drawn[:, 1]) == pytest.approx(sorted(np.exp(np.mean(np.log(times), axis=0))))
    shown = sum(len(points(lower, verdict)) for verdict in SUSTAIN_VERDICTS)
    assert shown == len(sustain.harmonics)


def test_shorter_and_longer_have_shapes_of_their_own(found: Comparison) -> None:
    figure = sustain_figure(INSTRUMENT, TARGET, found)
    shapes = {
        one.get_label(): np.round(np.asarray(one.get_paths()[0].vertices), 3).tobytes()
        for one in figure.axes[-1].collections
        if isinstance(one, PathCollection) and len(one.get_paths())
    }
    assert len({shapes[verdict] for verdict in SUSTAIN_VERDICTS}) == 4


def test_files_are_valid_and_the_same_every_time(found: Comparison) -> None:
    first = render(sustain_figure(INSTRUMENT, TARGET, found), "svg")
    assert first == render(sustain_figure(INSTRUMENT, TARGET, found), "svg")
    assert ET.fromstring(first).tag.endswith("svg")
    pixels = imread(io.BytesIO(render(sustain_figure(INSTRUMENT, TARGET, found), "png")), format="png")
    assert np.ptp(pixels[..., :3]) > 0.5


def test_a_comparison_of_held_notes_has_no_such_picture() -> None:
    with pytest.raises(ValueError, match="no ringing notes"):
        sustain_figure(invented.profile(), invented.target(), invented.comparison())


def test_the_table_of_a_profile_tells_decay_and_inharmonicity_of_ringing_notes_alone() -> None:
    text = as_text([profile_summary(INSTRUMENT)], 100)
    note = INSTRUMENT.takes[0].notes[0]
    assert note.ringing is not None
    strongest = int(np.argmax(note.level_db))
    row = next(line for line in text.splitlines() if line.startswith(note.note))
    assert row.split()[-2:] == [f"{note.ringing.t60_s[strongest]:.1f}", f"{1e6 * note.ringing.inharmonicity_b:.0f}"]
    assert "rings" in text
    assert "rings" not in as_text([profile_summary(invented.profile())], 100)
