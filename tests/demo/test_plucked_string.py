"""The plucked string against published values and closed forms."""

import dataclasses

import numpy as np
import pytest

from timbre_match.demo.plucked_string import (
    SMALL_GUITAR_STRINGS,
    STRING_LENGTH_M,
    PluckedString,
    bridge_loss,
    partial_hz,
    pluck_force,
    string_loss,
)
from timbre_match.units import note_to_hz


@pytest.mark.parametrize(
    ("b", "cents"), [(1e-4, (0.260, 2.075, 8.527, 33.864)), (1e-3, (2.590, 20.509, 81.637, 290.391))]
)
def test_partials_are_stretched_as_published(b: float, cents: tuple[float, ...]) -> None:
    # f_k = k f0 sqrt(1 + B k^2), Fletcher 1964, JASA 36; cents of f_k / (k f1) at k = 2, 5, 10, 20 computed from it
    k = np.array([2, 5, 10, 20])
    first = partial_hz(1, 220.0, b)
    np.testing.assert_allclose(1200.0 * np.log2(partial_hz(k, 220.0, b) / (k * first)), cents, atol=6e-4)


@pytest.mark.parametrize(
    ("position", "expected_db"),
    [(1 / 5, (0.0, -1.84, -5.36, -12.04, None, -15.56)), (1 / 7, (0.0, -0.91, -2.51, -5.01, -8.86, -15.56, None))],
)
def test_pluck_makes_its_comb(position: float, expected_db: tuple[float | None, ...]) -> None:
    # |sin k pi beta| / k in dB re the first partial, Fletcher & Rossing, chapter 2; values computed
    force = np.abs(pluck_force(np.arange(1, len(expected_db) + 1), position))
    for level, expected in zip(20.0 * np.log10(force / force[0] + 1e-20), expected_db, strict=True):
        if expected is None:
            assert level < -60.0
        else:
            assert level == pytest.approx(expected, abs=0.01)


def test_inharmonicity_of_a_steel_string_from_its_dimensions() -> None:
    # plain steel, 0.305 mm, E 200 GPa, 7850 kg/m3, E4 on 0.648 m: T 104.67 N, B 1.908e-5 (B = pi^3 E d^4 / (64 T L^2));
    # at the same tension a string of this workshop's length has B larger by the squared ratio of the lengths
    d, ratio = 0.305e-3, 0.648 / STRING_LENGTH_M
    string = dataclasses.replace(
        SMALL_GUITAR_STRINGS[0],
        density_kg_m=7850.0 * np.pi / 4.0 * d**2,
        bending_n_m2=200e9 * np.pi / 64.0 * d**4,
    )
    f0_hz = note_to_hz("E4") * ratio
    assert string.tension_n(f0_hz) == pytest.approx(104.67, abs=0.01)
    assert string.inharmonicity(f0_hz) == pytest.approx(1.908e-5 * ratio**2, rel=5e-4)


def test_strings_are_those_of_a_guitar() -> None:
    # classical guitar strings pull with some 50 to 90 N each (from memory); B of nylon between 0 and 3e-4
    for string in SMALL_GUITAR_STRINGS:
        f0_hz = note_to_hz(string.open_note)
        assert 45.0 < string.tension_n(f0_hz) < 95.0
        assert 0.0 < string.inharmonicity(f0_hz) < 3e-4


def _losing(*, friction: float = 0.0, air_per_s: float = 0.0, bending_loss: float = 0.0) -> PluckedString:
    return dataclasses.replace(
        SMALL_GUITAR_STRINGS[0], friction=friction, air_per_s=air_per_s, bending_loss=bending_loss
    )


def test_each_loss_alone_has_its_closed_form() -> None:
    k, f0_hz = np.array([1, 3, 10, 30]), 98.0
    b = SMALL_GUITAR_STRINGS[0].inharmonicity(f0_hz)
    stiff = b * k**2
    freq_hz = partial_hz(k, f0_hz, b)
    # a viscous drag on the motion alone takes every partial of a flexible string down at the same rate
    np.testing.assert_allclose(string_loss(k, f0_hz, _losing(air_per_s=1.2)), 0.6 / (1.0 + stiff))
    # 1 / Q of a partial: in Q cycles its amplitude falls by exp(-pi)
    rate = string_loss(k, f0_hz, _losing(friction=1e-3))
    np.testing.assert_allclose(rate * 1000.0 / freq_hz, np.pi / (1.0 + stiff))
    # bending takes its share of the stiffness: nothing of a flexible string, all of a bar
    rate = string_loss(np.array([1e6]), f0_hz, _losing(bending_loss=0.02))
    assert rate / (np.pi * partial_hz(1e6, f0_hz, b)) == pytest.approx(0.02, rel=1e-3)


def test_bridge_takes_what_a_reflection_loses() -> None:
    # a wave meets the bridge f0 times a second and comes back as (1 - Z G) / (1 + Z G) (reflection at a resistance, any
    # textbook of waves)
    impedance, conductance, f0_hz = 0.5, 0.01, 200.0
    reflected = (1.0 - impedance * conductance) / (1.0 + impedance * conductance)
    assert bridge_loss(f0_hz, impedance, conductance) == pytest.approx(-f0_hz * np.log(reflected), rel=1e-4)
