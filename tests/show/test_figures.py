"""Pictures hold as many marks as there is data, are valid files, and are the same every time."""

import io
import warnings
import xml.etree.ElementTree as ET
from dataclasses import replace
from typing import Literal

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PathCollection
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.patches import Rectangle

from tests.show import invented
from timbre_match.compare.records import Comparison, Interval, Verdict
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile
from timbre_match.show.drawing import VERDICT_COLOUR, drawable
from timbre_match.show.figures import body_curve_figure, differences_figure, recipe_figure, render
from timbre_match.show.marks import SIGN
from timbre_match.units import note_to_hz

HOSTILE = ["$x^2$ $", "[red]", "\x1b[31m\x00\n", "\u202eabc\u202c שלום", "日本🎻", "x" * 500, "", "\\frac{a}{b}"]


def scatter(panel: Axes, label: str) -> PathCollection:
    (found,) = [one for one in panel.collections if isinstance(one, PathCollection) and one.get_label() == label]
    return found


def stems(panel: Axes, label: str = "stems") -> list[np.ndarray[tuple[int, ...], np.dtype[np.float64]]]:
    (found,) = [one for one in panel.collections if isinstance(one, LineCollection) and one.get_label() == label]
    return [np.asarray(segment) for segment in found.get_segments()]


def offsets(panel: Axes, label: str) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    return np.asarray(scatter(panel, label).get_offsets())


def figures(profile: Profile, target: Target, comparison: Comparison) -> list[Figure]:
    return [recipe_figure(profile, target, comparison), differences_figure(comparison), body_curve_figure(comparison)]


def is_picture(page: bytes, kind: Literal["png", "svg"]) -> bool:
    if kind == "svg":
        return ET.fromstring(page).tag.endswith("svg")
    pixels = imread(io.BytesIO(page), format="png")
    return bool(np.ptp(pixels[..., :3]) > 0.5)


@pytest.mark.parametrize("kind", ["png", "svg"])
def test_files_are_valid_and_the_same_every_time(kind: Literal["png", "svg"]) -> None:
    notes = ("G3", "C#5")
    profile, target, comparison = invented.profile(notes=notes), invented.target(), invented.comparison(notes=notes)
    once = [render(figure, kind) for figure in figures(profile, target, comparison)]
    again = [render(figure, kind) for figure in figures(profile, target, comparison)]
    assert all(is_picture(page, kind) for page in once)
    assert once == again


@pytest.mark.parametrize("name", HOSTILE)
def test_any_name_can_be_drawn(name: str) -> None:
    profile = replace(invented.profile(name, notes=("G3", "A4"), takes=2), stage=name)
    compared = invented.comparison(instrument=name, target_name=name, notes=("G3", "A4"))
    compared = replace(
        compared, stage=name, harmonics=tuple(replace(one, note=f"{one.note} {name}") for one in compared.harmonics)
    )
    for figure in figures(profile, invented.target(name), compared):
        assert is_picture(render(figure, "svg"), "svg")


def test_every_sign_that_the_pictures_use_is_in_their_font() -> None:
    used = "".join(SIGN.values()) + "▲▼=?□…−–→←·×"
    assert drawable(used) == used
    assert drawable("日本") == "□□"


def test_the_recipe_has_a_stem_for_every_heard_harmonic_at_its_mean_level() -> None:
    profile = invented.profile()
    figure = recipe_figure(profile)
    panels = figure.axes
    assert len(panels) == len(invented.NOTES)
    for panel, note in zip(panels, reversed(invented.NOTES), strict=True):
        recipes = [recipe for take in profile.takes for recipe in take.notes if recipe.note == note]
        levels = np.array([recipe.level_db for recipe in recipes])
        heard = np.isfinite(levels).sum(axis=0) >= 2
        drawn = stems(panel)
        assert len(drawn) == heard.sum()
        assert [segment[1, 1] for segment in drawn] == pytest.approx(np.nanmean(levels[:, heard], axis=0).tolist())
        assert [segment[0, 0] for segment in drawn] == pytest.approx(recipes[0].freq_hz[heard].tolist())
        assert len(offsets(panel, "not heard")) == (~heard).sum()
        bands = stems(panel, "takes")
        assert len(bands) == heard.sum()
        for band, low, high in zip(
            bands, np.nanmin(levels[:, heard], axis=0), np.nanmax(levels[:, heard], axis=0), strict=True
        ):
            assert band[0, 1] <= low + 1e-9
            assert band[1, 1] >= high - 1e-9


