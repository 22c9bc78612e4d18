"""The whole story on one page: recordings to held notes, to recipes, to a profile, to a comparison, to advice."""

import dataclasses
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from timbre_match import units
from timbre_match.advise.suggestions import Suggestion, suggest
from timbre_match.compare.comparison import DEFAULT_MARGIN_DB, compare
from timbre_match.compare.records import Comparison
from timbre_match.compare.target import Target
from timbre_match.errors import RecordingError, TimbreMatchError
from timbre_match.intake.notes import HeldNote, held_notes
from timbre_match.intake.recording import Recording, read_recording
from timbre_match.measure.profile import Profile, Source, Take
from timbre_match.measure.recipe import Recipe, measure_recipe

if TYPE_CHECKING:
    from rich.console import RenderableType

Progress = Callable[[Iterable["Heard"], int], Iterable["Heard"]]
"""Wraps results as they come, with their number: a progress bar, for example."""

RECORDING_SUFFIXES = frozenset(
    {
        ".wav",
        ".wave",
        ".flac",
        ".aif",
        ".aiff",
        ".aifc",
        ".ogg",
        ".oga",
        ".opus",
        ".mp3",
        ".w64",
        ".rf64",
        ".caf",
        ".au",
    }
)
"""What counts as a recording inside a folder; a file that is named by itself is judged by its content."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Listening:
    """How recordings are to be read: the same for all takes of a profile.

    `notes` are the notes that were played, if the maker says so; `channel` counts from 1, None takes the strongest.
    """

    notes: tuple[str, ...] | None = None
    a4_hz: float = units.STANDARD_A4_HZ
    channel: int | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Heard:
    """What one recording gave: its held notes and recipes, or the error that says why there are none."""

    path: Path
    recording: Recording | None = None
    notes: tuple[HeldNote, ...] = ()
    recipes: tuple[Recipe, ...] = ()
    error: TimbreMatchError | None = None


@dataclass(frozen=True, kw_only=True, slots=True)
class Measured:
    """A profile of what could be measured, and what could not."""

    profile: Profile
    warnings: tuple[str, ...]
    failures: tuple[TimbreMatchError, ...]


def listen(path: Path, listening: Listening, *, measure: bool = True) -> Heard:
    """Read one recording, find its held notes and, if wanted, measure their recipes."""
    recording = None
    try:
        recording = read_recording(path, channel=listening.channel)
        notes = held_notes(recording, notes=listening.notes, a4_hz=listening.a4_hz)
        recipes = [measure_recipe(recording, note, a4_hz=listening.a4_hz) for note in notes] if measure else []
    except TimbreMatchError as error:
        # The rooms behind the reading know the file's name without its folder, which several takes may share.
        error.where = str(path)
        return Heard(path=path, recording=_without_samples(recording), error=error)
    return Heard(path=path, recording=_without_samples(recording), notes=notes, recipes=tuple(recipes))


def listen_to_all(
    paths: Sequence[Path],
    listening: Listening,
    *,
    measure: bool = True,
    jobs: int = 1,
    progress: Progress | None = None,
) -> list[Heard]:
    """Listen to recordings in parallel; what each gave, in the order of `paths`."""
    results: Iterable[Heard]
    if jobs == 1 or len(paths) == 1:
        results = (listen(path, listening, measure=measure) for path in paths)
    else:
        import joblib

        parallel = joblib.Parallel(n_jobs=jobs, return_as="generator")
        results = parallel(joblib.delayed(listen)(path, listening, measure=measure) for path in paths)
    return list(progress(results, len(paths)) if progress else results)


def recordings_of_take(place: Path) -> list[Path]:
    """The recordings that make one take: the file itself, or all recordings in a folder, sorted by name.

    Raises
    ------
    RecordingError
        If the folder holds no recording.
    """
    if not place.is_dir():
        return [place]
    found = sorted(
        entry
        for entry in place.iterdir()
        if entry.suffix.lower() in RECORDING_SUFFIXES and not entry.name.startswith(".")
    )
    if not found:
        raise RecordingError(
            "no recording in this folder",
            where=str(place),
            cause="another folder was meant, or the recordings lie one folder deeper",
            remedy="name the folder whose recordings together are one take (WAV, FLAC, AIFF, OGG, MP3)",
        )
    return found


def measure_takes(
    takes: Sequence[Path],
    listening: Listening,
    *,
    instrument: str = "",
    stage: str = "",
    family: str = "",
    jobs: int = 1,
    progress: Progress | None = None,
) -> Measured:
    """Measure takes, each a recording or a folder whose recordings together are one take.

    What can be used is measured; what cannot is listed.

    Raises
    ------
    TimbreMatchError
        If no recording of any take can be used: the one failure, or all of them in one message.
    """
    failures: list[TimbreMatchError] = []
    parts: list[list[Path]] = []
    for place in takes:
        try:
            parts.append(recordings_of_take(place))
        except TimbreMatchError as error:
            failures.append(error)
    results = listen_to_all([path for part in parts for path in part], listening, jobs=jobs, progress=progress)
    failures += [heard.error for heard in results if heard.error is not None]
    measured, first = [], 0
    for part in parts:
        usable = [heard for heard in results[first : first + len(part)] if heard.error is None]
        first += len(part)
        if usable:
            measured.append(
                Take(
                    recordings=tuple(
                        Source(file=heard.recording.file, sha256=heard.recording.sha256)
                        for heard in usable
                        if heard.recording is not None
                    ),
                    notes=tuple(recipe for heard in usable for recipe in heard.recipes),
                )
            )
    if not measured:
        if len(failures) == 1:
            raise failures[0]
        raise RecordingError("none of the recordings can be used:\n" + "\n".join(str(error) for error in failures))
    profile = Profile(instrument=instrument, stage=stage, family=family, a4_hz=listening.a4_hz, takes=tuple(measured))
    return Measured(profile=profile, warnings=_gathered_warnings(results), failures=tuple(failures))


def measure_profile(
    takes: Sequence[str | Path],
    *,
    instrument: str = "",
    stage: str = "",
    family: str = "",
    notes: Sequence[str] | None = None,
    a4_hz: float = units.STANDARD_A4_HZ,
    channel: int | None = None,
    jobs: int = 1,
) -> Profile:
    """Measure an instrument at one stage from its takes.

    Parameters
    ----------
    takes : sequence of str or Path
        Each a recording, or a folder whose recordings together are one take.
    instrument, stage, family : str
        As the maker names them; may be empty.
    notes : sequence of str, optional
        The notes that were played, which settles doubt about octaves.
    a4_hz : float
        Tuning reference, Hz.
    channel : int, optional
        Counted from 1; by default the strongest of each recording.
    jobs : int
        Processes that measure recordings side by side; -1 for one per core.

    Returns
    -------
    Profile

    Raises
    ------
    TimbreMatchError
        If any recording cannot be used.
    """
    listening = Listening(notes=tuple(notes) if notes else None, a4_hz=a4_hz, channel=channel)
    measured = measure_takes(
        [Path(take) for take in takes], listening, instrument=instrument, stage=stage, family=family, jobs=jobs
    )
    if measured.failures:
        raise measured.failures[0]
    return measured.profile


def compare_and_advise(
    profile: Profile,
    target: Profile | Target,
    *,
    margin_db: float = DEFAULT_MARGIN_DB,
    control_now: Profile | None = None,
    control_then: Profile | None = None,
) -> tuple[Comparison, tuple[Suggestion, ...]]:
    """Compare a profile with a target, and what to try about the difference."""
    comparison = compare(profile, target, margin_db=margin_db, control_now=control_now, control_then=control_then)
    return comparison, suggest(comparison)


def _gathered_warnings(results: Iterable[Heard]) -> tuple[str, ...]:
    """What was wrong with the recordings: each sentence once, led by the files that it is about."""
    files: dict[str, list[str]] = {}
    for heard in results:
        for sentence in heard.recording.warnings if heard.recording is not None else ():
            files.setdefault(sentence, []).append(heard.path.name)
    return tuple(f"{_listed(names)}: {sentence}" for sentence, names in files.items())


def _listed(names: list[str]) -> str:
    return ", ".join(names[:3]) + (f" and {len(names) - 3} more" if len(names) > 3 else "")


def _without_samples(recording: Recording | None) -> Recording | None:
    """The recording's facts alone: samples of many recordings would fill the memory, and need not cross processes."""
    if recording is None:
        return None
    return dataclasses.replace(recording, samples=recording.samples[:0])


