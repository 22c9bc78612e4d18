"""The body against published resonances and the closed form of one mode."""

import numpy as np
import pytest

from timbre_match.demo.body import Body, Change, violin_body

FREQ_HZ = np.geomspace(180.0, 8000.0, 60_000)


def _level_db(body: Body) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return np.asarray(20.0 * np.log10(np.abs(body.response(FREQ_HZ))))


def test_low_resonances_lie_where_they_are_published() -> None:
    # Woodhouse, Euphonics section 5.3, after Bissinger (second-hand): bands of A0, CBR, B1-, B1+
    bands = [(260.0, 290.0), (380.0, 440.0), (440.0, 490.0), (510.0, 580.0)]
    level_db = _level_db(violin_body())
    inner = level_db[1:-1]
    peaks_hz = FREQ_HZ[1:-1][(inner > level_db[:-2]) & (inner > level_db[2:])]
    below = peaks_hz[peaks_hz < 600.0]
    assert len(below) == len(bands)
    for peak_hz, (low_hz, high_hz) in zip(below, bands, strict=True):
        assert low_hz <= peak_hz <= high_hz


def test_bridge_hill_lies_where_it_is_published() -> None:
    # Woodhouse 2005, "On the bridge hill of the violin": vicinity of 2.5 kHz; other sources 2.3 kHz or 2 to 3 kHz
    power = np.abs(violin_body().response(FREQ_HZ)) ** 2
    octaves = np.log2(FREQ_HZ)
    centres = np.arange(np.log2(800.0), np.log2(7000.0), 1.0 / 24.0)
    third_octave = np.array([power[np.abs(octaves - centre) < 1.0 / 6.0].mean() for centre in centres])
    assert 2000.0 <= 2.0 ** centres[third_octave.argmax()] <= 3000.0
    # a hill: well above the octave below and the octave above it
    level_db = 10.0 * np.log10([power[np.abs(octaves - np.log2(hz)) < 1.0 / 6.0].mean() for hz in (800, 2400, 5000)])
    assert level_db[1] > level_db[0] + 6.0
    assert level_db[1] > level_db[2] + 6.0


def test_one_mode_has_the_height_and_width_of_its_q() -> None:
    # at resonance |H| = g Q; the half-power points are f_m / Q apart (any textbook of vibration); bridge moved far away
    body = Body(
        mode_hz=np.array([500.0]), mode_q=np.array([50.0]), mode_gain=np.array([2.0]), bridge_hz=1e9, bridge_q=1.0
    )
    assert abs(body.response(500.0)) == pytest.approx(100.0, rel=1e-6)
    fine_hz = np.linspace(480.0, 520.0, 400_001)
    # velocity form |H| / f is exactly symmetric in f / f_m against f_m / f
    strong = fine_hz[np.abs(body.response(fine_hz)) / fine_hz >= 100.0 / 500.0 / np.sqrt(2.0)]
    assert strong[-1] - strong[0] == pytest.approx(10.0, abs=1e-3)


def test_modes_are_as_damped_as_wood() -> None:
    # wooden bodies have modes with Q of about 20 to 50 (from memory)
    body = violin_body()
    assert body.mode_q.min() >= 20.0
    assert body.mode_q.max() <= 50.0


def test_change_is_full_inside_half_in_the_edge_and_nothing_outside() -> None:
    change = Change(low_hz=600.0, high_hz=800.0, gain_db=-5.0, edge_octaves=0.25)
    np.testing.assert_allclose(change.difference_db([600.0, 700.0, 800.0]), -5.0)
    np.testing.assert_allclose(change.difference_db([600.0 * 2.0**-0.125, 800.0 * 2.0**0.125]), -2.5)
    np.testing.assert_allclose(change.difference_db([500.0, 960.0, 5000.0]), 0.0, atol=1e-12)


def test_changed_body_differs_by_the_change_alone() -> None:
    change = Change(low_hz=2000.0, high_hz=3000.0, gain_db=4.0)
    body = violin_body()
    ratio = body.with_changes((change,)).response(FREQ_HZ) / body.response(FREQ_HZ)
    np.testing.assert_allclose(ratio, 10.0 ** (change.difference_db(FREQ_HZ) / 20.0), rtol=1e-12)


def test_arrays_are_copies_and_read_only() -> None:
    source = np.array([500.0])
    body = Body(mode_hz=source, mode_q=source, mode_gain=source, bridge_hz=2000.0, bridge_q=2.0)
    source[0] = 1.0
    assert body.mode_hz[0] == 500.0
    with pytest.raises(ValueError, match="read-only"):
        body.mode_q[0] = 2.0