def test_all_notes_share_one_frequency_axis() -> None:
    limits = {panel.get_xlim() for panel in recipe_figure(invented.profile()).axes}
    assert len(limits) == 1
    upper, lower = body_curve_figure(invented.comparison()).axes
    assert upper.get_xlim() == lower.get_xlim()
    assert upper.get_xscale() == lower.get_xscale() == "log"
    assert upper.get_position().x0 == lower.get_position().x0
    assert upper.get_position().x1 == lower.get_position().x1


def test_the_target_is_a_notch_for_every_harmonic_that_it_has() -> None:
    profile, target = invented.profile(), invented.target()
    for panel, note in zip(recipe_figure(profile, target).axes, reversed(invented.NOTES), strict=True):
        takes = [recipe for take in target.members[0].takes for recipe in take.notes if recipe.note == note]
        heard = np.isfinite([recipe.level_db for recipe in takes]).sum(axis=0) >= 2
        assert len(offsets(panel, "notches")) == heard.sum()


def raised(profile: Profile, by_db: float) -> Target:
    takes = tuple(
        replace(take, notes=tuple(replace(recipe, level_db=recipe.level_db + by_db) for recipe in take.notes))
        for take in profile.takes
    )
    return Target(name="raised", members=(replace(profile, takes=takes),))


def test_without_a_comparison_the_notches_are_the_targets_true_shares() -> None:
    profile = invented.profile(takes=1)
    figure = recipe_figure(profile, raised(profile, 6.0))
    for panel in figure.axes:
        heads = np.array([segment[1] for segment in stems(panel)])
        assert offsets(panel, "notches") == pytest.approx(heads + np.array([0.0, 6.0]))
    assert not any("reference level" in text.get_text() for text in figure.texts)


@pytest.mark.parametrize("told_db", [-4.0, 0.0, 2.5])
def test_with_a_comparison_notch_and_stem_lie_apart_by_what_it_tells(told_db: float) -> None:
    profile = invented.profile(takes=1)
    compared = replace(
        invented.comparison(),
        harmonics=tuple(
            replace(one, difference_db=Interval(value=told_db, low=told_db - 1.0, high=told_db + 1.0))
            for one in invented.comparison().harmonics
            if one.note != "A4"
        ),
    )
    figure = recipe_figure(profile, raised(profile, 6.0), compared)
    for panel, note in zip(figure.axes, reversed(invented.NOTES), strict=True):
        if note == "A4":
            assert "notches" not in {one.get_label() for one in panel.collections}
            continue
        heads = np.array([segment[1] for segment in stems(panel)])
        assert heads - offsets(panel, "notches") == pytest.approx(np.tile([0.0, told_db], (len(heads), 1)), abs=1e-9)
    assert any("at the comparison's reference level: raised" in text.get_text() for text in figure.texts)


def test_the_recipe_marks_the_heard_harmonics_that_differ_and_no_others() -> None:
    compared = invented.comparison()
    panels = recipe_figure(invented.profile(), invented.target(), compared).axes
    for panel, note in zip(panels, reversed(invented.NOTES), strict=True):
        heard = {round(segment[0, 0] / note_to_hz(note)) for segment in stems(panel)}
        for verdict in ("stronger", "weaker"):
            differing = {one.k for one in compared.harmonics if one.note == note and one.verdict == verdict}
            marked = [round(freq_hz / note_to_hz(note)) for freq_hz in offsets(panel, verdict)[:, 0]]
            assert sorted(marked) == sorted(differing & heard)


