"""Ctrl-C ends a command with one line, and ends the processes that it started."""

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from tests.command_line import ROOT
from tests.intake.sounds import played_note, write

# The command itself, which also says on standard output when a result has come in: from then on it is at work.
# Started in the background, the tests themselves may be deaf to interrupts, and what they start with them.
TELLING = """
import signal

import timbre_match.measure.takes as takes
from timbre_match.cli import main

signal.signal(signal.SIGINT, signal.default_int_handler)
listen_to_all = takes.listen_to_all

def telling(paths, listening, *, jobs, progress):
    def told(results, count):
        for result in results:
            print("heard", flush=True)
            yield result
    return listen_to_all(paths, listening, jobs=jobs, progress=told)

takes.listen_to_all = telling
main()
"""


@pytest.mark.parametrize("jobs", ["1", "2"])
def test_an_interrupted_command_says_so_and_leaves_nothing(jobs: str, tmp_path: Path) -> None:
    note = write(tmp_path / "note.wav", played_note(220.0, held_s=0.7, gap_s=0.25))
    many = [str(note)] * 2000
    out = tmp_path / "p.json"
    command = subprocess.Popen(
        [sys.executable, "-c", TELLING, "measure", *many, "--out", str(out), "--jobs", jobs],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        cwd=ROOT,
        start_new_session=True,
    )
    assert command.stdout is not None
    first = command.stdout.readline()
    # As a terminal does it: to the command and to all that it started.
    os.killpg(command.pid, signal.SIGINT)
    # This waits until no process holds the streams any more, so the helpers are gone when it returns.
    heard, err = command.communicate(timeout=120)
    assert first == "heard\n", err
    assert heard.count("heard") < len(many) - 1
    assert (command.returncode, err) == (130, "timbre-match: interrupted; no file was left half written\n")
    assert list(tmp_path.iterdir()) == [note]