def write_figures(folder: Path, profile: Profile, target: Target, comparison: Comparison) -> tuple[Path, ...]:
    """Draw the recipes, the differences and the body curve, each as PNG and SVG, into a folder (made if missing).

    Raises
    ------
    OutputError
        If the folder cannot be made or a file cannot be written.
    """
    from timbre_match.keep.writing import make_folder, write_whole
    from timbre_match.show.figures import body_curve_figure, differences_figure, recipe_figure, render

    make_folder(folder)
    drawn = {
        "recipes": recipe_figure(profile, target, comparison),
        "differences": differences_figure(comparison),
        "body_curve": body_curve_figure(comparison),
    }
    kinds: tuple[Literal["png", "svg"], ...] = ("png", "svg")
    written = []
    for name, figure in drawn.items():
        for kind in kinds:
            written.append(folder / f"{name}.{kind}")
            write_whole(written[-1], render(figure, kind))
    return tuple(written)


def run_demo(folder: Path, *, progress: Progress | None = None) -> Iterator["RenderableType"]:
    """Do the main job on the invented workshop's recordings; yields what to show as it goes.

    Each stage of the new instrument gets a folder of its own with its profile, the comparison with the target, the
    tables as text and CSV, and the figures.

    Raises
    ------
    TimbreMatchError
        If the recordings cannot be found, or a result cannot be written.
    """
    from timbre_match.demo.tones import takes, target_file
    from timbre_match.demo.workshop import FAMILY
    from timbre_match.keep.export import export_csv
    from timbre_match.keep.files import load_target, save_comparison, save_profile
    from timbre_match.keep.writing import make_folder, write_whole
    from timbre_match.show.tables import as_text, comparison_summary, suggestions_list

    wanted = load_target(target_file())
    for stage, recordings in takes().items():
        if stage.instrument == wanted.members[0].instrument:
            continue
        place = folder / stage.file_stem
        make_folder(place)
        measured = measure_takes(
            recordings,
            Listening(),
            instrument=stage.instrument,
            stage=stage.name,
            family=FAMILY,
            progress=progress,
        )
        if measured.failures:
            raise measured.failures[0]
        profile = measured.profile
        comparison, suggestions = compare_and_advise(profile, wanted)
        save_profile(profile, place / "profile.json")
        export_csv(profile, place / "profile.csv")
        save_comparison(comparison, suggestions, place / "comparison.json")
        shown = [comparison_summary(comparison), suggestions_list(suggestions)]
        write_whole(place / "comparison.txt", as_text(shown).encode())
        write_figures(place, profile, wanted, comparison)
        yield from shown