@pytest.mark.parametrize("which", [differences_figure, body_curve_figure])
def test_every_harmonic_has_its_verdict_mark_in_the_row_of_its_note(which: object) -> None:
    compared = invented.comparison()
    assert callable(which)
    panel = which(compared).axes[0]
    rows = {note: row for row, note in enumerate(invented.NOTES)}
    assert [label.get_text() for label in panel.get_yticklabels()] == list(invented.NOTES)
    for verdict in SIGN:
        chosen = [one for one in compared.harmonics if one.verdict == verdict]
        drawn = offsets(panel, verdict)
        assert drawn[:, 1].tolist() == [rows[one.note] for one in chosen]
        across = [one.k if which is differences_figure else one.freq_hz for one in chosen]
        assert drawn[:, 0].tolist() == pytest.approx(across)


def test_shapes_differ_and_colours_differ_in_grey_too() -> None:
    panel = differences_figure(invented.comparison()).axes[0]
    shapes = {verdict: np.asarray(scatter(panel, verdict).get_paths()[0].vertices).tobytes() for verdict in SIGN}
    assert len(set(shapes.values())) == 4
    grey = {v: float(np.dot(mpl.colors.to_rgb(c), (0.299, 0.587, 0.114))) for v, c in VERDICT_COLOUR.items()}
    assert abs(grey["stronger"] - grey["weaker"]) > 0.15


def test_a_larger_difference_has_a_larger_arrow_head() -> None:
    compared = replace(
        invented.comparison(),
        harmonics=tuple(invented.harmonic("A4", k, size, "stronger") for k, size in ((1, 2.0), (2, 5.0), (3, 11.0))),
    )
    sizes = np.asarray(scatter(differences_figure(compared).axes[0], "stronger").get_sizes())
    assert sizes.tolist() == sorted(sizes.tolist())
    assert len(set(sizes.tolist())) == 3


