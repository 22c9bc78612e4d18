"""Ctrl-C while other code is at work that cannot be interrupted in the middle, or that starts processes.

Signals reach the main thread alone, and only there may their treatment be changed; in other threads nothing is done.
"""

import signal
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType


@contextmanager
def interrupts_held_back() -> Iterator[None]:
    """Let an interrupt wait until the block ends.

    For calls into libraries that call back: an exception raised in such a call back cannot pass through the library,
    so it would be printed with a traceback, and the interrupt be forgotten.
    """
    came: list[int] = []

    def remember(number: int, frame: FrameType | None) -> None:
        came.append(number)

    with _handler(remember):
        yield
    if came:
        signal.raise_signal(signal.SIGINT)


@contextmanager
def deaf_children() -> Iterator[None]:
    """Start processes that do not hear Ctrl-C, which a terminal sends to all processes of a command.

    What is ignored here stays ignored in the processes that are started (POSIX). They end when this process tells them
    to, and none of them prints a traceback of its own. An interrupt in the moment of their start is lost.
    """
    with _handler(signal.SIG_IGN):
        yield


@contextmanager
def _handler(handler: Callable[[int, FrameType | None], None] | signal.Handlers) -> Iterator[None]:
    before = signal.getsignal(signal.SIGINT)
    # None: set by other than Python code, which could not be put back.
    if before is None or threading.current_thread() is not threading.main_thread():
        yield
        return
    signal.signal(signal.SIGINT, handler)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)
