"""The whole story on one page: recordings to held notes, to recipes, to a profile, to a comparison, to advice."""

import dataclasses
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from timbre_match import units
from timbre_match.advise.suggestions import Suggestion, suggest
from timbre_match.compare.comparison import DEFAULT_MARGIN_DB, compare
from timbre_match.compare.records import Comparison
from timbre_match.compare.target import Target, as_target
from timbre_match.measure.profile import Profile, Session
from timbre_match.measure.takes import Listening, Progress, measure_takes

if TYPE_CHECKING:
    from rich.console import RenderableType


def measure_profile(
    takes: Sequence[str | Path],
    *,
    instrument: str = "",
    stage: str = "",
    family: str = "",
    session: Session | None = None,
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
    session : Session, optional
        When, where and with what the takes were recorded.
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
        [Path(take) for take in takes],
        listening,
        instrument=instrument,
        stage=stage,
        family=family,
        session=session,
        jobs=jobs,
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
    families = {member.family for member in as_target(target).members} - {""}
    if profile.family and families and profile.family not in families:
        remark = (
            f"The instrument is a {profile.family}, the target {' and '.join(sorted(families))}: no suggestions, since "
            "nothing done to the one makes it the other."
        )
        return dataclasses.replace(comparison, remarks=(remark, *comparison.remarks)), ()
    return comparison, suggest(comparison)


def write_figures(folder: Path, profile: Profile, target: Target, comparison: Comparison) -> tuple[Path, ...]:
    """Draw recipes, differences and body curve, each as PNG and SVG, into a folder (made if missing).

    Of ringing notes the decay times too.

    Raises
    ------
    OutputError
        If the folder cannot be made or a file cannot be written.
    """
    from timbre_match.keep.writing import make_folder, write_whole
    from timbre_match.show.figures import body_curve_figure, differences_figure, recipe_figure, render, sustain_figure

    make_folder(folder)
    drawn = {
        "recipes": recipe_figure(profile, target, comparison),
        "differences": differences_figure(comparison),
        "body_curve": body_curve_figure(comparison),
    }
    if comparison.sustain is not None:
        drawn["sustain"] = sustain_figure(profile, target, comparison)
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
