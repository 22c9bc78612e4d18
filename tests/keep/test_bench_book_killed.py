"""Killed in the middle of anything, the book holds all that had returned, and nothing half.

One moment of each job here; `python -m benchmarks.book_kills` takes 200.
"""

import os
import random
from pathlib import Path

import pytest

from tests.keep.killing import JOBS, assert_survived, kill_at_random, prepare


@pytest.mark.skipif(os.name == "nt", reason="SIGKILL is not known there")
@pytest.mark.parametrize("job", JOBS)
def test_killed_at_random_moments(job: str, tmp_path: Path) -> None:
    chance = random.Random(f"moments of {job}")
    prepare(job, tmp_path)
    killed = kill_at_random(job, tmp_path, chance, longest_s=0.6)
    assert_survived(job, tmp_path, killed)
