"""How fast a large bench book is opened, listed and shown, and whether many sessions at once all arrive.

    python -m benchmarks.bench_book                       # 300 instruments, 5,000 sessions
    python -m benchmarks.bench_book --side-by-side 100    # two processes, 100 sessions each, nothing else

The book is filled without measuring: every session has three takes and the profile of the demo's violin (14 notes).
Times on the clock, the middle of several: of calls in this process, and of commands in new processes, which have to
start the interpreter and the libraries first (`--help` does little else).
"""

import argparse
import random
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import timbre_match as tm
from tests.keep.books import assert_whole
from tests.keep.killing import log_side_by_side, prepare
from timbre_match.demo.tones import target_file
from timbre_match.keep import book_writing
from timbre_match.keep.book_place import place_of
from timbre_match.keep.book_session import profile_text
from timbre_match.keep.book_store import Store

REPEATS = 5
STAGES = ("in the white", "varnished", "set up", "played in")
ROWS_PER_SESSION = 3


def fill(book: Path, instruments: int, sessions: int) -> None:
    """Write the sessions of all instruments, several stages of each."""
    profile = tm.load_target(target_file()).members[0]
    text, note_count = profile_text(profile), sum(len(take.notes) for take in profile.takes)
    chance = random.Random(1)
    with tm.BenchBook.open(book) as opened:
        for number in range(instruments):
            opened.add(f"No. {number}", family="violin")
    store = Store(place_of(book), create=False)
    with store.writing("benchmark") as connection:
        for number in range(sessions):
            stage_id = book_writing.stage_id_of(connection, 1 + number % instruments, chance.choice(STAGES))
            day = f"20{chance.randrange(10, 27)}-{chance.randrange(1, 13):02}-{chance.randrange(1, 29):02}"
            session_id = book_writing.insert_session(connection, stage_id, tm.Conditions(date=day, room="workshop"))
            sha256s = [chance.randbytes(32).hex() for _ in range(ROWS_PER_SESSION)]
            for take, sha256 in enumerate(sha256s, start=1):
                recording_id = book_writing.recording_id_of(
                    connection, sha256=sha256, file=f"take {take}.wav", size_bytes=1
                )
                book_writing.note_place(connection, recording_id, "path", f"/recordings/{number}/take {take}.wav")
                book_writing.insert_take(connection, session_id, "instrument", take, [recording_id])
            book_writing.insert_measurement(
                connection,
                session_id,
                "instrument",
                text,
                instrument=f"No. {number % instruments}",
                note_count=note_count,
                sha256s=sha256s,
                measured_with="benchmark",
            )
    store.close()


def middle_s(work: Callable[[], object]) -> float:
    """Middle of the seconds that some work takes."""
    times = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def command(*arguments: str) -> Callable[[], object]:
    """Make a run of the command line in a new process."""
    line = [sys.executable, "-c", "from timbre_match.cli import main; main()", *arguments]
    return lambda: subprocess.run(line, check=True, capture_output=True)


def print_times(book: Path) -> None:
    """Time everything and print the table."""
    place = str(book)
    with tm.BenchBook.open(book, create=False) as opened:
        rows: dict[str, Callable[[], object]] = {
            "open and close": lambda: tm.BenchBook.open(book, create=False).close(),
            "list": opened.list,
            "show": lambda: opened.show("No. 7"),
            "one profile": lambda: opened.profile("No. 7"),
            "timbre-match --help": command("--help"),
            "timbre-match book list": command("book", "list", "--book", place),
            "timbre-match book show": command("book", "show", "No. 7", "--book", place),
            "timbre-match book show --json": command("book", "show", "No. 7", "--json", "--book", place),
        }
        for name, work in rows.items():
            print(f"{name:34}{middle_s(work):>8.3f} s", flush=True)
        once: dict[str, Callable[[], object]] = {
            "check (once)": opened.check,
            "back-up, checked (once)": lambda: opened.backup(book.with_name("copy.sqlite")),
        }
        for name, work in once.items():
            start = time.perf_counter()
            work()
            print(f"{name:34}{time.perf_counter() - start:>8.3f} s", flush=True)


def main() -> None:
    """Parse the command line and run."""
    parser = argparse.ArgumentParser(description="Speed of a large bench book.")
    parser.add_argument("--instruments", type=int, default=300)
    parser.add_argument("--sessions", type=int, default=5000)
    parser.add_argument(
        "--side-by-side", type=int, metavar="COUNT", help="two processes that log so many sessions each"
    )
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        if options.side_by_side:
            prepare("logging", folder)
            start = time.perf_counter()
            said = log_side_by_side(folder, 2, options.side_by_side)
            taken_s = time.perf_counter() - start
            assert_whole(folder / "book.sqlite", said)
            print(f"{len(set(said))} of {2 * options.side_by_side} sessions are in the book, in {taken_s:.1f} s")
            return
        book = folder / "book.sqlite"
        fill(book, options.instruments, options.sessions)
        size_mb = book.stat().st_size / 1e6
        print(f"{options.instruments} instruments, {options.sessions} sessions, {size_mb:.0f} MB\n")
        print_times(book)


if __name__ == "__main__":
    main()
