"""Samples, rate, channel and SHA-256 of a recording, and what is wrong with them."""

import hashlib
import io
import os
import re
import stat
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

from timbre_match.errors import RecordingError
from timbre_match.intake.faults import find_faults, sounding_seconds
from timbre_match.intake.spectrum import Spectrum
from timbre_match.threads import single_threaded

LOWEST_RATE_HZ = 22_050
HIGHEST_RATE_HZ = 192_000
SHORTEST_SOUND_S = 0.05
"""Below this no note can be told from a click: it is not even two cycles of a contrabassoon's lowest note."""

_LARGEST_SAMPLE = 1e12
"""Float files scaled like 32-bit integers reach 2e9; nothing that was sound lies beyond this."""

_VALUES_PER_BLOCK = 1 << 22
_CUT_CHUNK = re.compile(r"^\s*(?:data|SSND)\s*:\s*(\d+) \(should be (\d+)\)", re.MULTILINE)
_SIZE_UNKNOWN = 0x7FFF_FF00
"""Recorders that stream write a size near 2^31 or 2^32 because they do not know it yet; that promises nothing."""


@dataclass(frozen=True, kw_only=True, eq=False)
class Recording:
    """One channel of a recording.

    Attributes
    ----------
    file : str
        File name without folder.
    sha256 : str
        SHA-256 of the file's bytes, hex.
    samples : float64 array, shape (n,)
        Full scale is 1; read-only.
    sample_rate_hz : int
    channel, channel_count : int
        The chosen channel (counted from 1) of how many.
    warnings : tuple of str
        What would spoil a measurement, each a plain sentence.
    low_pass_hz : float or None
        Where a lossy codec, or an earlier conversion of the sample rate, has cut the sound off: harmonics above it are
        missing from the file, not from the instrument. None where no such edge was found.
    """

    file: str
    sha256: str
    samples: NDArray[np.float64]
    sample_rate_hz: int
    channel: int
    channel_count: int
    warnings: tuple[str, ...]
    low_pass_hz: float | None = None

    def __post_init__(self) -> None:
        samples = np.array(self.samples, dtype=np.float64)
        samples.setflags(write=False)
        object.__setattr__(self, "samples", samples)

    @cached_property
    def spectrum(self) -> Spectrum:
        """The spectrum of `samples`, for other rates and for reading between them: taken once, when first asked for."""
        return Spectrum(self.samples, self.sample_rate_hz)


@single_threaded
def read_recording(path: str | Path, *, channel: int | None = None) -> Recording:
    """Read one channel of a recording and say what is wrong with it.

    Everything that libsndfile reads is taken by its content, whatever the file is called: WAV, FLAC, AIFF, OGG, MP3
    and more. The file is read once, so that the SHA-256 belongs to the samples that were decoded.

    Parameters
    ----------
    path : str or Path
    channel : int, optional
        Which channel to take, counted from 1. Without it the strongest (highest root mean square) is taken; channels
        are never mixed, since two microphones hear the same harmonic at different phases and a mix cancels some.

    Returns
    -------
    Recording

    Raises
    ------
    RecordingError
        If the file cannot be read, is no recording, is cut off in a format that cannot bear it, has a sample rate
        outside 22.05 to 192 kHz, lacks the channel, holds values that are not numbers, or holds no sound long enough
        to be a note.
    """
    path = Path(path)
    where = str(path)
    data = _read_bytes(path)
    decoded = _decode(data, where)
    index = _choose_channel(decoded.channels, decoded.sample_rate_hz, channel, where)
    samples = np.ascontiguousarray(decoded.channels[:, index])
    _refuse_unusable(samples, decoded.sample_rate_hz, where)
    faults = find_faults(samples, decoded.sample_rate_hz)
    return Recording(
        file=os.fsencode(path.name).decode("utf-8", "replace"),
        sha256=hashlib.sha256(data).hexdigest(),
        samples=samples,
        sample_rate_hz=decoded.sample_rate_hz,
        channel=index + 1,
        channel_count=decoded.channels.shape[1],
        warnings=(*decoded.warnings, *faults.warnings),
        low_pass_hz=faults.low_pass_hz,
    )


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class _Decoded:
    channels: NDArray[np.float64]
    sample_rate_hz: int
    warnings: tuple[str, ...]


def _read_bytes(path: Path) -> bytes:
    where = str(path)
    try:
        # Opening a pipe or a device could wait for ever or never end, so its kind is asked first.
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise RecordingError(
                "this is a folder, not a recording", where=where, remedy="name one of the recordings inside it"
            )
        if not stat.S_ISREG(mode):
            raise RecordingError(
                "this is a pipe or a device, not a file",
                where=where,
                remedy="save the recording to a file first, then name that file",
            )
        data = path.read_bytes()
    except FileNotFoundError as error:
        raise RecordingError(
            "there is no such file",
            where=where,
            cause="a slip in the name, or the file has been moved",
            remedy="check the name and the folder",
        ) from error
    except PermissionError as error:
        raise RecordingError(
            "this file may not be read",
            where=where,
            cause="its permissions do not let you read it",
            remedy="give yourself the right to read it, or copy it to a folder of your own",
        ) from error
    except (OSError, ValueError) as error:
        raise RecordingError(
            f"the file cannot be read ({getattr(error, 'strerror', None) or error})",
            where=where,
            cause="the name is not one that a file can have, or the drive or card did not deliver it",
            remedy="check the name, or copy the file to another drive and try again",
        ) from error
    if not data:
        raise RecordingError(
            "the file is empty (0 bytes)",
            where=where,
            cause="the recorder or the copy stopped before anything was written",
            remedy="copy it again from the recorder, or record again",
        )
    return data


