"""Numbers and names in words, as sentences and tables use them."""

import unicodedata
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from timbre_match.compare.records import Interval, SustainRegion


def hertz(freq_hz: float) -> str:
    """Write a frequency with three significant digits and without exponent: 619.7 as ``620``, 12345 as ``12300``."""
    return f"{float(f'{freq_hz:.3g}'):.0f}"


def counted(number: int, thing: str) -> str:
    """Write a number with its noun: ``1 take``, ``3 takes``."""
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"


def plain(text: str, longest: int = 60) -> str:
    """Return text from outside as one safe line of at most `longest` characters.

    Control characters, line breaks and the invisible signs that turn the direction of writing become spaces, so that a
    name can neither steer a terminal nor reorder the words around it.
    """
    spaced = "".join(" " if unicodedata.category(sign)[0] in "CZ" else sign for sign in text)
    line = " ".join(spaced.split())
    return line if len(line) <= longest else line[: longest - 1] + "…"


def in_per_cent(ratio: "Interval") -> str:
    """Say how much longer or shorter, with the interval: ``35 % (20 to 48)``; a bound on the other side of 0 is minus.

    Of two notes one of which dies in half the time, the one is 50 % shorter and the other 100 % longer.
    """
    sign = 1.0 if ratio.value >= 1.0 else -1.0
    value, *bounds = (100.0 * sign * (one - 1.0) for one in (ratio.value, ratio.low, ratio.high))
    low, high = sorted(bounds)
    return f"{value:.0f} % ({low:.0f} to {high:.0f})".replace("-", "−")


def sustain_in_words(region: "SustainRegion") -> str:
    """Say of a stretch how much sooner its partials die, and what that rests on.

    Such as ``Partials between 300 and 500 Hz die 35 % (20 to 48) sooner, seen in 8 partials of 5 notes``.
    """
    how = "die {} sooner" if region.verdict == "shorter" else "ring {} longer"
    stretch = f"{hertz(region.low_hz)} and {hertz(region.high_hz)} Hz"
    seen = f"seen in {counted(region.harmonics, 'partial')} of {counted(region.notes, 'note')}"
    return f"Partials between {stretch} {how.format(in_per_cent(region.ratio))}, {seen}"
