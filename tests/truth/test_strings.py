"""Published values of stiff and plucked strings."""

import numpy as np
import pytest

from tests.measure.known_strings import Setting, draw_string, measured
from timbre_match.measure.stiffness import fit_law, stretched_hz


@pytest.mark.parametrize(
    ("b", "cents"),
    [(1e-4, (0.260, 2.075, 8.527, 33.864)), (1e-3, (2.590, 20.509, 81.637, 290.391))],
)
def test_cents_of_stretched_partials(b: float, cents: tuple[float, ...]) -> None:
    # Form of the law: Fletcher 1964, J. Acoust. Soc. Am. 36; Jarvelainen et al. 2001, eqs 1-2. Values computed from it,
    # 1200 log2(f_k / (k f_1)) for k = 2, 5, 10, 20.
    k = np.array([2, 5, 10, 20])
    f1_hz = stretched_hz(np.array([1]), 100.0, b)[0]
    assert 1200.0 * np.log2(stretched_hz(k, 100.0, b) / (k * f1_hz)) == pytest.approx(np.array(cents), abs=5e-4)


def test_first_partial_lies_above_the_flexible_fundamental() -> None:
    # f_1 = f0 sqrt(1 + B), a common trap.
    assert stretched_hz(np.array([1]), 100.0, 1e-3)[0] == pytest.approx(100.0 * np.sqrt(1.001), rel=1e-12)


def test_two_partials_give_b_back() -> None:
    # With exact frequencies of k = 5 and 10, B = (r - 1) / (100 - 25 r), r = (f_10 / (2 f_5))^2.
    k = np.array([5, 10])
    law = fit_law(k, stretched_hz(k, 196.0, 1e-4), np.full(2, 1e-3))
    assert law.b == pytest.approx(1e-4, abs=1e-12)
    assert law.f0_hz == pytest.approx(196.0, rel=1e-12)


@pytest.mark.parametrize(
    ("diameter_m", "f0_hz", "tension_n", "b"),
    [(0.305e-3, 329.6276, 104.67, 1.908e-5), (0.406e-3, 246.9417, 104.09, 6.023e-5)],
)
def test_plain_steel_strings_from_their_dimensions(diameter_m: float, f0_hz: float, tension_n: float, b: float) -> None:
    # E4 and B3 of a steel-string guitar: E = 200 GPa, density 7850 kg/m^3, L = 0.648 m; T = mu (2 L f0)^2 and
    # B = pi^3 E d^4 / (64 T L^2) (Fletcher 1964; Jarvelainen et al. 2001). Values computed apart from this project.
    length_m = 0.648
    tension = 7850.0 * np.pi * diameter_m**2 / 4.0 * (2.0 * length_m * f0_hz) ** 2
    stiffness = np.pi**3 * 200e9 * diameter_m**4 / (64.0 * tension * length_m**2)
    assert tension == pytest.approx(tension_n, abs=0.005)
    assert stiffness == pytest.approx(b, abs=5e-9)
    # And such a string, drawn and measured, shows that inharmonicity.
    string = draw_string(Setting(f0_hz=f0_hz, b=stiffness, t60_s=3.0, snr_db=50.0), np.random.default_rng(3))
    found = measured(string)
    assert found is not None
    assert found[1].inharmonicity_b == pytest.approx(b, abs=2e-6)
