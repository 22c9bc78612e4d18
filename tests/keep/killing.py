"""Work on a bench book that is killed at a random moment, and what has to be true afterwards.

Run as a program it is the work: ``python -m tests.keep.killing JOB FOLDER [COUNT]`` does one job over and over, and
says on standard output what has returned.
"""

import os
import random
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import timbre_match as tm
from tests.command_line import ROOT
from tests.intake.sounds import played_note, write
from tests.keep.books import STEP_2, assert_whole, log_without_measuring
from timbre_match.keep import book_schema
from timbre_match.keep.book_copy import checked_counts

READY = "ready"


@dataclass(frozen=True, kw_only=True, slots=True)
class Killed:
    """What a job had said before it was killed."""

    said: tuple[str, ...]
    after_s: float


def kill_at_random(job: str, folder: Path, chance: random.Random, *, longest_s: float) -> Killed:
    """Start a job, kill it with SIGKILL at a moment between its start and `longest_s` later, and say what it said."""
    worker = subprocess.Popen(
        [sys.executable, "-m", "tests.keep.killing", job, str(folder)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=ROOT,
        env={**os.environ, "OMP_NUM_THREADS": "1", "PYTHONPATH": str(ROOT)},
    )
    assert worker.stdout is not None
    first = worker.stdout.readline().strip()
    after_s = chance.uniform(0.0, longest_s)
    time.sleep(after_s)
    worker.send_signal(signal.SIGKILL)
    said, err = worker.communicate(timeout=60)
    assert (first, worker.returncode) == (READY, -signal.SIGKILL), err
    return Killed(said=tuple(said.split()), after_s=after_s)


def log_side_by_side(folder: Path, processes: int, count: int) -> list[str]:
    """Let several processes log sessions into one book at once; returns the identifiers of all that returned."""
    workers = [
        subprocess.Popen(
            [sys.executable, "-m", "tests.keep.killing", "logging", str(folder), str(count)],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
            cwd=ROOT,
            env={**os.environ, "OMP_NUM_THREADS": "1", "PYTHONPATH": str(ROOT)},
        )
        for _ in range(processes)
    ]
    said = []
    for worker in workers:
        out, err = worker.communicate(timeout=600)
        assert (worker.returncode, err) == (0, "")
        said += out.split()[1:]
    return said


def prepare(job: str, folder: Path) -> None:
    """Make what a job works on."""
    book = folder / "book.sqlite"
    with tm.BenchBook.open(book) as opened:
        opened.add("Heron 7", family="violin")
    for number in range(3):
        (folder / f"first_{number}.wav").write_bytes(os.urandom(50_000))
        log_without_measuring(
            book, "Heron 7", "in the white", [folder / f"first_{number}.wav"], keep_audio=job != "migrating"
        )
    if job == "measuring":
        write(folder / "note.wav", played_note(440.0, held_s=0.4, gap_s=0.2))
    if job == "restoring":
        for name, sessions in (("one", 1), ("two", 2)):
            for number in range(sessions):
                path = folder / f"{name}_{number}.wav"
                path.write_bytes(os.urandom(30_000))
                log_without_measuring(book, "Heron 7", name, [path], keep_audio=True)
            with tm.BenchBook.open(book) as opened:
                opened.backup(folder / f"{name}.sqlite")


def assert_survived(job: str, folder: Path, killed: Killed) -> None:
    """What has to be true after the kill: of the book, of back-ups, and of everything that had returned."""
    book = folder / "book.sqlite"
    if job in ("logging", "measuring"):
        assert_whole(book, killed.said)
    elif job == "backing up":
        assert_whole(book)
        for backup in folder.glob("backup_*.sqlite"):
            assert checked_counts(backup)["sessions"] == 3
            assert_whole(backup)
        assert {f"backup_{number}.sqlite" for number in killed.said} <= {path.name for path in folder.iterdir()}
    elif job == "restoring":
        assert_whole(book, kept_for_others=True)
        # Either of the two back-ups (the second is the book as it was at first), never a mixture.
        assert checked_counts(book)["sessions"] in (4, 6)
        for replaced in folder.glob("book_replaced_*.sqlite"):
            assert checked_counts(replaced)["sessions"] in (4, 6)
            replaced.unlink()
    else:
        upgrades = book_schema.UPGRADES
        book_schema.UPGRADES = (*upgrades, STEP_2)
        try:
            for migrated in folder.glob("migrated_*.sqlite"):
                assert_whole(migrated)
                assert checked_counts(migrated)["varnishes"] == 3
                migrated.unlink()
        finally:
            book_schema.UPGRADES = upgrades


def _log(folder: Path, number: int) -> str:
    path = folder / f"{os.getpid()}_{number}.wav"
    path.write_bytes(os.urandom(20_000))
    return log_without_measuring(folder / "book.sqlite", "Heron 7", "varnished", [path], keep_audio=True)


def _measure(folder: Path, number: int) -> str:
    with tm.BenchBook.open(folder / "book.sqlite") as book:
        name = f"Wren {os.getpid()} {number}"
        book.add(name, family="violin")
        return book.log(name, [folder / "note.wav"], stage="in the white").session.uuid


def _back_up(folder: Path, number: int) -> str:
    with tm.BenchBook.open(folder / "book.sqlite") as book:
        book.backup(folder / f"backup_{number % 4}.sqlite")
    return str(number % 4)


def _restore(folder: Path, number: int) -> str:
    name = ("one", "two")[number % 2]
    tm.BenchBook.restore(folder / f"{name}.sqlite", folder / "book.sqlite")
    return name


def _migrate(folder: Path, number: int) -> str:
    book_schema.UPGRADES = (*book_schema.UPGRADES[:1], STEP_2)
    book = folder / f"migrated_{os.getpid()}_{number}.sqlite"
    part = folder / "migrating.part"
    shutil.copyfile(folder / "book.sqlite", part)
    part.replace(book)
    tm.BenchBook.open(book).close()
    return book.name


JOBS: dict[str, Callable[[Path, int], str]] = {
    "logging": _log,
    "measuring": _measure,
    "backing up": _back_up,
    "restoring": _restore,
    "migrating": _migrate,
}


def main() -> None:
    """Do one job over and over, and say each time what has returned."""
    job, folder = JOBS[sys.argv[1]], Path(sys.argv[2])
    # Everything is loaded before the clock starts.
    import timbre_match.keep.files
    import timbre_match.measure.takes  # noqa: F401

    print(READY, flush=True)
    for number in range(int(sys.argv[3]) if len(sys.argv) > 3 else 1_000_000):
        print(job(folder, number), flush=True)


if __name__ == "__main__":
    main()
