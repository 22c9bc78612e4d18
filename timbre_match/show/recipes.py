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
from timbre_match.show.drawing import BAND, INK, QUIET, RANGE, STEM, VERDICT_COLOUR
from timbre_match.show.marks import VERDICTS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

Array = NDArray[np.float64]

_DEEPEST_DB: Final = 60.0
_LEAST_BAND_DB: Final = 0.8
_SIGN_RISE_DB: Final = 7.0


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
    targets_db = [
        _target_db(drawn, wanted.get(drawn.note), compared[drawn.note] if comparison else None) for drawn in notes
    ]
    top_db, bottom_db = _level_limits(notes, targets_db)
    with drawing.look():
        figure, panels = drawing.sheet([1.5] * max(len(notes), 1), top_in=1.35, bottom_in=0.75, gap_in=0.16)
        for panel, drawn, target_db in zip(panels, notes, targets_db, strict=False):
            if takes > 1:
                _draw_spread(panel, drawn)
            _draw_recipe(panel, drawn, bottom_db)
            _draw_notches(panel, drawn, target_db)
            _draw_signs(panel, drawn, target_db, compared[drawn.note], bottom_db)
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


def _target_db(
    drawn: _DrawnRecipe, wanted: _DrawnRecipe | None, compared: Sequence[HarmonicDifference] | None
) -> Array:
    """Levels at which the target is drawn, one per harmonic of the note; NaN where there is none."""
    levels = np.full(drawn.k.size, np.nan)
    if wanted is not None:
        shared = min(drawn.k.size, wanted.k.size)
        shift_db = 0.0 if compared is None else _target_shift_db(drawn, wanted, compared)
        levels[:shared] = wanted.level_db[:shared] + shift_db
    return levels


def _draw_notches(panel: "Axes", drawn: _DrawnRecipe, target_db: Array) -> None:
    shown = np.isfinite(target_db)
    if shown.any():
        panel.scatter(
            drawn.freq_hz[shown], target_db[shown], marker="_", s=100, color=INK, linewidths=2.2, zorder=3,
            label="notches",
        )  # fmt: skip


def _draw_signs(
    panel: "Axes", drawn: _DrawnRecipe, target_db: Array, compared: Sequence[HarmonicDifference], bottom_db: float
) -> None:
    """Put a sign over stem and notch, whichever is higher, unless both lie under the panel's edge."""
    over_db = np.fmax(drawn.level_db, target_db)
    for verdict in ("stronger", "weaker"):
        chosen = [
            index
            for index in (harmonic.k - 1 for harmonic in compared if harmonic.verdict == verdict)
            if index < drawn.k.size and math.isfinite(drawn.level_db[index]) and over_db[index] > bottom_db
        ]
        panel.scatter(
            drawn.freq_hz[chosen], over_db[chosen] + _SIGN_RISE_DB, marker=drawing.verdict_marker(verdict), s=46,
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


def _level_limits(notes: Sequence[_DrawnRecipe], targets_db: Sequence[Array]) -> tuple[float, float]:
    """Top and bottom of all panels: room for a sign over the highest, and no more than 60 dB down from the strongest.

    The target moves only the top: what lies far down in it is no reason to make the stems smaller.
    """
    levels = np.concatenate([drawn.level_db[np.isfinite(drawn.level_db)] for drawn in notes] or [np.zeros(1)])
    if not levels.size:
        levels = np.zeros(1)
    strongest = float(levels.max())
    highest = float(np.nanmax(np.concatenate([levels, *targets_db])))
    return highest + 2.0 * _SIGN_RISE_DB, max(float(levels.min()) - 6.0, strongest - _DEEPEST_DB)
