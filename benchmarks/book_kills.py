"""Whether the bench book survives being killed (SIGKILL) at random moments: whole, with all that had returned.

    python -m benchmarks.book_kills --moments 200

The moments are shared out evenly among logging (with copies of the recordings), measuring and logging, backing up,
restoring, and bringing an older layout up to date. After each kill the book is opened and looked through: integrity,
every session whose writing had returned, no half session, no unfinished file.
"""

import argparse
import random
import tempfile
from pathlib import Path

from tests.keep.killing import JOBS, assert_survived, kill_at_random, prepare

LONGEST_S = {"logging": 1.0, "measuring": 2.0, "backing up": 0.6, "restoring": 0.6, "migrating": 0.6}


def main() -> None:
    """Parse the command line and run."""
    parser = argparse.ArgumentParser(description="The bench book, killed at random moments.")
    parser.add_argument("--moments", type=int, default=200, help="how many kills, shared out among the jobs")
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    chance = random.Random(options.seed)
    print(f"{'while':14}{'kills':>7}{'returned before':>17}{'survived':>10}")
    for job, longest_s in LONGEST_S.items():
        kills = options.moments // len(JOBS)
        returned = 0
        with tempfile.TemporaryDirectory() as folder:
            prepare(job, Path(folder))
            for _ in range(kills):
                killed = kill_at_random(job, Path(folder), chance, longest_s=longest_s)
                assert_survived(job, Path(folder), killed)
                returned += len(killed.said)
        print(f"{job:14}{kills:>7}{returned:>17}{kills:>10}", flush=True)


if __name__ == "__main__":
    main()
