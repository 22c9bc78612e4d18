"""One writer at a time, and who it is.

The lock is the operating system's, on a small file in the book's own folder, so it ends with the process however that
ends. What the file says (who is writing, and which files are not finished yet) is true only while the lock is held; a
process that was killed leaves its words behind, and whoever takes the lock next clears away what they name.
"""

import contextlib
import errno
import json
import os
import socket
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path

from timbre_match.errors import BookInUseError

WAIT_S = 10.0
"""How long a command waits for another one to finish writing."""

_POLL_S = 0.01
_LOCKED_BYTE = 1 << 30
"""On Windows a locked byte cannot be read by others, so it lies far behind the words."""


@dataclass(kw_only=True, slots=True)
class Held:
    """The lock while it is held: which unfinished files are to be cleared away if this process is killed.

    Without a handle there is no lock and nothing is written down: of a book that can only be read.
    """

    handle: int | None
    doing: str
    unfinished: list[Path] = field(default_factory=list)
    left_behind: tuple[Path, ...] = ()

    def note_unfinished(self, path: Path) -> None:
        """Write down a file before it is begun."""
        self.unfinished.append(path)
        self._write()

    def note_finished(self, *paths: Path) -> None:
        """Forget files that were written down; all of them if none is named."""
        self.unfinished = [path for path in self.unfinished if paths and path not in paths]
        self._write()

    def _write(self) -> None:
        if self.handle is None:
            return
        said = {
            "process": os.getpid(),
            "machine": socket.gethostname(),
            "doing": self.doing,
            "since": datetime.now(UTC).isoformat(timespec="seconds"),
            "unfinished": [os.fspath(path.absolute()) for path in self.unfinished],
        }
        text = json.dumps(said).encode()
        os.lseek(self.handle, 0, os.SEEK_SET)
        os.write(self.handle, text)
        os.ftruncate(self.handle, len(text))


@contextlib.contextmanager
def held(lock: Path, doing: str, *, wait_s: float | None = None) -> Iterator[Held]:
    """Hold the lock while the block runs.

    Parameters
    ----------
    lock : Path
        The file; made if missing, and left there.
    doing : str
        What for, as others who wait are told.
    wait_s : float, optional
        How long to wait for others; :data:`WAIT_S` by default, 0 to try once.

    Raises
    ------
    BookInUseError
        If it is still held by another process after that time; the message says by which.
    OSError
        If the file cannot be made or written.
    """
    handle = os.open(lock, os.O_RDWR | os.O_CREAT | getattr(os, "O_CLOEXEC", 0) | getattr(os, "O_BINARY", 0), 0o666)
    try:
        _wait(handle, lock, WAIT_S if wait_s is None else wait_s)
        taken = Held(handle=handle, doing=doing, left_behind=_unfinished_of_another(handle))
        taken._write()
        yield taken
        # Not reached when the block fails: then the words name what is left, for the next to clear away.
        os.ftruncate(handle, 0)
    finally:
        os.close(handle)


def holder(lock: Path) -> str:
    """Say who holds the lock, as far as its file tells."""
    try:
        said = json.loads(lock.read_bytes())
        since = datetime.fromisoformat(said["since"]).astimezone()
        here = "this machine" if said["machine"] == socket.gethostname() else said["machine"]
        return f'process {said["process"]} on {here}, which has been at "{said["doing"]}" since {since:%H:%M:%S}'
    except (OSError, ValueError, KeyError, TypeError):
        return "another program"


def _wait(handle: int, lock: Path, wait_s: float) -> None:
    end = time.monotonic() + wait_s
    while not _try_lock(handle):
        if time.monotonic() >= end:
            raise BookInUseError(
                f"the bench book is being written to by {holder(lock)}",
                where=str(lock.parent),
                cause="another command is at work, or waits for an answer",
                remedy="wait until it has finished, or end it, then run this command again; nothing was written",
            )
        time.sleep(_POLL_S)


def _unfinished_of_another(handle: int) -> tuple[Path, ...]:
    try:
        os.lseek(handle, 0, os.SEEK_SET)
        said = json.loads(os.read(handle, 1 << 20) or b"{}")
        return tuple(Path(path) for path in said.get("unfinished", ()))
    except (ValueError, TypeError, AttributeError):
        # Cut off in the middle of its words.
        return ()


if sys.platform == "win32":
    import msvcrt

    def _try_lock(handle: int) -> bool:
        os.lseek(handle, _LOCKED_BYTE, os.SEEK_SET)
        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        return True

else:
    import fcntl

    def _try_lock(handle: int) -> bool:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            if error.errno in (errno.EWOULDBLOCK, errno.EACCES, errno.EINTR):
                return False
            raise
        return True
