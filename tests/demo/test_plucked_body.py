"""The small guitar's body against published resonances and closed forms."""

import numpy as np
import pytest

from timbre_match.demo.body import Body
from timbre_match.demo.plucked_body import PluckedBody, small_guitar_body
from timbre_match.demo.plucked_string import SMALL_GUITAR_STRINGS
from timbre_match.units import note_to_hz

FREQ_HZ = np.geomspace(60.0, 10_000.0, 40_000)


def _one_mode() -> PluckedBody:
    mode = Body(
        mode_hz=np.array([200.0]), mode_q=np.array([25.0]), mode_gain=np.array([1.0]), bridge_hz=1e9, bridge_q=1.0
    )
    return PluckedBody(radiation=mode, mode_kg=np.array([1.5]))


def test_lowest_resonances_lie_where_they_are_published() -> None:
    # classical guitar: air 90 to 110 Hz, top 180 to 220 Hz (Fletcher & Rossing, chapter 9; from memory)
    level = small_guitar_body().conductance_s_kg(FREQ_HZ)
    peaks_hz = FREQ_HZ[1:-1][(level[1:-1] > level[:-2]) & (level[1:-1] > level[2:])]
    assert 90.0 <= peaks_hz[0] <= 110.0
    assert 180.0 <= peaks_hz[1] <= 220.0


def test_conductance_is_the_real_part_of_a_masss_admittance() -> None:
    omega, own = 2.0 * np.pi * FREQ_HZ, 2.0 * np.pi * 200.0
    admittance = 1j * omega / (1.5 * (own**2 - omega**2 + 1j * omega * own / 25.0))
    np.testing.assert_allclose(_one_mode().conductance_s_kg(FREQ_HZ), admittance.real, rtol=1e-9)


def test_strings_see_a_nearly_rigid_bridge() -> None:
    # the rate at which the bridge takes energy is derived for 2 Z G far below 1
    conductance = small_guitar_body().conductance_s_kg(FREQ_HZ)
    assert conductance.min() > 0.0
    for string in SMALL_GUITAR_STRINGS:
        assert 2.0 * string.impedance_kg_s(note_to_hz(string.open_note)) * conductance.max() < 0.05


def test_masses_are_copied_and_read_only() -> None:
    body = _one_mode()
    with pytest.raises(ValueError, match="read-only"):
        body.mode_kg[0] = 2.0


def test_body_is_the_same_each_time() -> None:
    one, other = small_guitar_body(), small_guitar_body()
    np.testing.assert_array_equal(one.radiation.mode_hz, other.radiation.mode_hz)
    np.testing.assert_array_equal(one.mode_kg, other.mode_kg)
