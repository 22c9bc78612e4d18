"""Where the bench book lies."""

import os
from dataclasses import dataclass
from pathlib import Path

import platformdirs

PLACE_VARIABLE = "TIMBRE_MATCH_BOOK"
SIDE_FILES = ("-wal", "-shm", "-journal")
"""What SQLite keeps beside a database while it is open, or after its program was killed."""

_FOLDER = "timbre-match"
_NAME = "bench_book.sqlite"


@dataclass(frozen=True, kw_only=True, slots=True)
class Place:
    """Where a book lies: its file, and the folder of its own beside it (recordings, back-ups, the lock)."""

    book: Path
    own: bool = False

    @property
    def files(self) -> Path:
        """The book's own folder."""
        return self.book.with_name(f"{self.book.stem}_files")

    @property
    def lock(self) -> Path:
        """The file that says who is writing."""
        return self.files / "writing.lock"

    @property
    def recordings(self) -> Path:
        """Copies of recordings, by their SHA-256."""
        return self.files / "recordings"

    @property
    def backups(self) -> Path:
        """Back-ups that the program makes by itself."""
        return self.files / "backups"

    @property
    def write_ahead(self) -> Path:
        """SQLite's file of what was committed and is not in the book's file yet."""
        return self.book.with_name(f"{self.book.name}-wal")


def place_of(book: str | Path | None = None) -> Place:
    """Where the book is: as named, else as the environment variable says, else in the user's data folder."""
    named = book or os.environ.get(PLACE_VARIABLE)
    if named:
        return Place(book=Path(os.path.realpath(Path(named).expanduser())))
    return Place(book=platformdirs.user_data_path(_FOLDER, appauthor=False) / _NAME, own=True)


def size_of(path: Path) -> int:
    """Size of a file in bytes; 0 where there is none."""
    try:
        return path.stat().st_size
    except OSError:
        return 0
