"""The picture of sustain: the decay times of each note on both sides, and the curve of their ratio below.

All panels share one frequency axis. Decay times stand on a logarithmic axis, so that equal ratios are equal distances.
"""

import math
from collections import defaultdict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from timbre_match.compare.records import Comparison, Sustain
from timbre_match.compare.sustain import INAUDIBLE
from timbre_match.compare.target import Target
from timbre_match.measure.profile import Profile
from timbre_match.measure.records import Ringing
from timbre_match.show import drawing
from timbre_match.show.drawing import BAND, INK, QUIET, RANGE, STEM, SUSTAIN_COLOUR
from timbre_match.show.marks import SUSTAIN_SIGN, SUSTAIN_VERDICTS

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D

Array = NDArray[np.float64]

_TIME_TICKS_S: Final = (0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0)
_RATIO_TICKS: Final = (0.1, 0.2, 0.33, 0.5, 0.75, 1.0, 1.4, 2.0, 3.0, 5.0, 10.0)
_LEAST_REACH, _LARGEST_REACH = math.log(2.0), math.log(8.0)
_SIGN_RISE: Final = 1.45
"""Factor of time by which a sign stands over the upper of its two decay times."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Decays:
    """Mean decay times of one note over all takes of a side: arrays of shape (n,), NaN where there is none."""

    freq_hz: Array
    t60_s: Array


def sustain_figure(profile: Profile, target: Target, comparison: Comparison) -> "Figure":
    """Draw the decay times of each compared note, one panel a note, and the curve of their ratio.

    A dot is a partial of the instrument, a notch one of the target, each the mean of its takes (geometric); paler are
    partials that beat or die unclearly, which have no single decay time. A sign stands over partials that are certain
    to differ. Below, each partial's ratio is a sign of its verdict, over the curve with its pointwise (darker) and
    simultaneous (lighter) 95 % bands; broken lines bound what listeners did not hear.

    Parameters
    ----------
    profile : Profile
    target : Target
    comparison : Comparison
        Of the two, with `sustain`.

    Raises
    ------
    ValueError
        If the comparison has no `sustain`.
    """
    sustain = comparison.sustain
    if sustain is None:
        raise ValueError("the comparison has no ringing notes, so there is no sustain to draw")
    notes = [note.note for note in sustain.notes][::-1]
    ours, theirs = _decays([profile]), _decays(target.members)
    drawn = [side[note] for note in notes for side in (ours, theirs)]
    limits = drawing.frequency_limits([freq for one in drawn for freq in one.freq_hz[np.isfinite(one.t60_s)]])
    times_s = np.concatenate([one.t60_s[np.isfinite(one.t60_s)] for one in drawn])
    low_s, high_s = float(times_s.min()) / 1.3, float(times_s.max()) * 1.3 * _SIGN_RISE
    with drawing.look():
        heights_in = [*([1.15] * len(notes)), 3.7]
        figure, panels = drawing.sheet(heights_in, top_in=1.35, bottom_in=0.75, gap_in=0.16)
        for panel, note in zip(panels, notes, strict=False):
            _draw_note(panel, ours[note], theirs[note], note, sustain)
            _time_axis(panel, low_s, high_s)
            drawing.note_label(panel, note)
            drawing.frequency_axis(panel, *limits, labelled=False)
        lower = panels[-1]
        _draw_curve(lower, sustain)
        drawing.frequency_axis(lower, *limits, labelled=True)
        for region in sustain.regions:
            for panel in panels:
                panel.axvspan(region.low_hz, region.high_hz, color=SUSTAIN_COLOUR[region.verdict], alpha=0.12, zorder=0)
        for region, height in zip(sustain.regions, drawing.label_heights(sustain.regions), strict=True):
            drawing.region_label(
                lower, region.low_hz, region.high_hz, height,
                f"{SUSTAIN_SIGN[region.verdict]} × {region.ratio.value:.2f}", SUSTAIN_COLOUR[region.verdict],
            )  # fmt: skip
        drawing.level_axis(figure, panels[:-1], "Time to fall by 60 dB (s)" if len(notes) > 1 else "60 dB (s)")
        drawing.title(
            figure,
            drawing.named(comparison.instrument, comparison.stage),
            f"How long each partial rings, against the target: {drawing.drawable(comparison.target) or 'unnamed'}",
        )
        drawing.legend(figure, _handles(sustain))
    return figure


def _decays(profiles: Iterable[Profile]) -> dict[str, _Decays]:
    """Gather the ringing takes of every note."""
    found: dict[str, list[tuple[Array, Ringing]]] = defaultdict(list)
    for profile in profiles:
        for take in profile.takes:
            for recipe in take.notes:
                if recipe.ringing is not None:
                    found[recipe.note].append((recipe.freq_hz, recipe.ringing))
    return {note: _mean_decays(takes) for note, takes in found.items()}


def _mean_decays(takes: Sequence[tuple[Array, Ringing]]) -> _Decays:
    size = max(freq_hz.size for freq_hz, _ in takes)
    freqs, times = np.full((len(takes), size), np.nan), np.full((len(takes), size), np.nan)
    for row, (freq_hz, ringing) in enumerate(takes):
        freqs[row, : freq_hz.size] = freq_hz
        times[row, : freq_hz.size] = np.log(ringing.t60_s)
    count = np.isfinite(times).sum(axis=0)
    mean = np.divide(np.nansum(times, axis=0), count, out=np.full(size, np.nan), where=count > 0)
    return _Decays(freq_hz=np.nanmean(freqs, axis=0), t60_s=np.exp(mean))


def _draw_note(panel: "Axes", ours: _Decays, theirs: _Decays, note: str, sustain: Sustain) -> None:
    single = [one for one in sustain.harmonics if one.note == note]
    apart = [one.k - 1 for one in sustain.apart if one.note == note]
    clear = [one.k - 1 for one in single]
    for places, ink, dot in ((apart, RANGE, RANGE), (clear, INK, STEM)):
        both = [place for place in places if place < min(ours.t60_s.size, theirs.t60_s.size)]
        panel.vlines(
            ours.freq_hz[both],
            ours.t60_s[both],
            theirs.t60_s[both],
            color=dot,
            linewidth=1.4,
            zorder=1.6,
            label="pairs",
        )
        panel.scatter(
            ours.freq_hz[both], theirs.t60_s[both], marker="_", s=80, color=ink, linewidths=2.2, zorder=2.2,
            label="target",
        )  # fmt: skip
        panel.scatter(
            ours.freq_hz[both], ours.t60_s[both], marker="o", s=26, color=dot, linewidths=0, zorder=2.4,
            label="instrument",
        )  # fmt: skip
    for verdict in SUSTAIN_VERDICTS[:2]:
        chosen = [one.k - 1 for one in single if one.verdict == verdict]
        over_s = np.fmax(ours.t60_s[chosen], theirs.t60_s[chosen]) * _SIGN_RISE
        panel.scatter(
            ours.freq_hz[chosen], over_s, marker=drawing.verdict_marker(verdict), s=46,
            color=SUSTAIN_COLOUR[verdict], linewidths=0, zorder=4, label=verdict,
        )  # fmt: skip


def _time_axis(panel: "Axes", low_s: float, high_s: float) -> None:
    panel.set_yscale("log")
    panel.set_ylim(low_s, high_s)
    inside = [tick for tick in _TIME_TICKS_S if low_s <= tick <= high_s]
    ticks = inside[:: max(1, math.ceil(len(inside) / 4))]
    panel.set_yticks(ticks, [f"{tick:g}" for tick in ticks])
    panel.set_yticks([], minor=True)
    panel.tick_params(axis="y", labelsize=10)
    panel.grid(axis="y", color=BAND, linewidth=0.6, alpha=0.6)


def _draw_curve(panel: "Axes", sustain: Sustain) -> None:
    freq_hz = [point.freq_hz for point in sustain.curve]
    panel.set_yscale("log")
    panel.fill_between(
        freq_hz, [point.simultaneous_low for point in sustain.curve],
        [point.simultaneous_high for point in sustain.curve], color=BAND, alpha=0.75, linewidth=0, zorder=1,
        label="everywhere",
    )  # fmt: skip
    panel.fill_between(
        freq_hz, [point.ratio.low for point in sustain.curve], [point.ratio.high for point in sustain.curve],
        color=QUIET, alpha=0.5, linewidth=0, zorder=1.5, label="pointwise",
    )  # fmt: skip
    reach = _reach(sustain)
    for verdict in SUSTAIN_VERDICTS:
        chosen = [one for one in sustain.harmonics if one.verdict == verdict]
        panel.scatter(
            [one.freq_hz for one in chosen],
            np.clip([one.ratio.value for one in chosen], math.exp(-reach), math.exp(reach)),
            marker=drawing.verdict_marker(verdict), s=34, color=SUSTAIN_COLOUR[verdict],
            linewidths=0.3 if verdict == "unsettled" else 0.0, zorder=2.6, label=verdict,
        )  # fmt: skip
    panel.plot(freq_hz, [point.ratio.value for point in sustain.curve], color=INK, linewidth=3, zorder=3, label="curve")
    panel.axhline(1.0, color=INK, linewidth=1.2, zorder=2.5)
    for edge in INAUDIBLE:
        panel.axhline(edge, color=QUIET, linewidth=1.0, linestyle=(0, (5, 4)), zorder=1.8)
        drawing.level_label(panel, edge, "inaudible")
    drawing.level_label(panel, 1.0, "target")
    panel.set_ylim(math.exp(-1.08 * reach), math.exp(1.6 * reach))
    ticks = [tick for tick in _RATIO_TICKS if abs(math.log(tick)) <= reach]
    panel.set_yticks(ticks, [f"{tick:g}" for tick in ticks])
    panel.set_yticks([], minor=True)
    panel.set_ylabel("← shorter   × target   longer →")


def _reach(sustain: Sustain) -> float:
    """Half height of the curve's panel as a logarithm: bands and all but the most extreme partials."""
    bands = [max(-math.log(max(one.ratio.low, 1e-3)), math.log(one.ratio.high)) for one in sustain.curve]
    values = [abs(math.log(one.ratio.value)) for one in sustain.harmonics]
    reach = max(float(np.percentile(bands, 95)) if bands else 0.0, float(np.percentile(values, 97)) if values else 0.0)
    return min(max(reach, _LEAST_REACH), _LARGEST_REACH)


def _handles(sustain: Sustain) -> list["Line2D"]:
    counts = dict.fromkeys(SUSTAIN_VERDICTS, 0)
    for one in sustain.harmonics:
        counts[one.verdict] += 1
    return [
        *(drawing.verdict_mark(verdict, f"{verdict} ({counts[verdict]})") for verdict in SUSTAIN_VERDICTS),
        drawing.mark("instrument", marker="o", color=STEM, markersize=6),
        drawing.mark("target", marker="_", markersize=11, markeredgewidth=2.2),
        drawing.mark(f"no single time ({len(sustain.apart)})", marker="o", color=RANGE, markersize=6),
        drawing.mark("95 % sure at each frequency", marker="s", markersize=12, color=QUIET, alpha=0.6),
        drawing.mark("95 % sure for the whole curve", marker="s", markersize=12, color=BAND),
    ]
