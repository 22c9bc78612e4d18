"""Files that are written whole or not at all.

Everything goes to a temporary name beside its place first, is forced to the disk, and is then moved into place in one
step. Whatever interrupts that (a full disk, a pulled drive, Ctrl-C) leaves what was there before, and nothing else.
"""

import contextlib
import errno
import os
import secrets
import shutil
from collections.abc import Iterator, Mapping
from pathlib import Path

from timbre_match.errors import OutputError


def write_whole(path: str | Path, data: bytes) -> None:
    """Write `data` to `path`, replacing a file that is there.

    Parameters
    ----------
    path : str or Path
        A symbolic link is followed, and stays one.
    data : bytes

    Raises
    ------
    OutputError
        If the folder is missing, `path` is a folder or a device, permission is lacking or the disk is full. An
        existing file is left as it was, and no temporary file is left behind.
    """
    path = Path(path)
    with plain_write_errors(path):
        place = _place_of_file(path)
        temporary = temporary_beside(place)
        try:
            _write_synced(temporary, data)
            if place.exists():
                shutil.copymode(place, temporary)
            temporary.replace(place)
            sync_folder(place.parent)
        finally:
            temporary.unlink(missing_ok=True)


def check_file_place(path: str | Path) -> None:
    """Refuse a place where no file can be written, before the work for it is done.

    Raises
    ------
    OutputError
        If the folder is missing, or `path` is a folder or a device.
    """
    path = Path(path)
    with plain_write_errors(path):
        # The dot asks for a folder: a file in its place is an error of its own.
        os.stat(os.path.join(_place_of_file(path).parent, "."))  # noqa: PTH116, PTH118 (a path drops the dot)


def check_folder_place(folder: str | Path) -> None:
    """Refuse a place where no folder can be made because a file stands there.

    Raises
    ------
    OutputError
    """
    folder = Path(folder)
    with plain_write_errors(folder):
        if folder.exists() and not folder.is_dir():
            raise OutputError(
                "this is a file, so no folder can be made here", where=str(folder), remedy="name another folder"
            )


def write_folder_whole(folder: str | Path, files: Mapping[str, bytes]) -> None:
    """Write a new folder with `files` in it, each named by its key.

    An empty folder that is already there is used; a folder with anything in it is refused, since replacing it would
    take the maker's other files with it.

    Raises
    ------
    OutputError
        As :func:`write_whole`, and if `folder` holds files already or is a file.
    """
    folder = Path(folder)
    with plain_write_errors(folder):
        place = Path(os.path.realpath(folder))
        check_folder_place(folder)
        if place.exists() and any(place.iterdir()):
            raise OutputError(
                "this folder already holds files",
                where=str(folder),
                remedy="name a new folder, or empty this one first",
            )
        temporary = temporary_beside(place)
        try:
            temporary.mkdir()
            for name, data in files.items():
                _write_synced(temporary / name, data)
            sync_folder(temporary)
            if place.exists():
                place.rmdir()
            temporary.rename(place)
            sync_folder(place.parent)
        finally:
            shutil.rmtree(temporary, ignore_errors=True)


def make_folder(folder: str | Path) -> None:
    """Make a folder, and those above it, where they are missing.

    Raises
    ------
    OutputError
        If it cannot be made, or a file stands in its place.
    """
    folder = Path(folder)
    check_folder_place(folder)
    with plain_write_errors(folder):
        folder.mkdir(parents=True, exist_ok=True)


def _place_of_file(path: Path) -> Path:
    place = Path(os.path.realpath(path))
    if place.is_dir():
        raise OutputError(
            "this is a folder, so no file can be written here", where=str(path), remedy="add a file name to it"
        )
    if place.exists() and not place.is_file():
        # Moving a file onto a device's name would replace the device.
        raise OutputError("this is a device or a pipe, not a file", where=str(path), remedy="name a file instead")
    return place


def temporary_beside(place: Path) -> Path:
    """Give a name in the same folder, since only within one file system can a move be done in one step."""
    return place.parent / f".timbre-match-{secrets.token_hex(8)}.part"


def _write_synced(path: Path, data: bytes) -> None:
    with path.open("xb") as file:
        file.write(data)
        file.flush()
        os.fsync(file.fileno())


def sync_folder(folder: Path) -> None:
    """Force the folder's list of names to the disk, where the system can do that (Windows cannot)."""
    with contextlib.suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


_CAUSES = {
    errno.ENOENT: ("the folder does not exist", "make the folder first, or name one that exists"),
    errno.ENOTDIR: ("a part of this path is a file, not a folder", "check the path"),
    errno.EACCES: ("you may not write here", "choose a folder of your own, or ask for the right to write"),
    errno.EPERM: ("you may not write here", "choose a folder of your own, or ask for the right to write"),
    errno.EROFS: ("this drive can be read, but not written to", "choose a folder on another drive"),
    errno.ENOSPC: ("the disk is full", "make room, then run the command again"),
    errno.EDQUOT: ("your share of the disk is used up", "make room, then run the command again"),
    errno.ENAMETOOLONG: ("the name is too long", "choose a shorter name"),
}


@contextlib.contextmanager
def plain_write_errors(path: Path) -> Iterator[None]:
    """Turn what the system says about a write that failed into an :class:`OutputError` in plain words."""
    try:
        yield
    except (OSError, ValueError) as error:
        number = error.errno if isinstance(error, OSError) else None
        reason = error.strerror if isinstance(error, OSError) else str(error)
        what, remedy = _CAUSES.get(number or 0, (f"it cannot be written here ({reason})", "choose another place"))
        raise OutputError(f"{what}; nothing was written", where=str(path), remedy=remedy) from error
