"""The command line as tests call it: in this process for speed, or as a process of its own."""

import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest

from timbre_match.cli import main

ROOT = Path(__file__).resolve().parents[1]


@dataclass(frozen=True, kw_only=True, slots=True)
class Ended:
    """How a command ended."""

    code: int
    out: str
    err: str

    def assert_plain_error(self, *parts: str) -> None:
        """Exit status 1, nothing on standard output, and a message with these parts and no traceback."""
        assert self.code == 1, self
        assert self.out == "", self
        assert self.err.startswith("timbre-match: "), self
        assert "Traceback" not in self.err, self
        for part in parts:
            assert part in self.err, self


class CommandLine:
    """Runs commands in this process through the same door as the installed program."""

    def __init__(self, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
        self._capsys = capsys
        self._monkeypatch = monkeypatch

    def __call__(self, *arguments: str | Path) -> Ended:
        self._capsys.readouterr()
        self._monkeypatch.setenv("COLUMNS", "200")
        self._monkeypatch.setattr(sys, "argv", ["timbre-match", *map(str, arguments)])
        with pytest.raises(SystemExit) as ended:
            main()
        printed = self._capsys.readouterr()
        return Ended(code=int(ended.value.code or 0), out=printed.out, err=printed.err)


def run_process(*arguments: str | Path, timeout_s: float = 120.0, encoding: str = "utf-8") -> Ended:
    """Run a command in a process of its own, which speaks and is heard in `encoding`."""
    done = subprocess.run(
        [sys.executable, "-c", "from timbre_match.cli import main; main()", *map(str, arguments)],
        capture_output=True,
        text=True,
        encoding=encoding,
        check=False,
        timeout=timeout_s,
        cwd=ROOT,
        env={**os.environ, "PYTHONIOENCODING": encoding, "OMP_NUM_THREADS": "1"},
    )
    return Ended(code=done.returncode, out=done.stdout, err=done.stderr)
