"""The whole error tree on one page.

Every error that a maker can cause or mend derives from :class:`TimbreMatchError`. Its message says what went wrong,
where, the likely cause and what to do next; the command line prints that message and exits with status 1.
"""


class TimbreMatchError(Exception):
    """Base of every error that this package raises on purpose.

    Parameters
    ----------
    what : str
        What went wrong, with the offending value where there is one.
    where : str
        The file, option or place inside a file; may be empty.
    cause : str
        The likely cause; may be empty.
    remedy : str
        What to do next; may be empty.
    """

    def __init__(self, what: str, *, where: str = "", cause: str = "", remedy: str = "") -> None:
        self.what = what
        self.where = where
        self.cause = cause
        self.remedy = remedy
        # One argument only: an error that comes back from another process is made anew from it.
        super().__init__(what)

    def __str__(self) -> str:
        first = f"{self.where}: {self.what}" if self.where else self.what
        lines = [first]
        if self.cause:
            lines.append(f"  likely cause: {self.cause}")
        if self.remedy:
            lines.append(f"  what to do: {self.remedy}")
        return "\n".join(lines)


class RecordingError(TimbreMatchError):
    """A recording cannot be read, or nothing in it can be measured."""


class NoHeldNoteError(RecordingError):
    """A recording was read, but holds no note that is steady for long enough."""


class SavedFileError(TimbreMatchError):
    """A saved profile, target or comparison cannot be read: not JSON, a missing key, a wrong type."""


class FileVersionError(SavedFileError):
    """A saved file was written by a later major version of the format."""


class OutputError(TimbreMatchError):
    """A result cannot be written where it was asked for."""


class ComparisonError(TimbreMatchError):
    """Two profiles have nothing in common that could be compared."""


class ControlError(ComparisonError):
    """A control cannot tell what changed between two sessions: two instruments, or recordings that count twice."""


class UnknownNameError(TimbreMatchError):
    """A note name, family or option value that this package does not know."""


class BookError(TimbreMatchError):
    """The bench book cannot be opened, read or written: no such file, a full disk, a drive that is not there."""


class BookDamagedError(BookError):
    """The bench book is damaged, or something in it is not what was written."""


class BookInUseError(BookError):
    """Another program has been writing to the bench book for longer than this one waits."""


__all__ = [
    "BookDamagedError",
    "BookError",
    "BookInUseError",
    "ComparisonError",
    "ControlError",
    "FileVersionError",
    "NoHeldNoteError",
    "OutputError",
    "RecordingError",
    "SavedFileError",
    "TimbreMatchError",
    "UnknownNameError",
]
