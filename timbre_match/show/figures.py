"""The pictures: recipes with the target, differences note by harmonic, the body curve under the notes.

Notes stand as in a score, the highest on top. Where the horizontal axis is frequency, it is one axis for the whole
picture. Every function returns a matplotlib figure; :func:`render` turns it into the bytes of a PNG or SVG file.
"""

import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Final

import numpy as np

from timbre_match.compare.records import Comparison, HarmonicDifference
from timbre_match.show import drawing
from timbre_match.show.drawing import BAND, INK, QUIET, STEM, VERDICT_COLOUR, render
from timbre_match.show.marks import SIGN, VERDICTS
from timbre_match.show.recipes import recipe_figure
from timbre_match.show.sustain import sustain_figure

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

__all__ = ["body_curve_figure", "differences_figure", "recipe_figure", "render", "sustain_figure"]

_LARGEST_SHOWN_DB: Final = 20.0
_FULL_SIZE_DB: Final = 12.0
_LEAST_CELL, _LARGEST_CELL = 7.0, 26.0
_LEAST_ROOM, _LARGEST_ROOM = 3.0, 11.0


def differences_figure(comparison: Comparison) -> "Figure":
    """Draw the verdict on every harmonic of every note: notes as rows, harmonic numbers as columns.

    The shape is the verdict, and the size of an arrow head grows with the difference, up to 12 dB.
    """
    rows = _rows_by_pitch(comparison.harmonics)
    highest_k = max((harmonic.k for harmonic in comparison.harmonics), default=1)
    cell_points = min(max(drawing.panel_width_points() / (highest_k + 1), _LEAST_CELL), _LARGEST_CELL)
    with drawing.look():
        figure, (panel,) = drawing.sheet([0.42 * max(len(rows), 1) + 0.2], top_in=1.35, bottom_in=0.75, gap_in=0.0)
        _draw_verdicts(
            panel, comparison.harmonics, rows, [harmonic.k for harmonic in comparison.harmonics],
            [cell_points] * len(comparison.harmonics),
        )  # fmt: skip
        _note_rows(panel, rows)
        panel.set_xlim(0.3, highest_k + 0.7)
        panel.set_xticks(_harmonic_ticks(highest_k))
        panel.grid(axis="x", color=BAND, linewidth=0.7, alpha=0.7)
        panel.set_axisbelow(True)
        panel.set_xlabel("Harmonic (1 = fundamental)")
        drawing.title(
            figure,
            drawing.named(comparison.instrument, comparison.stage),
            _against("Each harmonic against the target", comparison, ". Larger arrow head: larger difference."),
        )
        drawing.legend(figure, _verdict_handles(comparison))
    return figure


def body_curve_figure(comparison: Comparison) -> "Figure":
    """Draw the notes over the body curve, both on one frequency axis.

    Above, each harmonic of each note at its frequency with its verdict; below, the difference to the target: every
    harmonic as a dot, the body curve with its pointwise (darker) and simultaneous (lighter) 95 % bands, the margin as
    broken lines, and the regions that differ, through both panels.
    """
    rows = _rows_by_pitch(comparison.harmonics)
    freqs_hz = [harmonic.freq_hz for harmonic in comparison.harmonics]
    limits = drawing.frequency_limits([*freqs_hz, *(point.freq_hz for point in comparison.body_curve)])
    with drawing.look():
        heights_in = [0.27 * max(len(rows), 1) + 0.2, 3.7]
        figure, (upper, lower) = drawing.sheet(heights_in, top_in=1.75, bottom_in=0.75, gap_in=0.18)
        _draw_verdicts(upper, comparison.harmonics, rows, freqs_hz, _room_points(comparison.harmonics, limits))
        _note_rows(upper, rows)
        _draw_body_curve(lower, comparison)
        for region in comparison.regions:
            for panel in (upper, lower):
                panel.axvspan(region.low_hz, region.high_hz, color=VERDICT_COLOUR[region.verdict], alpha=0.14, zorder=0)
        drawing.frequency_axis(upper, *limits, labelled=False)
        drawing.frequency_axis(lower, *limits, labelled=True)
        drawing.note_names_above(upper)
        for region, height in zip(comparison.regions, drawing.label_heights(comparison.regions), strict=True):
            drawing.region_label(
                lower, region.low_hz, region.high_hz, height,
                f"{SIGN[region.verdict]} {abs(region.difference_db.value):.1f} dB", VERDICT_COLOUR[region.verdict],
            )  # fmt: skip
        drawing.title(
            figure,
            drawing.named(comparison.instrument, comparison.stage),
            _against("Where it differs from the target", comparison),
        )
        drawing.legend(
            figure,
            [
                *_verdict_handles(comparison),
                drawing.mark("body curve", linestyle="-", linewidth=3),
                drawing.mark("one harmonic", marker="o", markersize=4, color=STEM),
                drawing.mark("95 % sure at each frequency", marker="s", markersize=12, color=QUIET, alpha=0.6),
                drawing.mark("95 % sure for the whole curve", marker="s", markersize=12, color=BAND),
            ],
        )
    return figure


