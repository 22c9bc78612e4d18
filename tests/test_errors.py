"""The error tree: one base, messages with what, where, the cause and the remedy."""

import inspect
import pickle

import pytest

from timbre_match import errors
from timbre_match.errors import TimbreMatchError

TREE = [getattr(errors, name) for name in errors.__all__]


def test_all_errors_are_public_and_of_one_tree() -> None:
    defined = {name for name, value in vars(errors).items() if inspect.isclass(value)}
    assert defined == set(errors.__all__)
    assert all(issubclass(kind, TimbreMatchError) for kind in TREE)
    assert not issubclass(TimbreMatchError, OSError | ValueError)


def test_message_says_what_where_why_and_what_to_do() -> None:
    error = TimbreMatchError("the file is empty", where="take1.wav", cause="a full card", remedy="copy it again")
    assert str(error).split("\n") == [
        "take1.wav: the file is empty",
        "  likely cause: a full card",
        "  what to do: copy it again",
    ]


def test_message_leaves_out_what_is_not_known() -> None:
    assert str(TimbreMatchError("nothing")) == "nothing"
    assert str(TimbreMatchError("nothing", remedy="try again")) == "nothing\n  what to do: try again"


@pytest.mark.parametrize("kind", TREE)
def test_errors_cross_to_another_process(kind: type[TimbreMatchError]) -> None:
    # Several recordings are measured in several processes; an error that cannot be pickled would hang or lose its text.
    error = kind("what", where="where", cause="cause", remedy="remedy")
    back = pickle.loads(pickle.dumps(error))
    assert type(back) is kind
    assert str(back) == str(error)