def _decode(data: bytes, where: str) -> _Decoded:
    try:
        sound = soundfile.SoundFile(io.BytesIO(data))
    except soundfile.LibsndfileError as error:
        raise RecordingError(
            f"this is not a recording that can be read ({error.error_string.strip()})",
            where=where,
            cause="another kind of file under a recording's name, or a file cut off near its start",
            remedy="export it again as WAV or FLAC",
        ) from error
    with sound:
        rate = int(sound.samplerate)
        if not LOWEST_RATE_HZ <= rate <= HIGHEST_RATE_HZ:
            raise RecordingError(
                f"the sample rate is {rate} Hz; rates from {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz can be measured",
                where=where,
                cause="a telephone or voice recording" if rate < LOWEST_RATE_HZ else "a special-purpose recording",
                remedy="record at 44,100 or 48,000 Hz; converting this file cannot bring back what is missing",
            )
        promised = int(sound.frames)
        rows = max(1, _VALUES_PER_BLOCK // int(sound.channels))
        blocks = []
        try:
            while True:
                # In blocks, because a damaged header may promise more samples than any memory holds.
                blocks.append(sound.read(rows, dtype="float64", always_2d=True))
                if len(blocks[-1]) < rows:
                    break
        except soundfile.LibsndfileError as error:
            raise RecordingError(
                f"the recording breaks off or is damaged ({error.error_string.strip()})",
                where=where,
                cause="a copy or download that was cut off",
                remedy="copy it again from where it came from",
            ) from error
        channels = blocks[0] if len(blocks) == 1 else np.concatenate(blocks)
        if len(channels) < promised and sound.format != "MP3":
            raise RecordingError(
                f"the recording breaks off: {len(channels) / rate:.2f} s of the {promised / rate:.2f} s in its header",
                where=where,
                cause="a copy or download that was cut off",
                remedy="copy it again from where it came from",
            )
        promised = max(promised, _promised_by_header(sound, len(channels)))
    if not len(channels):
        raise RecordingError(
            "the recording holds no samples",
            where=where,
            cause="the recorder was stopped before it started, or the copy was cut off",
            remedy="copy it again from the recorder, or record again",
        )
    return _Decoded(channels=channels, sample_rate_hz=rate, warnings=_cut_off_warning(len(channels), promised, rate))


def _promised_by_header(sound: soundfile.SoundFile, frames: int) -> int:
    """Frames that a WAV or AIFF header promises where the file is shorter; libsndfile only logs the difference."""
    match = _CUT_CHUNK.search(sound.extra_info)
    if match is None:
        return frames
    promised_bytes, found_bytes = int(match[1]), int(match[2])
    if promised_bytes >= _SIZE_UNKNOWN or found_bytes <= 0:
        return frames
    return round(frames * promised_bytes / found_bytes)


def _cut_off_warning(frames: int, promised: int, rate: int) -> tuple[str, ...]:
    # An MP3 header rounds its length to whole frames of 1,152 samples, so a small difference says nothing.
    if promised - frames <= max(0.02 * promised, 4 * 1152):
        return ()
    return (
        f"The file is cut off: it holds {frames / rate:.1f} s of the {promised / rate:.1f} s that its header promises. "
        "What is there is used; copy the file again to get the rest.",
    )


def _choose_channel(channels: NDArray[np.float64], rate: int, channel: int | None, where: str) -> int:
    count = channels.shape[1]
    if channel is not None:
        if not 1 <= channel <= count:
            raise RecordingError(
                f"there is no channel {channel}: the recording has {count}",
                where=where,
                remedy=(f"choose a channel from 1 to {count}, or none" if count > 1 else "name no channel")
                + " to take the strongest",
            )
        return channel - 1
    if count == 1:
        return 0
    # About the mean, so that a channel with nothing but a constant offset is not taken for the strongest. A channel
    # with values that are not numbers compares as nan here and is passed over if another one is sound.
    with np.errstate(invalid="ignore", over="ignore"):
        strength = channels.var(axis=0)
    return int(np.argmax(np.where(np.isfinite(strength), strength, -1.0)))


def _refuse_unusable(samples: NDArray[np.float64], rate: int, where: str) -> None:
    lowest, highest = samples.min(), samples.max()
    # NaN fails every comparison, so this finds it too.
    if not (lowest > -_LARGEST_SAMPLE and highest < _LARGEST_SAMPLE):
        bad = np.flatnonzero(~(np.abs(samples) < _LARGEST_SAMPLE))
        raise RecordingError(
            f"{len(bad)} of {len(samples)} samples are not usable numbers, the first at {bad[0] / rate:.3f} s",
            where=where,
            cause="a fault in the program that wrote the file (NaN or infinite values)",
            remedy="export the recording again, as 24-bit WAV or FLAC",
        )
    if len(samples) < SHORTEST_SOUND_S * rate:
        raise RecordingError(
            f"the recording lasts {1000 * len(samples) / rate:.0f} ms, too short to hold a note",
            where=where,
            cause="a click, or a recording cut off near its start",
            remedy="record the note held for a second or more",
        )
    if lowest == highest:
        raise RecordingError(
            f"the recording is silent: all {len(samples)} samples are {samples[0]:g}",
            where=where,
            cause="a muted track, the wrong input, or a recorder that was not armed",
            remedy="check the input level while playing, then record again",
        )
    sounding_s = sounding_seconds(samples, rate)
    if sounding_s < SHORTEST_SOUND_S:
        raise RecordingError(
            f"there is sound for {1000 * sounding_s:.0f} ms only, too short to hold a note",
            where=where,
            cause="a click or a knock and no note",
            remedy="record the note held for a second or more",
        )
