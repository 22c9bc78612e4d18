"""What tests of several rooms share."""

import pytest
from hypothesis import settings

from tests.command_line import CommandLine

# A busy machine is no reason to fail, and the same examples come every time.
settings.register_profile("steady", deadline=None, derandomize=True, max_examples=60)
settings.load_profile("steady")


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> CommandLine:
    """The command line in this process."""
    return CommandLine(capsys, monkeypatch)
