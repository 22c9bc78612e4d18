"""Reading: every kind of file, the choice of the channel, and every kind of file that cannot be used."""

import hashlib
import io
import os
import struct
from pathlib import Path

import numpy as np
import pytest
import soundfile

from tests.intake.sounds import RATE, Array, played_note, write
from timbre_match.errors import RecordingError
from timbre_match.intake.recording import read_recording

NOTE = played_note(held_s=0.6, gap_s=0.1)


@pytest.mark.parametrize(
    ("kind", "subtype", "step"),
    [
        ("WAV", "PCM_16", 2.0**-15),
        ("WAV", "PCM_24", 2.0**-23),
        ("WAV", "PCM_32", 2.0**-31),
        ("WAV", "FLOAT", 2.0**-24),
        ("WAV", "DOUBLE", 0.0),
        ("FLAC", "PCM_24", 2.0**-23),
        ("AIFF", "PCM_16", 2.0**-15),
    ],
)
def test_lossless_files_come_back_to_within_a_quantisation_step(
    tmp_path: Path, kind: str, subtype: str, step: float
) -> None:
    path = write(tmp_path / "note.any", NOTE, format=kind, subtype=subtype)
    recording = read_recording(path)
    assert recording.samples.dtype == np.float64
    assert np.max(np.abs(recording.samples - NOTE)) <= step
    assert recording.sample_rate_hz == RATE
    assert (recording.channel, recording.channel_count) == (1, 1)
    assert recording.file == "note.any"
    assert recording.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


@pytest.mark.parametrize(("kind", "subtype"), [("OGG", "VORBIS"), ("MP3", "MPEG_LAYER_III")])
def test_lossy_files_are_read_by_content_whatever_they_are_called(tmp_path: Path, kind: str, subtype: str) -> None:
    recording = read_recording(write(tmp_path / "note.wav", NOTE, format=kind, subtype=subtype))
    # The lag of the codec is not known; the strongest line is.
    spectrum = np.abs(np.fft.rfft(recording.samples))
    assert abs(np.argmax(spectrum) * RATE / len(recording.samples) - 440.0) < 3.0


@pytest.mark.parametrize("rate", [22_050, 32_000, 48_000, 96_000, 192_000])
def test_sample_rates_of_the_trade_are_read(tmp_path: Path, rate: int) -> None:
    note = played_note(rate=rate, held_s=0.6, gap_s=0.1)
    recording = read_recording(write(tmp_path / "note.wav", note, rate, subtype="PCM_24"))
    assert recording.sample_rate_hz == rate
    assert recording.warnings == ()


def test_samples_are_read_only(tmp_path: Path) -> None:
    recording = read_recording(write(tmp_path / "note.wav", NOTE))
    with pytest.raises(ValueError, match="read-only"):
        recording.samples[0] = 0.0


def three_channels() -> Array:
    # The second is the strongest; the third has the largest offset but the least sound.
    return np.stack([0.5 * NOTE, 0.9 * NOTE, 0.1 * NOTE + 0.5], axis=1)


def test_strongest_channel_is_taken_and_never_a_mix(tmp_path: Path) -> None:
    recording = read_recording(write(tmp_path / "note.wav", three_channels(), subtype="DOUBLE"))
    assert (recording.channel, recording.channel_count) == (2, 3)
    assert np.array_equal(recording.samples, 0.9 * NOTE)


def test_channel_counts_from_one(tmp_path: Path) -> None:
    recording = read_recording(write(tmp_path / "note.wav", three_channels(), subtype="DOUBLE"), channel=1)
    assert recording.channel == 1
    assert np.array_equal(recording.samples, 0.5 * NOTE)


@pytest.mark.parametrize("channel", [-1, 0, 4])
def test_missing_channel_is_refused(tmp_path: Path, channel: int) -> None:
    path = write(tmp_path / "note.wav", three_channels())
    with pytest.raises(RecordingError, match=rf"no channel {channel}: the recording has 3(.|\n)*from 1 to 3"):
        read_recording(path, channel=channel)


def test_channel_with_bad_numbers_is_passed_over(tmp_path: Path) -> None:
    channels = three_channels()
    channels[5, 1] = np.nan
    assert read_recording(write(tmp_path / "note.wav", channels, subtype="DOUBLE")).channel == 1


def wav_bytes(samples: Array, rate: int = RATE, subtype: str = "DOUBLE", kind: str = "WAV") -> bytes:
    file = io.BytesIO()
    soundfile.write(file, samples, rate, format=kind, subtype=subtype)
    return file.getvalue()


def with_value(value: float) -> Array:
    samples = NOTE.copy()
    samples[441] = value
    return samples


