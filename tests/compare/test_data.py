"""The packaged tables of the scatter against the shared ones that they were taken from."""

from importlib import resources
from pathlib import Path

import pytest

SHARED = Path(__file__).resolve().parents[3] / "shared" / "data"


@pytest.mark.skipif(not SHARED.is_dir(), reason="the shared data are not beside this checkout")
@pytest.mark.parametrize("name", ["repeatability.csv", "take_structure.csv"])
def test_packaged_table_is_the_shared_one(name: str) -> None:
    packaged = resources.files("timbre_match.compare").joinpath("data", name).read_bytes()
    assert packaged == (SHARED / name).read_bytes()
