"""Numbers in words, as sentences and tables use them."""


def hertz(freq_hz: float) -> str:
    """Write a frequency with three significant digits and without exponent: 619.7 as ``620``, 12345 as ``12300``."""
    return f"{float(f'{freq_hz:.3g}'):.0f}"


def counted(number: int, thing: str) -> str:
    """Write a number with its noun: ``1 take``, ``3 takes``."""
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"
