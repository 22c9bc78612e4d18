"""The recordings behind the book: the files of a take, copies in the book's own folder, what became of them."""

import hashlib
import os
import shutil
from collections.abc import Iterable, Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from timbre_match.errors import BookError, TimbreMatchError
from timbre_match.keep.book_lock import Held
from timbre_match.keep.book_place import Place
from timbre_match.keep.book_records import Lying
from timbre_match.keep.writing import sync_folder, temporary_beside

_BLOCK = 1 << 20


@dataclass(frozen=True, kw_only=True, slots=True)
class AudioFile:
    """A recording: its file's name, what is in it, and where it lies, if that is known.

    `size_bytes` is 0 and `path` None where they are not known, which is so of recordings that only a profile tells of.
    `given_as` is the path as it was given, by which an error names it.
    """

    name: str
    sha256: str
    size_bytes: int = 0
    path: Path | None = None
    given_as: str = ""

    @property
    def kept_as(self) -> str:
        """Where a copy lies inside the folder of recordings; the first two digits keep folders small."""
        suffix = Path(self.name).suffix.lower()
        return f"{self.sha256[:2]}/{self.sha256}{suffix if suffix[1:].isalnum() and suffix.isascii() else ''}"


def files_of_takes(takes: Sequence[Path | Sequence[Path]]) -> list[list[AudioFile]]:
    """The files of each take that can be read; the measuring says what is wrong with the others."""
    from timbre_match.measure.takes import recordings_of_take

    found = []
    for take in takes:
        files = []
        with suppress(TimbreMatchError):
            for path in recordings_of_take(take) if isinstance(take, Path) else take:
                with suppress(OSError):
                    files.append(audio_file(path))
        found.append(files)
    return found


def audio_file(path: Path) -> AudioFile:
    """Read a file's size and SHA-256.

    Raises
    ------
    OSError
        If it cannot be read, or is no file.
    """
    if not path.is_file():
        raise FileNotFoundError(path)
    sha256, size_bytes = _hashed(path)
    name = os.fsencode(path.name).decode("utf-8", "replace")
    return AudioFile(name=name, sha256=sha256, size_bytes=size_bytes, path=path.absolute(), given_as=str(path))


def keep_copies(files: Iterable[AudioFile], place: Place, lock: Held) -> None:
    """Copy recordings into the book's own folder, each whole and checked by its SHA-256, or not at all.

    The copies stand in the lock as unfinished until the caller has written their rows.

    Raises
    ------
    BookError
        If a recording has been altered since it was measured, or a copy does not read back as it was written.
    OSError
        If there is no room, or the drive is gone.
    """
    for file in files:
        target = place.recordings / file.kept_as
        if file.path is None or lying(target, file.sha256, file.size_bytes) == "in place":
            continue
        lock.note_unfinished(target)
        copy_recording(file.path, target, file.sha256, lock)


def copy_recording(source: Path, target: Path, sha256: str, lock: Held) -> None:
    """Copy one recording whole, and read the copy back.

    Raises
    ------
    BookError, OSError
        As :func:`keep_copies`.
    """
    target.parent.mkdir(parents=True, exist_ok=True)
    temporary = temporary_beside(target)
    lock.note_unfinished(temporary)
    try:
        with source.open("rb") as original, temporary.open("xb") as copy:
            shutil.copyfileobj(original, copy, _BLOCK)
            copy.flush()
            os.fsync(copy.fileno())
        if _hashed(temporary)[0] != sha256:
            raise BookError(
                "the copy of this recording is not what was measured; nothing was written",
                where=str(source),
                cause="the recording was altered meanwhile, or a drive is failing",
                remedy="look at the recording, then run the command again",
            )
        temporary.replace(target)
        sync_folder(target.parent)
    finally:
        temporary.unlink(missing_ok=True)
    lock.note_finished(temporary)


def lying(path: Path, sha256: str, size_bytes: int) -> Lying:
    """Whether a recording is there, and is what was measured."""
    try:
        if not path.is_file():
            return "missing"
        if (size_bytes and path.stat().st_size != size_bytes) or _hashed(path)[0] != sha256:
            return "altered"
    except OSError:
        return "missing"
    return "in place"


def _hashed(path: Path) -> tuple[str, int]:
    digest, size_bytes = hashlib.sha256(), 0
    with path.open("rb") as file:
        while block := file.read(_BLOCK):
            digest.update(block)
            size_bytes += len(block)
    return digest.hexdigest(), size_bytes
