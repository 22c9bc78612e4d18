import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.intake.sounds import played_note, write
from timbre_match.intake.recording import Recording, read_recording
from timbre_match.measure import takes
from timbre_match.measure.interrupts import deaf_children, interrupts_held_back


@pytest.fixture(autouse=True)
def _as_in_a_terminal() -> Iterator[None]:
    """Started in the background, the tests themselves may be deaf to interrupts."""
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    yield
    signal.signal(signal.SIGINT, before)


def test_an_interrupt_waits_for_the_end_of_the_block() -> None:
    steps = []

    def interrupted() -> None:
        with interrupts_held_back():
            signal.raise_signal(signal.SIGINT)
            steps.append("inside")
        steps.append("after")

    with pytest.raises(KeyboardInterrupt):
        interrupted()
    assert steps == ["inside"]
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_without_an_interrupt_nothing_happens() -> None:
    with interrupts_held_back():
        pass
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_other_threads_may_listen_too() -> None:
    done = []

    def work() -> None:
        with interrupts_held_back(), deaf_children():
            done.append(signal.getsignal(signal.SIGINT))

    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert done == [signal.default_int_handler]


def test_reading_a_recording_is_not_broken_off_in_the_middle(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write(tmp_path / "note.wav", played_note(220.0, held_s=0.7, gap_s=0.25))
    read = []

    def interrupted(path: Path, channel: int | None = None) -> Recording:
        signal.raise_signal(signal.SIGINT)
        read.append(read_recording(path, channel=channel))
        return read[-1]

    monkeypatch.setattr(takes, "read_recording", interrupted)
    with pytest.raises(KeyboardInterrupt):
        takes.listen(path, takes.Listening())
    assert len(read) == 1


def test_children_do_not_hear_an_interrupt() -> None:
    say = [sys.executable, "-c", "import signal; print(signal.getsignal(signal.SIGINT) is signal.SIG_IGN)"]
    with deaf_children():
        deaf = subprocess.run(say, capture_output=True, text=True, check=True).stdout
    assert (deaf, subprocess.run(say, capture_output=True, text=True, check=True).stdout) == ("True\n", "False\n")
