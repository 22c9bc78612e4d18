"""Numbers and names in words, as sentences and tables use them."""

import unicodedata


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