def gaps_between_marks(figure: Figure, panel: Axes) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Free width between neighbouring marks of one row, in points; negative where two overlap."""
    marks = []
    for verdict in SIGN:
        drawn = scatter(panel, verdict)
        box = drawn.get_paths()[0].get_extents()
        middles = panel.transData.transform(np.asarray(drawn.get_offsets()))[:, 0] * 72.0 / figure.dpi
        for middle, size in zip(middles, np.sqrt(drawn.get_sizes()), strict=True):
            marks.append((middle + size * box.x0, middle + size * box.x1))
    ends = np.array(sorted(marks))
    return np.asarray(ends[1:, 0] - ends[:-1, 1], dtype=np.float64)


@pytest.mark.parametrize("kinds", [("alike",), ("unsettled",), ("stronger",), tuple(SIGN)], ids=" ".join)
@pytest.mark.parametrize(("which", "count"), [(differences_figure, 90), (body_curve_figure, 45)])
def test_marks_of_a_low_note_do_not_run_together(which: object, count: int, kinds: tuple[Verdict, ...]) -> None:
    low = tuple(invented.harmonic("C2", k, 12.0, kinds[k % len(kinds)]) for k in range(1, count + 1))
    assert callable(which)
    figure = which(replace(invented.comparison(), harmonics=low))
    gaps = gaps_between_marks(figure, figure.axes[0])
    assert len(gaps) == count - 1
    assert gaps.min() > (1.5 if kinds == ("alike",) and which is differences_figure else 0.0)


def test_signs_stand_over_stem_and_notch_and_within_the_panel() -> None:
    profile = invented.profile(takes=1)
    # The target has 40 dB more in a stretch of which the comparison tells some 5 dB, as it leans on neighbours.
    takes = tuple(
        replace(
            take,
            notes=tuple(
                replace(one, level_db=one.level_db + 40.0 * ((one.freq_hz > 590.0) & (one.freq_hz < 810.0)))
                for one in take.notes
            ),
        )
        for take in profile.takes
    )
    loud = Target(name="loud", members=(replace(profile, takes=takes),))
    figure = recipe_figure(profile, loud, invented.comparison())
    signs = 0
    for panel in figure.axes:
        heads = {round(segment[1, 0], 6): segment[1, 1] for segment in stems(panel)}
        notches = {round(freq_hz, 6): level_db for freq_hz, level_db in offsets(panel, "notches")}
        for verdict in ("stronger", "weaker"):
            for freq_hz, level_db in offsets(panel, verdict):
                place = round(freq_hz, 6)
                assert level_db > max(heads[place], notches[place]) + 3.0
                assert level_db < panel.get_ylim()[1] - 3.0
                signs += 1
    assert signs > 10


def test_the_body_curve_and_its_regions_are_drawn_where_they_are() -> None:
    compared = invented.comparison()
    upper, lower = body_curve_figure(compared).axes
    (curve,) = [line for line in lower.get_lines() if line.get_label() == "curve"]
    assert np.asarray(curve.get_xdata()).tolist() == [point.freq_hz for point in compared.body_curve]
    assert np.asarray(curve.get_ydata()).tolist() == [point.difference_db.value for point in compared.body_curve]
    assert len(offsets(lower, "harmonics")) == len(compared.harmonics)
    labels = [text.get_text() for text in lower.texts if text.get_label() == "region"]
    assert labels == ["▼ 4.6 dB\n590–810 Hz", "▲ 3.7 dB\n2250–3020 Hz"]
    for panel in (upper, lower):
        spans = {
            (round(patch.get_x(), 6), round(patch.get_x() + patch.get_width(), 6))
            for patch in panel.patches
            if isinstance(patch, Rectangle)
        }
        assert {(region.low_hz, region.high_hz) for region in compared.regions} <= spans


def test_labels_of_regions_that_crowd_stand_at_different_heights() -> None:
    crowd = tuple(invented.region(low, 1.15 * low, 3.0) for low in (400.0, 500.0, 640.0))
    lower = body_curve_figure(invented.comparison(regions=crowd)).axes[1]
    heights = [text.get_position()[1] for text in lower.texts if text.get_label() == "region"]
    assert len(set(heights)) == 3


def test_one_take_has_no_spread_to_show() -> None:
    (panel,) = recipe_figure(invented.profile(notes=("A4",), takes=1)).axes
    labels = {one.get_label() for one in panel.collections}
    assert "stems" in labels
    assert "takes" not in labels


def test_a_target_that_shares_no_heard_harmonic_leaves_no_notch() -> None:
    profile = invented.profile(notes=("A4",), takes=1)
    recipe = profile.takes[0].notes[0]
    deaf = replace(recipe, level_db=np.full(recipe.k.size, np.nan), heard=np.zeros(recipe.k.size, dtype=bool))
    member = replace(profile, takes=(replace(profile.takes[0], notes=(deaf,)),))
    (panel,) = recipe_figure(profile, Target(name="deaf", members=(member,))).axes
    assert "notches" not in {one.get_label() for one in panel.collections}
    (panel,) = recipe_figure(member, Target(name="whole", members=(profile,))).axes
    assert len(offsets(panel, "not heard")) == recipe.k.size


def test_bare_records_are_drawn_without_complaint() -> None:
    nothing = invented.profile(takes=0)
    bare = replace(invented.comparison(), harmonics=(), body_curve=(), regions=())
    for figure in (recipe_figure(nothing), differences_figure(bare), body_curve_figure(bare)):
        assert is_picture(render(figure, "png"), "png")


def test_drawing_leaves_the_users_matplotlib_settings_alone() -> None:
    with mpl.rc_context({"font.size": 3.0, "axes.facecolor": "black"}):
        before = dict(mpl.rcParams)
        figure = differences_figure(invented.comparison())
        page = render(figure, "svg")
        assert dict(mpl.rcParams) == before
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert page == render(differences_figure(invented.comparison()), "svg")