def _harmonic_ticks(highest_k: int) -> list[int]:
    """Harmonic numbers to write: the first six one by one, then round ones, as many as there is room for."""
    step = next((step for step in (5, 10, 20, 50) if highest_k <= 9 * step), 100)
    first = range(1, 7) if step == 5 else range(1, 2)
    return sorted({*first, *range(step, highest_k + 1, step)})


def _room_points(harmonics: Sequence[HarmonicDifference], limits_hz: tuple[float, float]) -> list[float]:
    """Width that each mark may have on the frequency axis before it touches its nearest neighbour of the same note."""
    by_note: dict[str, list[float]] = {}
    for harmonic in harmonics:
        by_note.setdefault(harmonic.note, []).append(harmonic.freq_hz)
    points_per_neper = drawing.panel_width_points() / math.log(limits_hz[1] / limits_hz[0])
    room: dict[tuple[str, float], float] = {}
    for note, freqs_hz in by_note.items():
        places = points_per_neper * np.log(np.sort(freqs_hz))
        gaps = np.concatenate([[np.inf], np.diff(places), [np.inf]])
        nearest = np.clip(np.minimum(gaps[:-1], gaps[1:]), _LEAST_ROOM, _LARGEST_ROOM)
        room.update(zip([(note, freq_hz) for freq_hz in sorted(freqs_hz)], nearest.tolist(), strict=True))
    return [room[harmonic.note, harmonic.freq_hz] for harmonic in harmonics]


def _draw_verdicts(
    panel: "Axes",
    harmonics: Sequence[HarmonicDifference],
    rows: dict[str, int],
    across: Sequence[float],
    room_points: Sequence[float],
) -> None:
    for verdict in VERDICTS:
        chosen = [index for index, harmonic in enumerate(harmonics) if harmonic.verdict == verdict]
        sizes = [_mark_width(harmonics[index], room_points[index]) ** 2 for index in chosen]
        panel.scatter(
            [across[index] for index in chosen], [rows[harmonics[index].note] for index in chosen],
            s=sizes, marker=drawing.verdict_marker(verdict), color=VERDICT_COLOUR[verdict],
            linewidths=0.3 if verdict == "unsettled" else 0.0, snap=False, zorder=3, label=verdict,
        )  # fmt: skip


def _mark_width(harmonic: HarmonicDifference, room_points: float) -> float:
    """Size in points: arrow heads fill a quarter of their room at 0 dB and nearly all of it at 12 dB."""
    if harmonic.verdict in ("stronger", "weaker"):
        share = 0.25 + 0.75 * min(abs(harmonic.difference_db.value) / _FULL_SIZE_DB, 1.0)
        return 0.95 * math.sqrt(share) * room_points
    # An equals sign is as wide as its size, a question mark half as wide.
    return min(0.7 * room_points, 7.5) if harmonic.verdict == "alike" else min(0.9 * room_points, 10.0)