CLICK = np.zeros(RATE)
CLICK[10_000 : 10_000 + RATE // 50] = 0.5 * np.sin(np.arange(RATE // 50))

UNUSABLE = {
    "zero bytes": (b"", r"empty \(0 bytes\)"),
    "text renamed": (b"Dear maker,\nplease find my recording enclosed.\n" * 50, "not a recording"),
    "random bytes": (np.random.default_rng(1).bytes(5000), "not a recording"),
    "nul bytes": (bytes(5000), "not a recording"),
    "truncated FLAC": (wav_bytes(NOTE, kind="FLAC", subtype="PCM_16")[:20_000], "breaks off or is damaged"),
    "FLAC cut in its header": (
        wav_bytes(NOTE, kind="FLAC", subtype="PCM_16")[:60],
        "not a recording|breaks off|no samp",
    ),
    "NaN": (wav_bytes(with_value(np.nan)), r"1 of \d+ samples are not usable numbers, the first at 0\.010 s"),
    "infinite": (wav_bytes(with_value(-np.inf)), "not usable numbers"),
    "absurdly large": (wav_bytes(with_value(1e200)), "not usable numbers"),
    "no samples": (wav_bytes(np.zeros(0)), "no samples"),
    "two million zeros": (wav_bytes(np.zeros(2_000_000), subtype="PCM_16"), "silent: all 2000000 samples are 0"),
    "constant": (wav_bytes(np.full(RATE, 0.25)), r"silent: all 44100 samples are 0\.25"),
    "20 ms": (wav_bytes(NOTE[20_000 : 20_000 + RATE // 50]), "lasts 20 ms, too short"),
    "20 ms click in silence": (wav_bytes(CLICK), r"sound for (20|30) ms only, too short"),
    "8 kHz": (wav_bytes(NOTE, 8000), "sample rate is 8000 Hz; rates from 22050 to 192000 Hz"),
    "384 kHz": (wav_bytes(NOTE, 384_000), "sample rate is 384000 Hz"),
}


@pytest.mark.parametrize("name", UNUSABLE)
def test_unusable_file_is_refused_with_what_where_and_remedy(tmp_path: Path, name: str) -> None:
    data, message = UNUSABLE[name]
    path = tmp_path / "take.wav"
    path.write_bytes(data)
    with pytest.raises(RecordingError, match=message) as caught:
        read_recording(path)
    assert caught.value.where == str(path)
    assert caught.value.cause
    assert caught.value.remedy


def test_header_that_promises_more_than_memory_holds(tmp_path: Path) -> None:
    data = bytearray(wav_bytes(NOTE, kind="FLAC", subtype="PCM_16"))
    # STREAMINFO starts at byte 8; the 36-bit count of samples ends at its byte 18 (RFC 9639, 8.2).
    data[22:26] = struct.pack(">I", 0xFFFF_FFFF)
    path = tmp_path / "take.flac"
    path.write_bytes(data)
    with pytest.raises(RecordingError, match="breaks off"):
        read_recording(path)


@pytest.mark.parametrize(("kind", "subtype"), [("WAV", "PCM_16"), ("AIFF", "PCM_24"), ("MP3", "MPEG_LAYER_III")])
def test_cut_off_file_is_used_as_far_as_it_goes_and_said(tmp_path: Path, kind: str, subtype: str) -> None:
    whole = wav_bytes(played_note(held_s=2.0), kind=kind, subtype=subtype)
    path = tmp_path / "take"
    path.write_bytes(whole[: int(0.6 * len(whole))])
    recording = read_recording(path)
    assert any("cut off: it holds 2." in text and "of the 4.4 s" in text for text in recording.warnings)
    path.write_bytes(whole)
    assert not any("cut off: it holds" in text for text in read_recording(path).warnings)


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(RecordingError, match="no such file"):
        read_recording(tmp_path / "nothing.wav")


def test_folder(tmp_path: Path) -> None:
    with pytest.raises(RecordingError, match="a folder, not a recording"):
        read_recording(tmp_path)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="this system has no named pipes")
def test_pipe_and_device_are_refused_without_waiting(tmp_path: Path) -> None:
    pipe = tmp_path / "pipe.wav"
    os.mkfifo(pipe)
    for path in (pipe, Path("/dev/zero")):
        with pytest.raises(RecordingError, match="a pipe or a device"):
            read_recording(path)


@pytest.mark.parametrize("name", ["bad\0name.wav", "n" * 5000])
def test_impossible_name(name: str) -> None:
    with pytest.raises(RecordingError, match="cannot be read"):
        read_recording(name)


@pytest.mark.parametrize(
    ("error", "message"),
    [(PermissionError(13, "Permission denied"), "may not be read"), (OSError(5, "Input/output error"), "Input/output")],
)
def test_file_that_the_system_does_not_hand_over(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: OSError, message: str
) -> None:
    path = write(tmp_path / "note.wav", NOTE)

    def refuse(_: Path) -> bytes:
        raise error

    # Tests may run as root, whom no permission stops.
    monkeypatch.setattr(Path, "read_bytes", refuse)
    with pytest.raises(RecordingError, match=message):
        read_recording(path)


@pytest.mark.skipif(os.name == "nt", reason="file names are text there")
def test_name_that_is_no_text_is_made_one(tmp_path: Path) -> None:
    path = write(tmp_path / "note.wav", NOTE)
    odd = path.rename(os.fsdecode(os.fsencode(tmp_path) + b"/caf\xe9.wav"))
    assert read_recording(odd).file == "caf\ufffd.wav"
