"""Functions that keep the linear algebra to one thread."""

import numpy as np
import pytest
import scipy.linalg
from threadpoolctl import threadpool_info, threadpool_limits

from timbre_match.threads import single_threaded


def threads_in_use() -> list[int]:
    return [int(library["num_threads"]) for library in threadpool_info() if library["user_api"] == "blas"]


def test_one_thread_inside_and_as_many_as_before_afterwards() -> None:
    scipy.linalg.solve(np.eye(3), np.ones(3))
    with threadpool_limits(2, user_api="blas"):
        before = threads_in_use()
        assert set(single_threaded(threads_in_use)()) == {1}
        assert threads_in_use() == before


def test_an_error_passes_and_the_threads_come_back() -> None:
    @single_threaded
    def breaks() -> None:
        raise ValueError("broken")

    with threadpool_limits(2, user_api="blas"):
        before = threads_in_use()
        with pytest.raises(ValueError, match="broken"):
            breaks()
        assert threads_in_use() == before
