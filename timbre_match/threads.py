"""One thread for the linear algebra of work whose matrices are small.

Threads inside the linear algebra library cost such work several times what they give, wait for each other on a busy
machine, and quarrel over the cores with parallel processes.
"""

import functools
from collections.abc import Callable
from typing import ParamSpec, TypeVar

from threadpoolctl import ThreadpoolController

_Arguments = ParamSpec("_Arguments")
_Result = TypeVar("_Result")


def single_threaded(work: Callable[_Arguments, _Result]) -> Callable[_Arguments, _Result]:
    """Let a function, and all that it calls, use one thread of the linear algebra library; as before afterwards."""

    @functools.wraps(work)
    def alone(*args: _Arguments.args, **kwargs: _Arguments.kwargs) -> _Result:
        with _libraries().limit(limits=1, user_api="blas"):
            return work(*args, **kwargs)

    return alone


@functools.cache
def _libraries() -> ThreadpoolController:
    # Found once numpy and scipy are loaded, which they are when the first such function is called.
    return ThreadpoolController()
