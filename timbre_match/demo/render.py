"""Render the workshop's recordings: ``python -m timbre_match.demo.render --out FOLDER``."""

import argparse
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

from timbre_match.demo.body import Body
from timbre_match.demo.bowed_string import bridge_force, harmonic_sum
from timbre_match.demo.draws import Draws
from timbre_match.demo.player import Stroke, TakeHabit, draw_note_offsets_db, draw_stroke, draw_take_habit
from timbre_match.demo.plucked_render import render_plucked_take
from timbre_match.demo.plucked_workshop import PLUCKED_STAGES, PLUCKED_TAKES, plucked_file_name
from timbre_match.demo.room import SAMPLE_RATE_HZ, heard_in_room, microphone_noise, quantise, workshop_room
from timbre_match.demo.workshop import NOTES, STAGES, TAKES, Stage, WrittenNote, body_of, file_name
from timbre_match.errors import OutputError
from timbre_match.units import note_to_hz

_SEED = 1
_HIGHEST_SHARE_OF_RATE = 0.45
_CONTROL_STEP = 128
_BOW_NOISE_DB = -50.0
_MICROPHONE_GAIN_DB = -31.0
_LEAD_S = 0.6
_TAIL_S = 0.8
_BOW_CHANGE_S = (0.01, 0.04)
_STRING_CHANGE_S = (0.12, 0.28)


def bowed_note(
    stroke: Stroke, force: NDArray[np.float64], body: Body, sample_rate_hz: int = SAMPLE_RATE_HZ
) -> NDArray[np.float64]:
    """Sound of one stroke in front of the instrument, without noise or room.

    Parameters
    ----------
    stroke : Stroke
    force : array, shape (K,)
        Amplitude of harmonics 1 ... K of the force on the bridge; only those that stay below 0.45 of the sample rate
        sound.
    body : Body
        Follows each harmonic at its instantaneous frequency, vibrato included (quasi-steady: the body settles faster
        than the hand swings).
    sample_rate_hz : int

    Returns
    -------
    array, shape (n,)
    """
    length = round(stroke.length_s * sample_rate_hz)
    time_s = np.arange(length) / sample_rate_hz
    track_hz = stroke.track_hz(time_s)
    k = np.arange(1, len(force) + 1)
    k = k[k * track_hz.max() < _HIGHEST_SHARE_OF_RATE * sample_rate_hz]
    # the body's response changes slowly next to the sound: evaluate it every few milliseconds and join with lines
    at = np.append(np.arange(0, length - 1, _CONTROL_STEP), length - 1)
    weights = force[: len(k), np.newaxis] * body.response(k[:, np.newaxis] * track_hz[at])
    return harmonic_sum(track_hz, weights, at.astype(np.float64), sample_rate_hz) * stroke.envelope(time_s)


def bow_noise(stroke: Stroke, body: Body, draws: Draws, sample_rate_hz: int = SAMPLE_RATE_HZ) -> NDArray[np.float64]:
    """Rush of the hair on the string through the same body, root-mean-square 1 over the note; shape (n,)."""
    length = round(stroke.length_s * sample_rate_hz)
    rush = draws.normal(length) * stroke.envelope(np.arange(length) / sample_rate_hz)
    spectrum = np.fft.rfft(rush)
    freq_hz = np.fft.rfftfreq(length, 1.0 / sample_rate_hz)
    spectrum[1:] *= body.response(freq_hz[1:])
    spectrum[0] = 0.0
    noise = np.fft.irfft(spectrum, length)
    return np.asarray(noise / np.sqrt(np.mean(noise**2)))


def render_take(stage: Stage, take: int) -> NDArray[np.int16]:
    """Render take 1, 2, ... of a stage at `SAMPLE_RATE_HZ`, 16 bits; the same at each call; shape (n,)."""
    draws = Draws(_SEED, STAGES.index(stage), take)
    body = body_of(stage)
    habit = draw_take_habit(draws)
    pieces = [np.zeros(round(_LEAD_S * SAMPLE_RATE_HZ))]
    for index, written in enumerate(NOTES):
        if index:
            same_string = written.string is NOTES[index - 1].string
            pause_s = draws.between(*(_BOW_CHANGE_S if same_string else _STRING_CHANGE_S))
            pieces.append(np.zeros(round(pause_s * SAMPLE_RATE_HZ)))
        pieces.append(_played(written, habit, body, draws))
    pieces.append(np.zeros(round(_TAIL_S * SAMPLE_RATE_HZ)))
    sound = 10.0 ** (_MICROPHONE_GAIN_DB / 20.0) * heard_in_room(np.concatenate(pieces), workshop_room())
    sound += microphone_noise(len(sound), SAMPLE_RATE_HZ, draws)
    return quantise(sound, draws)


def _played(written: WrittenNote, habit: TakeHabit, body: Body, draws: Draws) -> NDArray[np.float64]:
    written_hz = note_to_hz(written.note) * 2.0 ** (written.intonation_cents / 1200.0)
    stroke = draw_stroke(written_hz, vibrato=written.vibrato, draws=draws)
    k = np.arange(1, int(0.5 * SAMPLE_RATE_HZ / written_hz))
    freq_hz = k * written_hz
    offsets_db = habit.offsets_db(freq_hz) + draw_note_offsets_db(freq_hz, draws)
    force = bridge_force(
        k, written_hz, open_hz=note_to_hz(written.string.open_note), rounding_s=written.string.rounding_s
    )
    tone = bowed_note(stroke, force * 10.0 ** (offsets_db / 20.0), body)
    noise = bow_noise(stroke, body, draws)
    return np.asarray(tone + 10.0 ** (_BOW_NOISE_DB / 20.0) * np.sqrt(np.mean(tone**2)) * noise)


def render_workshop(folder: Path) -> tuple[Path, ...]:
    """Write every take of every stage into `folder` as 16-bit FLAC, and return the files in order.

    Raises
    ------
    OutputError
        If the folder cannot be made or written to.
    """
    written = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, samples in _recordings():
            written.append(folder / name)
            soundfile.write(written[-1], samples, SAMPLE_RATE_HZ, subtype="PCM_16", format="FLAC")
    except (OSError, soundfile.SoundFileError) as error:
        raise OutputError(
            f"the demo recordings cannot be written ({error})",
            where=str(folder),
            remedy="choose a folder that you may write to",
        ) from error
    return tuple(written)


def _recordings() -> Iterator[tuple[str, NDArray[np.int16]]]:
    """File name and samples of every take in the workshop."""
    for stage in STAGES:
        for take in range(1, TAKES + 1):
            yield file_name(stage, take), render_take(stage, take)
    for plucked in PLUCKED_STAGES:
        for take in range(1, PLUCKED_TAKES + 1):
            yield plucked_file_name(plucked, take), render_plucked_take(plucked, take)


def main() -> None:
    """Parse the command line and render."""
    parser = argparse.ArgumentParser(description="Render the recordings of the invented workshop.")
    parser.add_argument("--out", type=Path, required=True, help="folder for the FLAC files")
    for path in render_workshop(parser.parse_args().out):
        print(path.name)


if __name__ == "__main__":
    main()
