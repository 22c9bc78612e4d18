"""A held note cut into whole cycles of equally many points."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.intake.sounds import recording_of
from timbre_match.intake.cycles import cut_cycles
from timbre_match.intake.notes import HeldNote, held_notes

RATE = 44_100


def played(f0_hz: float) -> NDArray[np.float64]:
    # Harmonics up to 0.2 of the rate, where reading between samples is good to 116 dB.
    time_s = np.arange(RATE) / RATE
    top = int(0.2 * RATE / f0_hz)
    return np.asarray(0.2 * sum(np.cos(2.0 * np.pi * k * f0_hz * time_s + k * k) / k for k in range(1, top + 1)))


def known_note(f0_hz: float) -> HeldNote:
    """The note as its maker knows it: nothing is estimated."""
    track_s = np.linspace(0.1, 0.9, 41)
    return HeldNote(
        note="",
        f0_hz=f0_hz,
        cents=0.0,
        start_s=0.1,
        end_s=0.9,
        cycles=int(0.8 * f0_hz),
        kind="held",
        track_s=track_s,
        track_hz=np.full(41, f0_hz),
    )


@pytest.mark.parametrize("f0_hz", [31.7, 98.31, 441.7, 1318.9, 4001.3])
def test_rows_of_a_steady_note_are_equal(f0_hz: float) -> None:
    cycles = cut_cycles(recording_of(played(f0_hz), RATE), known_note(f0_hz)).samples
    assert len(cycles) == int(0.8 * f0_hz)
    error = np.abs(cycles - cycles.mean(axis=0))
    # Two cycles next to the margins may hold what lies beyond the cut.
    assert 20.0 * np.log10(error[2:-2].max() / np.abs(cycles).max()) < -100.0


@pytest.mark.parametrize("f0_hz", [98.31, 441.7, 1318.9])
def test_rows_are_equal_on_the_estimated_clock_too(f0_hz: float) -> None:
    recording = recording_of(played(f0_hz), RATE)
    (note,) = held_notes(recording)
    cycles = cut_cycles(recording, note).samples
    error = np.sqrt(np.mean((cycles - cycles.mean(axis=0)) ** 2)) / np.sqrt(np.mean(cycles**2))
    assert 20.0 * np.log10(error) < -60.0


def test_cycles_start_a_period_apart_and_are_closed() -> None:
    cycles = cut_cycles(recording_of(played(220.0), RATE), known_note(220.0))
    assert cycles.start_s[0] == pytest.approx(0.1, abs=1e-12)
    assert np.diff(cycles.start_s) == pytest.approx(1.0 / 220.0, rel=1e-9)
    for array in (cycles.samples, cycles.start_s):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0.0


def test_harmonics_end_at_nyquist_or_at_a_codec_edge() -> None:
    recording, note = recording_of(played(220.0), RATE), known_note(220.0)
    assert 0.95 * RATE / 2 < cut_cycles(recording, note).highest_hz < RATE / 2
    assert cut_cycles(replace(recording, low_pass_hz=11_000.0), note).highest_hz < 11_000.0
    # With vibrato the highest harmonic must stay below Nyquist at the top of the swing.
    swinging = replace(note, track_hz=220.0 * (1.0 + 0.03 * np.sin(np.linspace(0.0, 40.0, 41))))
    assert cut_cycles(recording, swinging).highest_hz / 220.0 * swinging.track_hz.max() < RATE / 2
