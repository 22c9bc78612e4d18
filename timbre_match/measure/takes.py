"""Takes to a profile: what each recording gives, and what the maker should know about the takes as a whole."""

import dataclasses
import warnings
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from timbre_match import units
from timbre_match.errors import NoHeldNoteError, RecordingError, TimbreMatchError
from timbre_match.intake.families import kind_of_family
from timbre_match.intake.notes import HeldNote, NoteKind, held_notes
from timbre_match.intake.recording import Recording, read_recording
from timbre_match.measure.interrupts import deaf_children, interrupts_held_back
from timbre_match.measure.profile import Profile, Session, Source, Take
from timbre_match.measure.recipe import Recipe, measure_recipe

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

_NOTHING_BETWEEN = 1e-3
"""Share of a note's power (-30 dB, as in :mod:`timbre_match.intake.octave`) under which overtones count as missing."""


@dataclass(frozen=True, kw_only=True, slots=True)
class Listening:
    """How recordings are to be read: the same for all takes of a profile.

    `notes` are the notes that were played, if the maker says so; `channel` counts from 1, None takes the strongest;
    `kind` says what all notes are, where the family of the instrument tells.
    """

    notes: tuple[str, ...] | None = None
    a4_hz: float = units.STANDARD_A4_HZ
    channel: int | None = None
    kind: NoteKind | None = None


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
        with interrupts_held_back():
            recording = read_recording(path, channel=listening.channel)
        notes = held_notes(recording, notes=listening.notes, a4_hz=listening.a4_hz, kind=listening.kind)
        recipes = _recipes(recording, notes, listening.a4_hz) if measure else []
    except TimbreMatchError as error:
        # The rooms behind the reading know the file's name without its folder, which several takes may share.
        error.where = str(path)
        return Heard(path=path, recording=_without_samples(recording), error=error)
    return Heard(path=path, recording=_without_samples(recording), notes=notes, recipes=tuple(recipes))


def _recipes(recording: Recording, notes: Sequence[HeldNote], a4_hz: float) -> list[Recipe]:
    """Recipes of the notes that stand out of the noise.

    Raises
    ------
    NoHeldNoteError
        If none does.
    """
    recipes, failure = [], None
    for note in notes:
        try:
            recipe = measure_recipe(recording, note, a4_hz=a4_hz)
        except NoHeldNoteError as error:
            failure = error
            continue
        # A fundamental that its own harmonics do not confirm was rumble or noise.
        if abs(units.cents_between(recipe.f0_hz, note.f0_hz)) < 50.0:
            recipes.append(recipe)
    if not recipes:
        raise failure or NoHeldNoteError("nothing in it is steady enough to measure", where=recording.file)
    return recipes


def listen_to_all(
    paths: Sequence[Path],
    listening: Listening,
    *,
    measure: bool = True,
    jobs: int = 1,
    progress: Progress | None = None,
) -> list[Heard]:
    """Listen to recordings in parallel; what each gave, in the order of `paths`."""
    if jobs == 1 or len(paths) == 1:
        in_turn = (listen(path, listening, measure=measure) for path in paths)
        return list(progress(in_turn, len(paths)) if progress else in_turn)
    import joblib

    parallel = joblib.Parallel(n_jobs=jobs, return_as="generator")
    with deaf_children():
        results = parallel(joblib.delayed(listen)(path, listening, measure=measure) for path in paths)
    try:
        return list(progress(results, len(paths)) if progress else results)
    finally:
        with warnings.catch_warnings():
            # After an interrupt this ends the processes, and joblib would warn that their work was in vain.
            warnings.simplefilter("ignore")
            results.close()


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
            remedy="name the folder that holds the recordings themselves (WAV, FLAC, AIFF, OGG, MP3)",
        )
    return found


