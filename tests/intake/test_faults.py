"""Each warning fires when its fault is put in, and not on the same note without it."""

import io
from collections.abc import Callable

import numpy as np
import pytest
import soundfile

from tests.intake.sounds import (
    RATE,
    Array,
    band,
    clip,
    hum,
    low_pass,
    noise,
    offset,
    played_note,
    plucked_note,
    quieten,
    reverberate,
)
from timbre_match.intake.faults import decay_times_s, find_faults, hop_levels_db

FAULTS: dict[str, tuple[Callable[[Array], Array], str]] = {
    "clipping": (clip, "Clipped"),
    "50 Hz": (hum(50.0), "Mains hum: lines at 50, 100, 150, 250 Hz"),
    "60 Hz": (hum(60.0), "Mains hum: lines at 60, 120, 180, 300 Hz"),
    "low level": (quieten, "Very quiet: the loudest sample is 46 dB below"),
    "noise": (noise, "Noisy"),
    "room": (reverberate, "Slow to die away"),
    "codec": (low_pass, "Nothing to be trusted above 1"),
    "DC": (offset, "Offset"),
}


def first_words(warnings: tuple[str, ...]) -> list[str]:
    return [text.partition(":")[0] for text in warnings]


@pytest.mark.parametrize("f0_hz", [65.4, 196.0, 440.0, 1318.5])
@pytest.mark.parametrize("name", FAULTS)
def test_fault_is_found_and_no_other(name: str, f0_hz: float) -> None:
    put_in, message = FAULTS[name]
    found = find_faults(put_in(played_note(f0_hz)), RATE).warnings
    assert len(found) == 1, found
    assert found[0].startswith(message)


@pytest.mark.parametrize("f0_hz", [27.5, 65.4, 196.0, 440.0, 1318.5, 4186.0])
def test_clean_note_has_no_fault(f0_hz: float) -> None:
    faults = find_faults(played_note(f0_hz), RATE)
    assert faults.warnings == ()
    assert faults.low_pass_hz is None


@pytest.mark.parametrize("gap_s", [0.0, 1.2])
@pytest.mark.parametrize("f0_hz", [49.0, 50.0, 60.0, 61.7, 98.0, 100.0, 120.0, 123.5, 147.0, 150.0, 180.0, 246.9])
def test_note_on_or_near_the_mains_series_is_no_hum(f0_hz: float, gap_s: float) -> None:
    assert find_faults(played_note(f0_hz, held_s=3.0, gap_s=gap_s), RATE).warnings == ()


@pytest.mark.parametrize("t60_s", [3.0, 8.0, 12.0])
def test_plucked_note_on_the_mains_series_is_no_hum(t60_s: float) -> None:
    assert find_faults(plucked_note(100.0, t60_s=t60_s), RATE).warnings == ()


def test_soft_plucked_note_on_the_mains_series_after_a_loud_one_is_no_hum() -> None:
    both = np.concatenate([played_note(440.0, gap_s=0.0), 0.05 * plucked_note(100.0, t60_s=8.0)])
    assert find_faults(both, RATE).warnings == ()


def test_vibrato_sidebands_are_no_hum() -> None:
    # 174.6 Hz with +-30 cents at 5.4 Hz has a sideband at 180.0 Hz, and its octave one at 360 Hz.
    time = np.arange(4 * RATE) / RATE
    depth = 174.6 * 0.0175 / 5.4
    phase = 2 * np.pi * 174.6 * time + depth * np.sin(2 * np.pi * 5.4 * time)
    note = 0.3 * sum(np.cos(k * phase) / k for k in range(1, 15))
    note = note + 1e-4 * np.random.default_rng(3).standard_normal(len(time))
    assert find_faults(np.asarray(note), RATE).warnings == ()


def test_hum_is_found_under_a_note_that_fills_the_recording() -> None:
    note = played_note(440.0, held_s=3.0, gap_s=0.0)
    assert first_words(find_faults(hum(50.0)(note), RATE).warnings) == ["Mains hum"]


def test_hum_too_weak_to_matter_is_not_mentioned() -> None:
    assert find_faults(hum(50.0, level=1e-4)(played_note()), RATE).warnings == ()


@pytest.mark.parametrize("gain", [1.0, 0.5 / 0.35])
def test_clipping_is_found_at_any_level(gain: float) -> None:
    assert first_words(find_faults(gain * clip(played_note()), RATE).warnings) == ["Clipped"]


@pytest.mark.parametrize("f0_hz", [30.0, 55.0, 440.0])
@pytest.mark.parametrize("rate", [44_100, 192_000])
def test_sine_that_touches_full_scale_in_16_bits_is_not_clipped(f0_hz: float, rate: int) -> None:
    sine = np.sin(2 * np.pi * f0_hz * np.arange(2 * rate) / rate)
    assert find_faults(np.round(32767 * sine) / 32768, rate).warnings == ()


def test_plucked_note_is_no_reverberation_and_no_noise() -> None:
    for t60_s in (0.6, 1.5, 3.0, 6.0, 12.0):
        assert find_faults(plucked_note(t60_s=t60_s), RATE).warnings == ()


@pytest.mark.parametrize("power", [0.5, 1.0, 2.0])
def test_fade_is_no_reverberation(power: float) -> None:
    note = played_note(held_s=5.0)
    time = np.arange(len(note)) / RATE
    note = note * np.clip((6.0 - time) / 2.5, 0.0, 1.0) ** power
    assert find_faults(note, RATE).warnings == ()


