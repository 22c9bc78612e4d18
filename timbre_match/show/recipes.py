"""The picture of a profile: each note's recipe as stems, with the target as notches and the takes' spread in grey."""

import math
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from timbre_match.advise.wording import counted
from timbre_match.compare.records import Comparison, HarmonicDifference
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile
from timbre_match.measure.recipe import Recipe
from timbre_match.show import drawing
from timbre_match.show.drawing import BAND, INK, QUIET, RANGE, STEM, VERDICT_COLOUR, VERDICT_MARKER
from timbre_match.show.marks import VERDICTS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

Array = NDArray[np.float64]

_DEEPEST_DB: Final = 60.0
_LEAST_BAND_DB: Final = 0.8


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _DrawnRecipe:
    """One note over all takes: arrays of shape (n_harmonics,), levels NaN where most takes did not hear a harmonic."""

    note: str
    k: NDArray[np.int64]
    freq_hz: Array
    level_db: Array
    lowest_db: Array
    highest_db: Array
    floor_db: Array


def recipe_figure(profile: Profile, target: Target | None = None, comparison: Comparison | None = None) -> "Figure":
    """Draw the recipe of each note as stems, one panel a note, all on one frequency axis.

    The stem is the mean level of the takes, the grey band behind its head reaches from the lowest to the highest
    take, a cross marks the noise floor of a harmonic that was not heard. The target is a notch across the stem: with
    its own shares, or, where a comparison is given, at the comparison's reference level, so that notch and stem lie
    apart by the differences that the comparison tells. Each note is shifted for this by the median over its compared
    harmonics; a note that was not compared then has no notches.

    Parameters
    ----------
    profile : Profile
    target : Target, optional
        Adds the notches.
    comparison : Comparison, optional
        Adds the sign of `stronger` or `weaker` over the harmonics that differ, and sets the target's level.
    """
    takes = len(profile.takes)
    notes = _drawn_recipes([profile])
    wanted = {drawn.note: drawn for drawn in _drawn_recipes(target.members)} if target else {}
    compared: dict[str, list[HarmonicDifference]] = defaultdict(list)
    for harmonic in comparison.harmonics if comparison else ():
        compared[harmonic.note].append(harmonic)
    limits = drawing.frequency_limits([freq for drawn in notes for freq in drawn.freq_hz])
    top_db, bottom_db = _level_limits(notes)
    with drawing.look():
        figure, panels = drawing.sheet([1.5] * max(len(notes), 1), top_in=1.35, bottom_in=0.75, gap_in=0.16)
        for panel, drawn in zip(panels, notes, strict=False):
            if takes > 1:
                _draw_spread(panel, drawn)
            _draw_recipe(panel, drawn, bottom_db)
            if drawn.note in wanted:
                shift_db = _target_shift_db(drawn, wanted[drawn.note], compared[drawn.note]) if comparison else 0.0
                _draw_notches(panel, drawn, wanted[drawn.note], shift_db)
            _draw_signs(panel, drawn, compared[drawn.note])
            panel.set_ylim(bottom_db, top_db)
            panel.set_yticks([tick for tick in (0, -20, -40, -60, -80) if bottom_db < tick < top_db])
            panel.tick_params(axis="y", labelsize=10)
            panel.grid(axis="y", color=BAND, linewidth=0.6, alpha=0.6)
            drawing.note_label(panel, drawn.note)
            drawing.frequency_axis(panel, *limits, labelled=panel is panels[len(notes) - 1])
        drawing.level_axis(figure, panels, "Share in the note's sound (dB)" if len(notes) > 2 else "Share (dB)")
        level = " drawn at the comparison's reference level" if comparison else ""
        against = f", with the target{level}: {drawing.drawable(target.name)}" if target else ""
        drawing.title(figure, drawing.named(profile.instrument, profile.stage), f"What each note is made of{against}")
        drawing.legend(figure, _recipe_handles(takes, with_target=bool(wanted), with_verdicts=comparison is not None))
    return figure


def _draw_spread(panel: "Axes", drawn: _DrawnRecipe) -> None:
    heard = np.isfinite(drawn.level_db)
    half = np.maximum(0.5 * (drawn.highest_db - drawn.lowest_db)[heard], 0.5 * _LEAST_BAND_DB)
    middle = 0.5 * (drawn.highest_db + drawn.lowest_db)[heard]
    panel.vlines(
        drawn.freq_hz[heard], middle - half, middle + half, color=RANGE, linewidth=14, zorder=1.5, label="takes"
    )


def _draw_recipe(panel: "Axes", drawn: _DrawnRecipe, bottom_db: float) -> None:
    heard = np.isfinite(drawn.level_db)
    freq_hz, level_db = drawn.freq_hz[heard], drawn.level_db[heard]
    panel.vlines(freq_hz, bottom_db, level_db, color=STEM, linewidth=3.2, zorder=2, label="stems")
    unheard = ~heard & np.isfinite(drawn.floor_db)
    panel.scatter(
        drawn.freq_hz[unheard], np.maximum(drawn.floor_db[unheard], bottom_db + 2.0), marker="x", s=16,
        color=QUIET, linewidths=1.0, zorder=2, label="not heard",
    )  # fmt: skip


