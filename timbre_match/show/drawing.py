"""What all pictures share: paper and ink, the frequency axis, the marks of a verdict, and the bytes of a file.

matplotlib is imported where it is used, and its global state is left as it was found.
"""

import io
import math
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from functools import lru_cache
from typing import TYPE_CHECKING, Any, Final, Literal

from timbre_match.advise.wording import hertz
from timbre_match.compare.records import Region, SustainRegion, SustainVerdict, Verdict
from timbre_match.show.marks import plain
from timbre_match.units import note_name, note_to_hz

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from matplotlib.path import Path

INK: Final = "#26221f"
STEM: Final = "#8b5a3c"
QUIET: Final = "#8a8279"
BAND: Final = "#d3cdc4"
RANGE: Final = "#bdb4a8"
PAPER: Final = "#fffdf8"
VERDICT_COLOUR: Final[dict[Verdict, str]] = {
    "stronger": "#d2640f",
    "weaker": "#0f4c8a",
    "alike": "#5f7d5c",
    "unsettled": "#857b71",
}
SUSTAIN_COLOUR: Final[dict[SustainVerdict, str]] = {
    "longer": VERDICT_COLOUR["stronger"],
    "shorter": VERDICT_COLOUR["weaker"],
    "alike": VERDICT_COLOUR["alike"],
    "unsettled": VERDICT_COLOUR["unsettled"],
}
"""Orange against blue stays apart in every common kind of colour blindness, and in grey the blue is the darker."""

_TICKS_HZ: Final = (20, 30, 50, 100, 200, 300, 500, 1000, 2000, 3000, 5000, 10000, 20000)
_LOOK: Final[Any] = {
    "font.family": ["DejaVu Sans"],
    "font.size": 12.0,
    "text.color": INK,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.facecolor": PAPER,
    "axes.unicode_minus": True,
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "xtick.color": INK,
    "ytick.color": INK,
    "mathtext.fontset": "dejavusans",
    "svg.hashsalt": "timbre_match",
    "svg.fonttype": "path",
}
_WIDTH_IN: Final = 12.0
_LEFT_IN: Final = 1.25
_RIGHT_IN: Final = 0.85
_LOWEST_C, _HIGHEST_C = 0, 10
_ONE_LINE: Final = 6
_DPI: Final = 120
_LABEL_STEPS: Final = 3
_LABEL_ROOM: Final = 2.0
"""Frequency ratio that keeps two labels apart."""


@contextmanager
def look() -> Iterator[None]:
    """Draw with this project's paper, ink and letters, whatever the user's own settings of matplotlib are."""
    import matplotlib

    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(_LOOK)
        yield


def render(figure: "Figure", kind: Literal["png", "svg"]) -> bytes:
    """Bytes of a figure's file; the same figure gives the same bytes, since no date is written."""
    page = io.BytesIO()
    metadata = {"Date": None} if kind == "svg" else {"Software": None}
    with look():
        figure.savefig(page, format=kind, dpi=_DPI, metadata=metadata)
    return page.getvalue()


def sheet(rows_in: Sequence[float], *, top_in: float, bottom_in: float, gap_in: float) -> "tuple[Figure, list[Axes]]":
    """Return a figure with panels of the given heights (inches) under each other, all of one width."""
    from matplotlib.figure import Figure

    height_in = top_in + sum(rows_in) + gap_in * (len(rows_in) - 1) + bottom_in
    figure = Figure(figsize=(_WIDTH_IN, height_in))
    axes = []
    upper_in = height_in - top_in
    for row_in in rows_in:
        box = (_LEFT_IN, upper_in - row_in, _WIDTH_IN - _LEFT_IN - _RIGHT_IN, row_in)
        axes.append(figure.add_axes((box[0] / _WIDTH_IN, box[1] / height_in, box[2] / _WIDTH_IN, box[3] / height_in)))
        upper_in -= row_in + gap_in
    for panel in axes:
        panel.spines[["top", "right"]].set_visible(False)
    return figure, axes


def panel_width_points() -> float:
    """Width of a panel in points, for marks that must not touch."""
    return 72.0 * (_WIDTH_IN - _LEFT_IN - _RIGHT_IN)


def title(figure: "Figure", line: str, detail: str) -> None:
    """Write the picture's title at the top left, and a quieter line under it."""
    height_in = float(figure.get_size_inches()[1])
    left = 0.2 / _WIDTH_IN
    figure.text(left, 1 - 0.16 / height_in, line, fontsize=17, fontweight="bold", va="top", parse_math=False)
    figure.text(left, 1 - 0.50 / height_in, detail, fontsize=12, color=INK, va="top", parse_math=False)


def legend(figure: "Figure", handles: "Sequence[Line2D]") -> None:
    """Explain the marks under the title, in one line, or in two where there are many."""
    height_in = float(figure.get_size_inches()[1])
    figure.legend(
        handles=handles,
        loc="upper left",
        bbox_to_anchor=(0.1 / _WIDTH_IN, 1 - 0.74 / height_in),
        ncols=len(handles) if len(handles) <= _ONE_LINE else (len(handles) + 1) // 2,
        frameon=False,
        fontsize=11,
        handletextpad=0.5,
        columnspacing=1.4,
        borderpad=0.2,
    )


def mark(label: str, **style: Any) -> "Line2D":
    """Return a legend entry."""
    from matplotlib.lines import Line2D

    return Line2D([], [], **{"linestyle": "none", "color": INK, **style}, label=label)


