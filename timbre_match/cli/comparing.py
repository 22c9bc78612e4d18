"""From profiles: `target`, `compare`, `export`; and the `demo`, which does it all."""

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

from timbre_match.cli.speaking import AsJson, progress, show, working


class ExportFormat(StrEnum):
    """What `export` can write."""

    CSV = "csv"
    JSON = "json"
    CYCLES = "cycles"


def target(
    profiles: Annotated[list[Path], typer.Argument(metavar="PROFILE", help="Profiles to blend.")],
    name: Annotated[str, typer.Option("--name", help="The target's name.")],
    out: Annotated[Path, typer.Option("--out", help="The target to write (JSON).")],
) -> None:
    """Blend profiles into a target, with a tolerance from how far they differ among themselves."""
    from timbre_match.compare.comparison import tolerance_db
    from timbre_match.compare.target import blend
    from timbre_match.keep.files import check_output, load_profile, save_target

    check_output(out, profiles, kind="target")
    blended = blend(name, tuple(load_profile(path) for path in profiles))
    tolerance = tolerance_db(blended)
    save_target(blended, out)
    if tolerance is None:
        show("One profile alone says nothing about how far its like may differ.")
    else:
        show(f"The {len(profiles)} profiles differ among themselves by {tolerance:.1f} dB in tone colour.")
    show(f"Written to {out}.")


def compare(
    profile: Annotated[Path, typer.Argument(metavar="PROFILE", help="The instrument's profile.")],
    target: Annotated[Path, typer.Option("--target", help="A target, or a plain profile.")],
    margin: Annotated[float, typer.Option("--margin", min=0.1, max=30.0, help="What counts as alike, dB.")] = 3.0,
    control_now: Annotated[
        Path | None,
        typer.Option("--control-now", help="Profile of an unchanged instrument, recorded with the instrument."),
    ] = None,
    control_then: Annotated[
        Path | None, typer.Option("--control-then", help="Profile of the same, recorded with the target.")
    ] = None,
    as_json: AsJson = False,
    out: Annotated[Path | None, typer.Option("--out", help="The comparison to write (JSON).")] = None,
    figures: Annotated[
        Path | None, typer.Option("--figures", help="Folder for the figures (PNG and SVG); made if missing.")
    ] = None,
) -> None:
    """Compare an instrument with a target: verdicts, body curve, regions, and what to try."""
    from timbre_match.keep.files import (
        check_output,
        comparison_to_json,
        load_profile,
        load_target,
        save_comparison,
    )
    from timbre_match.keep.writing import check_folder_place
    from timbre_match.pipeline import compare_and_advise

    if (control_now is None) != (control_then is None):
        raise typer.BadParameter(
            "a control is compared with itself: name both of its profiles", param_hint="--control-now, --control-then"
        )
    if out is not None:
        controls = [path for path in (control_now, control_then) if path is not None]
        check_output(out, [profile, target, *controls], kind="comparison")
    if figures is not None:
        check_folder_place(figures)
    measured, wanted = load_profile(profile), load_target(target)
    now, then = (None if path is None else load_profile(path) for path in (control_now, control_then))
    with working("comparing"):
        comparison, suggestions = compare_and_advise(
            measured, wanted, margin_db=margin, control_now=now, control_then=then
        )
        if out is not None:
            save_comparison(comparison, suggestions, out)
        if figures is not None:
            from timbre_match.pipeline import write_figures

            write_figures(figures, measured, wanted, comparison)
    if as_json:
        typer.echo(comparison_to_json(comparison, suggestions))
        return
    from timbre_match.show.tables import comparison_summary, suggestions_list

    show(comparison_summary(comparison))
    sustained = comparison.sustain is not None and bool(comparison.sustain.regions)
    if suggestions or not (comparison.regions or sustained):
        show(suggestions_list(suggestions))
    for written in (out, figures):
        if written is not None:
            show(f"Written to {written}.")


def export(
    profile: Annotated[Path, typer.Argument(metavar="PROFILE", help="The profile to export.")],
    kind: Annotated[
        ExportFormat,
        typer.Option("--format", help="csv: a table; json: the profile itself; cycles: one period per note as WAV."),
    ],
    out: Annotated[Path, typer.Option("--out", help="The file, or for cycles the folder, to write.")],
) -> None:
    """Write a profile for other programs."""
    from timbre_match.keep import export as exporting
    from timbre_match.keep.files import check_output, load_profile

    check_output(out, [profile], kind="profile" if kind is ExportFormat.JSON else None)
    write = {
        ExportFormat.CSV: exporting.export_csv,
        ExportFormat.JSON: exporting.export_json,
        ExportFormat.CYCLES: exporting.export_cycles,
    }[kind]
    write(load_profile(profile), out)
    show(f"Written to {out}.")


def demo(
    out: Annotated[Path, typer.Option("--out", help="Folder for tables, figures and JSON.")] = Path("reports/demo"),
) -> None:
    """Measure and compare the instruments of the invented workshop, from the recordings that come along."""
    from timbre_match.pipeline import run_demo

    for shown in run_demo(out, progress=progress):
        show(shown)
    show(f"Written to {out}.")