def measure_takes(
    takes: Sequence[Path | Sequence[Path]],
    listening: Listening,
    *,
    instrument: str = "",
    stage: str = "",
    family: str = "",
    session: Session | None = None,
    jobs: int = 1,
    progress: Progress | None = None,
) -> Measured:
    """Measure takes, each a recording, a folder whose recordings together are one take, or a list of such recordings.

    What can be used is measured; what cannot is listed. The family decides whether its notes are held or ring, where
    its name tells.

    Raises
    ------
    TimbreMatchError
        If no recording of any take can be used: the one failure, or all of them in one message.
    """
    if listening.kind is None:
        listening = dataclasses.replace(listening, kind=kind_of_family(family))
    failures: list[TimbreMatchError] = []
    parts: list[list[Path]] = []
    for place in takes:
        try:
            parts.append(recordings_of_take(place) if isinstance(place, Path) else list(place))
        except TimbreMatchError as error:
            failures.append(error)
    results = listen_to_all([path for part in parts for path in part], listening, jobs=jobs, progress=progress)
    results = _without_doubles(results)
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
    profile = Profile(
        instrument=instrument,
        stage=stage,
        family=family,
        a4_hz=listening.a4_hz,
        takes=tuple(measured),
        session=session or Session(),
    )
    warnings = _gathered_warnings(results) + _warnings_about_takes(results, profile, listening)
    return Measured(profile=profile, warnings=warnings, failures=tuple(failures))


def _without_doubles(results: list[Heard]) -> list[Heard]:
    """The results, those of a recording that was there before turned into errors: the same sound is no second take."""
    first: dict[str, Path] = {}
    kept = []
    for heard in results:
        if heard.recording is not None and heard.error is None:
            before = first.setdefault(heard.recording.sha256, heard.path)
            if before is not heard.path:
                error = RecordingError(
                    f"this is the same recording as {before}",
                    where=str(heard.path),
                    cause="a file was named twice, or copied",
                    remedy="play the notes again for another take: a copy says nothing about how takes differ",
                )
                heard = dataclasses.replace(heard, error=error)
        kept.append(heard)
    return kept


def _warnings_about_takes(results: list[Heard], profile: Profile, listening: Listening) -> tuple[str, ...]:
    """What the maker should know about the takes as a whole."""
    found = []
    usable = [heard.recording for heard in results if heard.recording is not None and heard.error is None]
    channels = {recording.channel for recording in usable if recording.channel_count > 1}
    if channels and listening.channel is None:
        taken = " and ".join(str(channel) for channel in sorted(channels))
        found.append(f"Of several channels the strongest was taken: channel {taken}.")
        if len(channels) > 1:
            found.append("The recordings differ in that; if these are two microphones, choose one with --channel.")
    names = [{recipe.note for recipe in take.notes} for take in profile.takes]
    if len(names) > 1 and not set.intersection(*names):
        found.append(
            "No note is in all takes. One take is one run through all notes: if each file holds one note, put the "
            "files of a run into a folder and name the folder."
        )
    if listening.notes is not None:
        missing = [note for note in listening.notes if not any(note in take for take in names)]
        if missing:
            found.append(f"Not found: {', '.join(missing)}.")
        found += _doubts_about_names(profile)
    return tuple(found)


def _doubts_about_names(profile: Profile) -> list[str]:
    """Notes that were read as the maker named them though only every second or third overtone of them sounds."""
    found: dict[str, None] = {}
    for recipe in (recipe for take in profile.takes for recipe in take.notes):
        power = np.where(recipe.heard, 10.0 ** (np.nan_to_num(recipe.level_db) / 10.0), 0.0)
        for step, which in ((2, "second"), (3, "third")):
            if np.sum(power[recipe.k % step != 0]) < _NOTHING_BETWEEN * np.sum(power):
                sounding = units.nearest_note(step * recipe.f0_hz, profile.a4_hz)[0]
                found[
                    f"{recipe.note} was read as it was named, but only every {which} overtone of it sounds, which is "
                    f"{sounding}: look whether the list of notes is right."
                ] = None
                break
    return list(found)


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
