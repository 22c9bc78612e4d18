"""The plucked sound against its sum written out, and the kept recordings against a new rendering."""

import numpy as np
import pytest
import scipy.signal
import soundfile

from timbre_match.demo.draws import Draws
from timbre_match.demo.plucked_body import small_guitar_body
from timbre_match.demo.plucked_render import attack, render_plucked_take, ringing_string
from timbre_match.demo.plucked_workshop import (
    FINCH_AFTER_THE_WINTER,
    FINCH_STRUNG_UP,
    PLUCKED_NOTES,
    PluckedStage,
    Vibrations,
    plucked_file_name,
)
from timbre_match.demo.room import SAMPLE_RATE_HZ
from timbre_match.demo.tones import plucked_takes, tones_folder

RATE = SAMPLE_RATE_HZ


def test_ringing_string_is_the_sum_written_out() -> None:
    s = np.array([[-2.0 + 2j * np.pi * 220.0, -0.5 + 2j * np.pi * 221.0], [-8.0 + 2j * np.pi * 441.0, -4.0 + 0j]])
    c = np.array([[0.5 + 0.2j, 0.2], [0.3j, 0.0]])
    time_s = np.arange(round(0.7 * RATE)) / RATE
    expected = sum(
        (amplitude * np.exp(rate * time_s)).real for rate, amplitude in zip(s.ravel(), c.ravel(), strict=True)
    )
    np.testing.assert_allclose(ringing_string(Vibrations(s=s, c=c), 0.7), expected, atol=1e-10)


def test_attack_rings_like_the_body_and_is_soon_gone() -> None:
    body = small_guitar_body().radiation
    sound = attack(body, Draws(5))
    power = sound**2
    # the slowest mode decides the end: amplitude exp(-pi f t / Q)
    slowest = float(np.min(np.pi * body.mode_hz / body.mode_q))
    late = slice(int(0.35 * RATE), int(0.4 * RATE))
    assert 10.0 * np.log10(power[late].mean() / power[: int(0.02 * RATE)].mean()) < -0.8 * 8.686 * slowest * 0.33
    freq_hz, spectrum = scipy.signal.welch(sound[int(0.05 * RATE) : int(0.3 * RATE)], RATE, nperseg=int(0.25 * RATE))
    strongest_hz = float(freq_hz[spectrum.argmax()])
    assert np.min(np.abs(body.mode_hz[:4] / strongest_hz - 1.0)) < 0.03


@pytest.mark.parametrize(
    ("stage", "take"), [(FINCH_STRUNG_UP, 2), (FINCH_AFTER_THE_WINTER, 3)], ids=["strung up", "after the winter"]
)
def test_kept_take_is_what_the_workshop_renders(stage: PluckedStage, take: int) -> None:
    kept, rate = soundfile.read(tones_folder() / plucked_file_name(stage, take), dtype="int16")
    again = render_plucked_take(stage, take)
    assert rate == RATE
    assert len(again) == len(kept)
    error_dbfs = 10.0 * np.log10(np.mean(((again.astype(float) - kept) / 32768.0) ** 2) + 1e-20)
    assert error_dbfs < -80.0


def test_every_kept_take_is_sixteen_bit_mono_with_headroom() -> None:
    for path in (path for paths in plucked_takes().values() for path in paths):
        info = soundfile.info(path)
        assert (info.samplerate, info.channels, info.subtype, info.format) == (RATE, 1, "PCM_16", "FLAC")
        # each note rings for 2.9 s at least
        assert info.duration > 2.9 * len(PLUCKED_NOTES)
        samples, _ = soundfile.read(path)
        assert -15.0 < 20.0 * np.log10(np.abs(samples).max()) < -1.5