@pytest.mark.parametrize("t60_s", [1.0, 2.0, 4.0])
def test_decay_time_is_that_of_the_room(t60_s: float) -> None:
    # A level held for 2 s and then falling by 60 dB in t60_s, with the scatter of a narrow band's level about it.
    time = 0.01 * np.arange(1200)
    levels = -10.0 - np.clip(time - 2.0, 0.0, None) * 60.0 / t60_s + np.random.default_rng(4).normal(0, 1.0, len(time))
    assert decay_times_s(np.maximum(levels, -80.0), -10.0) == [pytest.approx(t60_s, rel=0.1)]


def test_stroke_that_dies_and_then_stops_is_no_room() -> None:
    time = 0.01 * np.arange(600)
    levels = -10.0 - np.clip(time - 2.0, 0.0, None) * 30.0
    assert decay_times_s(levels, -10.0) == [pytest.approx(2.0, rel=0.1)]
    levels[time > 3.25] = -80.0
    assert decay_times_s(levels, -10.0) == []


def test_fall_that_steepens_is_no_room() -> None:
    # A straight fade of the amplitude falls by 6 dB in the first half of its way and by 24 in the second.
    time = 0.01 * np.arange(600)
    fade = np.clip(1.0 - (time - 2.0) / 2.0, 1e-9, 1.0)
    assert decay_times_s(np.maximum(-10.0 + 20.0 * np.log10(fade), -50.0), -10.0) == []


def test_breath_after_the_note_is_not_the_background() -> None:
    rng = np.random.default_rng(11)
    breath, background = 0.018 * rng.standard_normal(RATE), 1e-4 * rng.standard_normal(RATE // 5)
    note = played_note(held_s=1.0, gap_s=0.0)
    assert find_faults(np.concatenate([note, breath, background]), RATE).warnings == ()


def test_soft_note_after_a_loud_one_is_no_noise() -> None:
    loud, soft = played_note(440.0, gap_s=0.4), 0.05 * played_note(330.0, gap_s=0.0)
    soft = soft + 10 ** (-75 / 20) * np.random.default_rng(5).standard_normal(len(soft))
    assert find_faults(np.concatenate([loud, soft]), RATE).warnings == ()


@pytest.mark.parametrize("noise_db", [-50.0, -40.0, -30.0])
def test_noise_is_given_in_db_below_the_notes(noise_db: float) -> None:
    note = played_note()
    loud_db = np.percentile(hop_levels_db(note, RATE), 95)
    noisy = note + 10 ** (noise_db / 20) * np.random.default_rng(6).standard_normal(len(note))
    found = find_faults(noisy, RATE).warnings
    expected = loud_db - noise_db
    if expected > 31:
        assert found == ()
    else:
        assert any(f"only {round(expected + shift)} dB below" in found[0] for shift in (-1, 0, 1)), found


def test_codec_edge_is_found_where_it_is() -> None:
    edge_hz = find_faults(low_pass(played_note()), RATE).low_pass_hz
    assert edge_hz is not None
    assert 10_700 < edge_hz < 11_300


def test_edge_is_the_lowest_where_a_codec_lets_something_through_above() -> None:
    noise_part = 0.003 * np.random.default_rng(12).standard_normal(4 * RATE)
    through = 3.0 * band(noise_part, 17_000, 17_300)
    edge_hz = find_faults(low_pass(noise_part, 16_000) + through, RATE).low_pass_hz
    assert edge_hz == pytest.approx(16_000, abs=120)


def test_edge_of_a_real_codec_is_found() -> None:
    # The encoder that libsndfile carries cuts at 15 to 17 kHz at about 65 kbit/s, by its own design.
    note = played_note() + 0.001 * np.random.default_rng(2).standard_normal(len(played_note()))
    file = io.BytesIO()
    soundfile.write(file, note, RATE, format="MP3", compression_level=0.5, bitrate_mode="VARIABLE")
    file.seek(0)
    faults = find_faults(soundfile.read(file)[0], RATE)
    assert faults.low_pass_hz is not None
    assert 14_500 < faults.low_pass_hz < 17_500
    assert first_words(faults.warnings) == [f"Nothing to be trusted above {faults.low_pass_hz / 1000:.1f} kHz"]


def test_harmonics_that_end_without_a_codec_are_no_edge() -> None:
    # 20 harmonics of 440 Hz end at 8.8 kHz, in numerical silence.
    time = np.arange(3 * RATE) / RATE
    note = np.asarray(0.1 * sum(np.cos(2 * np.pi * k * 440.0 * time) for k in range(1, 21)))
    assert find_faults(note, RATE).low_pass_hz is None


@pytest.mark.parametrize("rate", [22_050, 48_000, 96_000, 192_000])
def test_other_rates_have_no_fault_of_their_own(rate: int) -> None:
    assert find_faults(played_note(rate=rate), rate).warnings == ()


@pytest.mark.parametrize("gain", [1e-200, 1e-12, 2.0**31, 1e11])
def test_any_scale_of_the_samples_is_looked_at_without_a_stumble(gain: float) -> None:
    expected = ["Very quiet"] if gain < 1 else []
    assert first_words(find_faults(gain * played_note(), RATE).warnings) == expected


@pytest.mark.parametrize("length", [2205, 3000, 10_000, 40_000])
def test_short_recordings_are_looked_at_without_a_stumble(length: int) -> None:
    note = played_note(gap_s=0.0)[3000 : 3000 + length]
    assert first_words(find_faults(note, RATE).warnings) == []