def _target_shift_db(drawn: _DrawnRecipe, wanted: _DrawnRecipe, compared: Sequence[HarmonicDifference]) -> float:
    """Level that brings a note of the target to the comparison's reference level; NaN where nothing was compared."""
    shared = min(drawn.k.size, wanted.k.size)
    apart_db = [
        float(drawn.level_db[harmonic.k - 1] - wanted.level_db[harmonic.k - 1]) - harmonic.difference_db.value
        for harmonic in compared
        if harmonic.k <= shared
    ]
    known = [one for one in apart_db if math.isfinite(one)]
    return float(np.median(known)) if known else math.nan


def _draw_notches(panel: "Axes", drawn: _DrawnRecipe, wanted: _DrawnRecipe, shift_db: float) -> None:
    shared = min(drawn.k.size, wanted.k.size)
    target_db = wanted.level_db + shift_db
    shown = np.isfinite(target_db[:shared])
    if not shown.any():
        return
    freq_hz, level_db = drawn.freq_hz[:shared][shown], target_db[:shared][shown]
    panel.scatter(freq_hz, level_db, marker="_", s=100, color=INK, linewidths=2.2, zorder=3, label="notches")


def _draw_signs(panel: "Axes", drawn: _DrawnRecipe, compared: Sequence[HarmonicDifference]) -> None:
    level_of = dict(zip(drawn.k.tolist(), drawn.level_db.tolist(), strict=True))
    freq_of = dict(zip(drawn.k.tolist(), drawn.freq_hz.tolist(), strict=True))
    for verdict in ("stronger", "weaker"):
        chosen = [
            harmonic
            for harmonic in compared
            if harmonic.verdict == verdict and math.isfinite(level_of.get(harmonic.k, math.nan))
        ]
        heads = [level_of[h.k] + max(-h.difference_db.value, 0.0) + 7.0 for h in chosen]
        panel.scatter(
            [freq_of[h.k] for h in chosen], heads, marker=VERDICT_MARKER[verdict], s=46,
            color=VERDICT_COLOUR[verdict], linewidths=0, zorder=4, label=verdict,
        )  # fmt: skip


def _recipe_handles(takes: int, *, with_target: bool, with_verdicts: bool) -> list["Line2D"]:
    harmonic = "harmonic" if takes == 1 else f"harmonic, mean of {counted(takes, 'take')}"
    handles = [drawing.mark(harmonic, marker="|", markersize=15, color=STEM, markeredgewidth=3.2)]
    if with_target:
        handles.append(drawing.mark("target", marker="_", markersize=12, markeredgewidth=2.2))
    if takes > 1:
        handles.append(drawing.mark("from lowest to highest take", marker="s", markersize=12, color=RANGE))
    handles.append(drawing.mark("not heard: noise", marker="x", color=QUIET, markersize=6))
    if with_verdicts:
        handles += [drawing.verdict_mark(verdict, verdict) for verdict in VERDICTS[:2]]
    return handles


def _drawn_recipes(profiles: Iterable[Profile]) -> list[_DrawnRecipe]:
    """Gather the takes of every note, the highest note first."""
    by_note: dict[str, list[Recipe]] = defaultdict(list)
    for profile in profiles:
        for take in profile.takes:
            for recipe in take.notes:
                by_note[recipe.note].append(recipe)
    drawn = [_drawn_recipe(note, recipes) for note, recipes in by_note.items()]
    return sorted((one for one in drawn if one.k.size), key=lambda one: -float(one.freq_hz[0]))


def _drawn_recipe(note: str, recipes: Sequence[Recipe]) -> _DrawnRecipe:
    count = max(recipe.k.size for recipe in recipes)
    levels = np.full((len(recipes), count), np.nan)
    floors = np.full((len(recipes), count), np.nan)
    for row, recipe in enumerate(recipes):
        levels[row, : recipe.k.size] = np.where(recipe.heard, recipe.level_db, np.nan)
        floors[row, : recipe.k.size] = recipe.floor_db
    heard = 2 * np.isfinite(levels).sum(axis=0) > len(recipes)
    level, lowest, highest, floor = (np.full(count, np.nan) for _ in range(4))
    level[heard] = np.nanmean(levels[:, heard], axis=0)
    lowest[heard] = np.nanmin(levels[:, heard], axis=0)
    highest[heard] = np.nanmax(levels[:, heard], axis=0)
    measured = np.isfinite(floors).any(axis=0)
    floor[measured] = np.nanmax(floors[:, measured], axis=0)
    k = np.arange(1, count + 1, dtype=np.int64)
    return _DrawnRecipe(
        note=note,
        k=k,
        freq_hz=np.asarray(k * np.mean([recipe.f0_hz for recipe in recipes]), dtype=np.float64),
        level_db=level,
        lowest_db=lowest,
        highest_db=highest,
        floor_db=floor,
    )


def _level_limits(notes: Sequence[_DrawnRecipe]) -> tuple[float, float]:
    levels = np.concatenate([drawn.level_db[np.isfinite(drawn.level_db)] for drawn in notes] or [np.zeros(1)])
    if not levels.size:
        levels = np.zeros(1)
    strongest = float(levels.max())
    return strongest + 14.0, max(float(levels.min()) - 6.0, strongest - _DEEPEST_DB)
