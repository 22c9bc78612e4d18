"""Bytes of a saved file to a checked layout, with errors that name the file and the path inside it."""

import json
from pathlib import Path
from typing import NoReturn, TypeVar

from pydantic import ValidationError

from timbre_match.errors import FileVersionError, SavedFileError
from timbre_match.keep.layout import VERSION, Head, Layout

AnyLayout = TypeVar("AnyLayout", bound=Layout)

_NAMED_KINDS = {
    type(None): "null",
    bool: "true or false",
    int: "a number",
    float: "a number",
    str: "a text",
    list: "a list",
    dict: "a group of keys",
}
_EXPECTED = {
    "float_type": "a number",
    "finite_number": "a finite number",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "bool_type": "true or false",
    "string_type": "a text",
    "string_pattern_mismatch": "64 hexadecimal digits",
    "list_type": "a list",
    "model_type": "a group of keys",
    "model_attributes_type": "a group of keys",
}


def read_saved(path: str | Path) -> tuple[str, object]:
    """Read a saved file and check its head.

    Returns
    -------
    format : str
        The name of the format, such as ``"timbre-match/profile"``; not yet compared with any.
    content : object
        The parsed JSON.

    Raises
    ------
    SavedFileError
        If there is no such file, or it is not JSON, or has no head.
    FileVersionError
        If it has a later (or an unknown) version.
    """
    where = str(path)
    return _headed(_parse(_read(Path(path), where), where), where)


def read_saved_text(text: str, where: str) -> tuple[str, object]:
    """Check the head of a saved file's text, which errors speak of as `where`; for the rest as :func:`read_saved`."""
    return _headed(_parse(text.encode(), where), where)


def _headed(content: object, where: str) -> tuple[str, object]:
    head = check(Head, content, where)
    if head.version != VERSION and head.format.startswith("timbre-match/"):
        raise FileVersionError(
            f"version is {_shown(head.version)}; this program reads version {VERSION}",
            where=where,
            cause="the file was written by a later version of this program" if head.version > VERSION else "",
            remedy="update this program, or write the file again with this one",
        )
    return head.format, content


def check(layout: type[AnyLayout], content: object, where: str) -> AnyLayout:
    """Check parsed JSON against a layout.

    Raises
    ------
    SavedFileError
        Naming `where` and the path inside, such as ``takes[0].notes[3].harmonics[2].level_db``.
    """
    try:
        return layout.model_validate(content)
    except ValidationError as error:
        raise SavedFileError(
            first_fault(error),
            where=where,
            cause="the file was changed by hand or by another program, or was not written by this one",
            remedy="write it again with this program, or put back an earlier copy",
        ) from error


def first_fault(error: ValidationError) -> str:
    """Say where in the file the first fault is, and what it is: one line, however large the offending value."""
    fault = error.errors(include_url=False)[0]
    path = ""
    for step in fault["loc"]:
        path += f"[{step}]" if isinstance(step, int) else f".{step}" if path else str(step)
    kind, value = fault["type"], fault["input"]
    if kind == "missing":
        return f"{path} is missing"
    expected = _EXPECTED.get(kind)
    if expected is not None:
        text = f"should be {expected}, but is {_NAMED_KINDS.get(type(value), 'something else')} ({_shown(value)})"
    elif kind == "too_short":
        text = "should hold at least one entry, but is empty"
    elif kind == "value_error":
        text = str(fault["ctx"]["error"])
    else:
        text = f"{fault['msg'].removeprefix('Input ')}, but is {_shown(value)}"
    return f"{path}: {text}" if path else f"the file {text}"


def refuse_format(found: str, expected: str, where: str) -> NoReturn:
    """Refuse a file of another kind.

    Raises
    ------
    SavedFileError
        Always.
    """
    raise SavedFileError(
        f"format is {_shown(found)}, not {expected}",
        where=where,
        cause="another kind of file was named",
        remedy="check which file is meant",
    )


def _read(path: Path, where: str) -> bytes:
    try:
        if path.exists() and not path.is_file():
            raise SavedFileError("this is a folder or a device, not a saved file", where=where)
        return path.read_bytes()
    except FileNotFoundError as error:
        raise SavedFileError("there is no such file", where=where, remedy="check the name and the folder") from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise SavedFileError(
            f"the file cannot be read ({reason})", where=where, remedy="check its permissions and the drive"
        ) from error


def _parse(data: bytes, where: str) -> object:
    try:
        # A byte order mark, which some editors add, is harmless and dropped.
        return json.loads(data.decode("utf-8-sig"), parse_constant=_refuse_constant)
    except UnicodeDecodeError as error:
        what = f"byte {error.start} is not UTF-8 text"
    except json.JSONDecodeError as error:
        what = f"not JSON: {error.msg} in line {error.lineno}, column {error.colno}" if data else "the file is empty"
    except RecursionError:
        what = "not a saved file: it is nested far too deep"
    except ValueError as error:
        what = f"not a saved file: {_shorten(str(error))}"
    raise SavedFileError(
        what,
        where=where,
        cause="another kind of file, or one that was cut off or changed",
        remedy="check which file is meant, or write it again with this program",
    )


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not a number that JSON knows")


def _shown(value: object) -> str:
    if isinstance(value, dict | list):
        return f"{len(value)} entries"
    if isinstance(value, int) and not isinstance(value, bool) and abs(value) >= 10**18:
        # Writing out a number of thousands of digits is itself refused by Python.
        return "a number of more than 18 digits"
    return _shorten(json.dumps(value)) if isinstance(value, str | int | float | None) else _shorten(repr(value))


def _shorten(text: str) -> str:
    return text if len(text) <= 60 else text[:57] + "..."