def _note_rows(panel: "Axes", rows: dict[str, int]) -> None:
    panel.set_ylim(-0.7, max(len(rows), 1) - 0.3)
    names = [drawing.drawable(note, 8) for note in rows]
    panel.set_yticks(list(rows.values()), names, fontsize=13, fontweight="bold", parse_math=False)
    panel.tick_params(axis="y", length=0)
    for row in range(0, len(rows), 2):
        panel.axhspan(row - 0.5, row + 0.5, color=BAND, alpha=0.32, linewidth=0, zorder=0)
    panel.spines["left"].set_visible(False)


def _draw_body_curve(panel: "Axes", comparison: Comparison) -> None:
    curve = comparison.body_curve
    freq_hz = [point.freq_hz for point in curve]
    low_db = [point.simultaneous_low_db for point in curve]
    high_db = [point.simultaneous_high_db for point in curve]
    panel.fill_between(freq_hz, low_db, high_db, color=BAND, alpha=0.75, linewidth=0, zorder=1, label="everywhere")
    inner = [(point.difference_db.low, point.difference_db.high) for point in curve]
    panel.fill_between(
        freq_hz, [low for low, _ in inner], [high for _, high in inner], color=QUIET, alpha=0.5, linewidth=0,
        zorder=1.5, label="pointwise",
    )  # fmt: skip
    reach_db = _shown_reach(comparison)
    dots = np.array([harmonic.difference_db.value for harmonic in comparison.harmonics])
    panel.scatter(
        [harmonic.freq_hz for harmonic in comparison.harmonics], np.clip(dots, -reach_db, reach_db),
        s=9, color=STEM, alpha=0.55, linewidths=0, zorder=2, label="harmonics",
    )  # fmt: skip
    panel.plot(freq_hz, [point.difference_db.value for point in curve], color=INK, linewidth=3, zorder=3, label="curve")
    panel.axhline(0.0, color=INK, linewidth=1.2, zorder=2.5)
    for margin_db in (-comparison.margin_db, comparison.margin_db):
        panel.axhline(margin_db, color=QUIET, linewidth=1.0, linestyle=(0, (5, 4)), zorder=1.8)
        drawing.level_label(panel, margin_db, "margin")
    drawing.level_label(panel, 0.0, "target")
    panel.set_ylim(-1.08 * reach_db, 1.7 * reach_db)
    step = 2 if reach_db <= 10 else 5
    furthest = int(reach_db // step) * step
    ticks = list(range(-furthest, furthest + 1, step))
    panel.set_yticks(ticks, [f"{tick:+d}".replace("-", "−") if tick else "0" for tick in ticks])
    panel.set_ylabel("← weaker      dB      stronger →")
    if not curve:
        panel.text(0.5, 0.8, "no body curve", transform=panel.transAxes, ha="center")


def _shown_reach(comparison: Comparison) -> float:
    """Half height of the body curve's panel in dB: bands and all but the most extreme dots, between 6 and 20."""
    values = [abs(harmonic.difference_db.value) for harmonic in comparison.harmonics]
    reach = float(np.percentile(values, 97)) if values else 0.0
    bands = [max(-point.simultaneous_low_db, point.simultaneous_high_db) for point in comparison.body_curve]
    reach = max(reach, max(bands, default=0.0), 2.0 * comparison.margin_db)
    return min(max(reach, 6.0), _LARGEST_SHOWN_DB)


def _verdict_handles(comparison: Comparison) -> list["Line2D"]:
    counts = dict.fromkeys(VERDICTS, 0)
    for harmonic in comparison.harmonics:
        counts[harmonic.verdict] += 1
    return [drawing.verdict_mark(verdict, f"{verdict} ({counts[verdict]})") for verdict in VERDICTS]


def _rows_by_pitch(harmonics: Iterable[HarmonicDifference]) -> dict[str, int]:
    """Row of each note, the lowest at 0."""
    fundamentals: dict[str, float] = {}
    for harmonic in harmonics:
        fundamentals.setdefault(harmonic.note, harmonic.freq_hz / harmonic.k)
    return {note: row for row, note in enumerate(sorted(fundamentals, key=lambda note: fundamentals[note]))}


def _against(what: str, comparison: Comparison, more: str = "") -> str:
    return f"{what}: {drawing.drawable(comparison.target) or 'unnamed'}{more}"
