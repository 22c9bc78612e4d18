"""Published values of hearing that the colour distance rests on."""

import pytest

from timbre_match.compare.colour import erb_hz, erb_number


@pytest.mark.parametrize(("freq_hz", "width"), [(100, 35.494), (440, 72.193), (1000, 132.639), (4000, 456.456)])
def test_equivalent_rectangular_bandwidth(freq_hz: float, width: float) -> None:
    # Glasberg & Moore (1990): ERB = 24.7 (4.37 f / 1000 + 1).
    assert erb_hz(freq_hz) == pytest.approx(width, abs=1e-3)


def test_erb_number() -> None:
    # Glasberg & Moore (1990) print the factor 21.4, where integration gives 21.332.
    assert erb_number(1000.0) == pytest.approx(15.6214, abs=1e-3)