@lru_cache(maxsize=8)
def verdict_marker(verdict: Verdict | SustainVerdict) -> "Path | str":
    """Return the shape of a verdict as a marker; the equals sign with room between its strokes, as no font has it."""
    from matplotlib.path import Path

    if verdict != "alike":
        return {"stronger": "^", "weaker": "v", "longer": ">", "shorter": "<", "unsettled": "$?$"}[verdict]
    strokes = [[(-0.5, low), (0.5, low), (0.5, low + 0.2), (-0.5, low + 0.2), (-0.5, low)] for low in (-0.4, 0.2)]
    return Path.make_compound_path(*(Path(stroke, closed=True) for stroke in strokes))


def verdict_mark(verdict: Verdict | SustainVerdict, label: str) -> "Line2D":
    """Return the legend entry of a verdict, in its shape and colour."""
    colour = (VERDICT_COLOUR | SUSTAIN_COLOUR)[verdict]
    return mark(label, marker=verdict_marker(verdict), color=colour, markersize=10, markeredgewidth=0.4)


def frequency_axis(panel: "Axes", low_hz: float, high_hz: float, *, labelled: bool) -> None:
    """Give a panel the picture's common frequency axis: logarithmic, with round numbers of Hz."""
    panel.set_xscale("log")
    panel.set_xlim(low_hz, high_hz)
    ticks = [tick for tick in _TICKS_HZ if low_hz <= tick <= high_hz]
    panel.set_xticks(ticks, [str(tick) for tick in ticks] if labelled else [""] * len(ticks))
    panel.set_xticks([], minor=True)
    panel.grid(axis="x", color=BAND, linewidth=0.7, alpha=0.7)
    panel.set_axisbelow(True)
    if labelled:
        panel.set_xlabel("Frequency (Hz)")
    else:
        panel.tick_params(axis="x", length=0)


def note_names_above(panel: "Axes") -> None:
    """Write the notes C of each octave along the upper edge, where they lie on the frequency axis."""
    low_hz, high_hz = panel.get_xlim()
    for octave in range(_LOWEST_C, _HIGHEST_C + 1):
        name = note_name(12 * (octave + 1))
        freq_hz = note_to_hz(name)
        if low_hz <= freq_hz <= high_hz:
            panel.annotate(
                name,
                (freq_hz, 1.0),
                xycoords=("data", "axes fraction"),
                xytext=(0, 3),
                textcoords="offset points",
                ha="center",
                fontsize=10,
                color=QUIET,
            )


def drawable(text: str, longest: int = 60) -> str:
    """Return text from outside as one safe line, with a box for every sign that the font does not have."""
    return "".join(sign if _has_glyph(sign) else "□" for sign in plain(text, longest))


def frequency_limits(freqs_hz: Sequence[float]) -> tuple[float, float]:
    """Limits of a frequency axis with a little room on both sides; 20 Hz to 20 kHz where there is nothing to show."""
    finite = [freq for freq in freqs_hz if math.isfinite(freq) and freq > 0.0]
    if not finite:
        return 20.0, 20000.0
    return min(finite) / 1.12, max(finite) * 1.12


@lru_cache(maxsize=4096)
def _has_glyph(sign: str) -> bool:
    from matplotlib.font_manager import findfont, get_font

    return bool(get_font(findfont("DejaVu Sans")).get_char_index(ord(sign)))


def note_label(panel: "Axes", note: str) -> None:
    """Write the note's name in large letters at the right end of its panel."""
    panel.text(
        1.012, 0.5, drawable(note, 8), transform=panel.transAxes, va="center", fontsize=18, fontweight="bold",
        parse_math=False,
    )  # fmt: skip


def level_axis(figure: "Figure", panels: "Sequence[Axes]", text: str) -> None:
    """Write one label along the left edge, for the vertical axes of all panels."""
    middle = 0.5 * (panels[0].get_position().y1 + panels[-1].get_position().y0)
    figure.text(0.3 / _WIDTH_IN, middle, text, rotation=90, ha="center", va="center")


def level_label(panel: "Axes", level: float, text: str) -> None:
    """Name a level at the right end of its line."""
    panel.text(1.008, level, text, transform=panel.get_yaxis_transform(), va="center", fontsize=11)


def named(instrument: str, stage: str) -> str:
    """Name an instrument and its stage, as drawable text."""
    name = drawable(instrument, 40) or "Unnamed instrument"
    return f"{name}, {drawable(stage, 40)}" if stage.strip() else name


def label_heights(regions: Sequence[Region] | Sequence[SustainRegion]) -> list[float]:
    """Heights of the regions' labels in a panel: lower by a step where the label before it would be touched."""
    heights = [0.0] * len(regions)
    step, last_middle_hz = 0, 0.0
    for place in sorted(range(len(regions)), key=lambda place: regions[place].low_hz):
        middle_hz = math.sqrt(regions[place].low_hz * regions[place].high_hz)
        step = (step + 1) % _LABEL_STEPS if middle_hz < last_middle_hz * _LABEL_ROOM else 0
        last_middle_hz = middle_hz
        heights[place] = 0.985 - 0.115 * step
    return heights


def region_label(panel: "Axes", low_hz: float, high_hz: float, height: float, size: str, colour: str) -> None:
    """Write size and stretch over a region."""
    panel.text(
        math.sqrt(low_hz * high_hz), height, f"{size}\n{hertz(low_hz)}–{hertz(high_hz)} Hz",
        transform=panel.get_xaxis_transform(), ha="center", va="top", fontsize=11, fontweight="bold",
        color=colour, linespacing=1.15, zorder=5, label="region",
    )  # fmt: skip
