"""The rendered sound against source times body, and the kept recordings against a new rendering."""

from pathlib import Path

import numpy as np
import pytest
import scipy.signal
import soundfile

from timbre_match.demo import render
from timbre_match.demo.body import violin_body
from timbre_match.demo.bowed_string import bridge_force
from timbre_match.demo.player import Stroke
from timbre_match.demo.plucked_render import render_plucked_take
from timbre_match.demo.plucked_workshop import FINCH_AFTER_THE_WINTER, PLUCKED_STAGES, plucked_file_name
from timbre_match.demo.room import SAMPLE_RATE_HZ as RATE
from timbre_match.demo.tones import plucked_takes, takes, tones_folder
from timbre_match.demo.workshop import HERON, NOTES, STAGES, WREN_VARNISHED, Stage, file_name
from timbre_match.errors import OutputError


def _steady(f0_hz: float, *, length_s: float = 1.4, vibrato_cents: float = 0.0) -> Stroke:
    return Stroke(
        f0_hz=f0_hz,
        length_s=length_s,
        attack_s=0.05,
        release_s=0.05,
        drift_cents=0.0,
        bend_cents=0.0,
        vibrato_cents=vibrato_cents,
        vibrato_hz=5.5,
        vibrato_turn=0.0,
        level_db=0.0,
        swell_db=0.0,
        swell_hz=1.0,
        swell_turn=0.0,
    )


@pytest.mark.parametrize("period", [225, 100, 63])
def test_steady_tone_is_source_times_body(period: int) -> None:
    f0_hz = RATE / period
    force = bridge_force(np.arange(1, 200), f0_hz, open_hz=195.9977, rounding_s=40e-6)
    body = violin_body()
    tone = render.bowed_note(_steady(f0_hz), force, body)
    periods = 100
    cut = tone[5000 : 5000 + periods * period]
    measured = 2.0 * np.abs(np.fft.rfft(cut))[periods::periods] / len(cut)
    count = int(np.ceil(0.45 * RATE / f0_hz)) - 1
    k = np.arange(1, count + 1)
    expected = force[:count] * np.abs(body.response(k * f0_hz))
    np.testing.assert_allclose(20.0 * np.log10(measured[:count] / expected), 0.0, atol=0.1)
    # nothing above 0.45 of the rate, so nothing can fold back
    assert np.all(measured[count:] < 1e-9 * measured.max())


def test_harmonic_follows_the_body_during_vibrato() -> None:
    # the third harmonic alone swings across the flank of a resonance: its envelope is the body at that moment
    stroke = _steady(180.0, vibrato_cents=15.0)
    body = violin_body()
    tone = render.bowed_note(stroke, np.array([0.0, 0.0, 1.0]), body)
    time_s = np.arange(len(tone)) / RATE
    middle = (time_s > 0.45) & (time_s < 1.2)
    envelope = np.abs(scipy.signal.hilbert(tone))[middle]
    expected = np.abs(body.response(3.0 * stroke.track_hz(time_s[middle])))
    assert 20.0 * np.log10(expected.max() / expected.min()) > 2.0
    np.testing.assert_allclose(20.0 * np.log10(envelope / expected), 0.0, atol=0.1)


@pytest.mark.parametrize(("stage", "take"), [(HERON, 2), (WREN_VARNISHED, 3)], ids=["heron", "wren"])
def test_kept_take_is_what_the_workshop_renders(stage: Stage, take: int) -> None:
    kept, rate = soundfile.read(tones_folder() / file_name(stage, take), dtype="int16")
    again = render.render_take(stage, take)
    assert rate == RATE
    assert len(again) == len(kept)
    error_dbfs = 10.0 * np.log10(np.mean(((again.astype(float) - kept) / 32768.0) ** 2) + 1e-20)
    assert error_dbfs < -80.0


def test_every_kept_take_is_sixteen_bit_mono_with_headroom() -> None:
    files = [path for paths in takes().values() for path in paths]
    plucked = [path for paths in plucked_takes().values() for path in paths]
    assert {path.name for path in tones_folder().glob("*.flac")} == {path.name for path in files + plucked}
    for path in files:
        info = soundfile.info(path)
        assert (info.samplerate, info.channels, info.subtype, info.format) == (RATE, 1, "PCM_16", "FLAC")
        # each note is held for 1.25 s at least
        assert info.duration > 1.25 * len(NOTES)
        samples, _ = soundfile.read(path)
        assert -15.0 < 20.0 * np.log10(np.abs(samples).max()) < -3.0
    assert sum(path.stat().st_size for path in tones_folder().iterdir()) < 12e6


def test_command_writes_the_same_take_each_time(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(render, "TAKES", 1)
    monkeypatch.setattr(render, "STAGES", STAGES[:1])
    monkeypatch.setattr(render, "PLUCKED_TAKES", 1)
    monkeypatch.setattr(render, "PLUCKED_STAGES", PLUCKED_STAGES[1:])
    monkeypatch.setattr("sys.argv", ["render", "--out", str(tmp_path / "tones")])
    render.main()
    plucked, bowed = sorted((tmp_path / "tones").iterdir())
    assert bowed.name == file_name(HERON, 1)
    np.testing.assert_array_equal(soundfile.read(bowed, dtype="int16")[0], render.render_take(HERON, 1))
    assert plucked.name == plucked_file_name(FINCH_AFTER_THE_WINTER, 1)
    again = render_plucked_take(FINCH_AFTER_THE_WINTER, 1)
    np.testing.assert_array_equal(soundfile.read(plucked, dtype="int16")[0], again)


def test_folder_that_cannot_be_made_is_an_output_error(tmp_path: Path) -> None:
    in_the_way = tmp_path / "tones"
    in_the_way.write_text("not a folder")
    with pytest.raises(OutputError, match="cannot be written"):
        render.render_workshop(in_the_way)
