"""Where the demo's recordings are: beside the package in a source checkout, inside it once installed."""

from pathlib import Path

from timbre_match.demo.plucked_workshop import PLUCKED_STAGES, PLUCKED_TAKES, PluckedStage, plucked_file_name
from timbre_match.demo.workshop import STAGES, TAKES, Stage, file_name
from timbre_match.errors import TimbreMatchError

TARGET_FILE = "heron_target.json"

_FOLDER = "reference_tones"
_PLACES = (Path(__file__).parent / _FOLDER, Path(__file__).parents[2] / _FOLDER)


def tones_folder() -> Path:
    """Find the folder that holds the demo's recordings.

    Raises
    ------
    TimbreMatchError
        If neither place has all of them.
    """
    names = [file_name(stage, take) for stage in STAGES for take in range(1, TAKES + 1)]
    names += [plucked_file_name(stage, take) for stage in PLUCKED_STAGES for take in range(1, PLUCKED_TAKES + 1)]
    for place in _PLACES:
        if all((place / name).is_file() for name in names):
            return place
    raise TimbreMatchError(
        "the demo's recordings are not all there",
        where=" or ".join(str(place) for place in _PLACES),
        cause="the package was copied without its data, or a file was moved or renamed",
        remedy=(
            "install timbre-match again, or make the recordings anew with "
            f"python -m timbre_match.demo.render --out {_FOLDER}"
        ),
    )


def target_file() -> Path:
    """Find the saved target that comes with the recordings: the Heron, measured from its three takes.

    Raises
    ------
    TimbreMatchError
        If the recordings cannot be found.
    """
    return tones_folder() / TARGET_FILE


def takes() -> dict[Stage, tuple[Path, ...]]:
    """Files of each stage's takes of the violins, in order; the target first, then the stages of the new instrument.

    Raises
    ------
    TimbreMatchError
        If the recordings cannot be found.
    """
    folder = tones_folder()
    return {stage: tuple(folder / file_name(stage, take) for take in range(1, TAKES + 1)) for stage in STAGES}


def plucked_takes() -> dict[PluckedStage, tuple[Path, ...]]:
    """Files of each stage's takes of the plucked instrument, in the order of the stages.

    Raises
    ------
    TimbreMatchError
        If the recordings cannot be found.
    """
    folder = tones_folder()
    return {
        stage: tuple(folder / plucked_file_name(stage, take) for take in range(1, PLUCKED_TAKES + 1))
        for stage in PLUCKED_STAGES
    }
