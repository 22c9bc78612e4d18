"""timbre_match: what an instrument's notes are made of, and how they differ from a target.

The whole job in Python::

    import timbre_match as tm

    new = tm.measure_profile(["take1.wav", "take2.wav"], instrument="Wren", family="violin")
    wanted = tm.measure_profile(["target1.wav", "target2.wav"], instrument="Heron", family="violin")
    comparison = tm.compare(new, wanted)
"""

import importlib
from typing import TYPE_CHECKING

from timbre_match.compare import compare

if TYPE_CHECKING:
    from timbre_match.compare.records import Comparison
    from timbre_match.compare.target import Target, blend
    from timbre_match.errors import TimbreMatchError
    from timbre_match.intake.cycles import Cycles, cut_cycles
    from timbre_match.intake.notes import HeldNote, held_notes
    from timbre_match.intake.recording import Recording, read_recording
    from timbre_match.keep.bench_book import BenchBook
    from timbre_match.keep.book_records import Conditions
    from timbre_match.keep.files import (
        load_comparison,
        load_profile,
        load_target,
        save_comparison,
        save_profile,
        save_target,
    )
    from timbre_match.measure import dtfs
    from timbre_match.measure.profile import Profile, Session, Take
    from timbre_match.measure.recipe import measure_recipe
    from timbre_match.measure.records import Recipe, Ringing
    from timbre_match.pipeline import compare_and_advise, measure_profile

_HOME = {
    "BenchBook": "keep.bench_book",
    "Comparison": "compare.records",
    "Conditions": "keep.book_records",
    "Cycles": "intake.cycles",
    "HeldNote": "intake.notes",
    "Profile": "measure.profile",
    "Recipe": "measure.records",
    "Recording": "intake.recording",
    "Ringing": "measure.records",
    "Session": "measure.profile",
    "Take": "measure.profile",
    "Target": "compare.target",
    "TimbreMatchError": "errors",
    "blend": "compare.target",
    "compare_and_advise": "pipeline",
    "cut_cycles": "intake.cycles",
    "dtfs": "measure",
    "held_notes": "intake.notes",
    "load_comparison": "keep.files",
    "load_profile": "keep.files",
    "load_target": "keep.files",
    "measure_profile": "pipeline",
    "measure_recipe": "measure.recipe",
    "read_recording": "intake.recording",
    "save_comparison": "keep.files",
    "save_profile": "keep.files",
    "save_target": "keep.files",
}

__all__ = [
    "BenchBook",
    "Comparison",
    "Conditions",
    "Cycles",
    "HeldNote",
    "Profile",
    "Recipe",
    "Recording",
    "Ringing",
    "Session",
    "Take",
    "Target",
    "TimbreMatchError",
    "blend",
    "compare",
    "compare_and_advise",
    "cut_cycles",
    "dtfs",
    "held_notes",
    "load_comparison",
    "load_profile",
    "load_target",
    "measure_profile",
    "measure_recipe",
    "read_recording",
    "save_comparison",
    "save_profile",
    "save_target",
]


def __getattr__(name: str) -> object:
    # Rooms are opened when something in them is asked for, so that the command line starts at once.
    if name not in _HOME:
        raise AttributeError(f"module 'timbre_match' has no attribute {name!r}")
    room = importlib.import_module(f"timbre_match.{_HOME[name]}")
    if name == "dtfs":
        return importlib.import_module("timbre_match.measure.dtfs")
    return getattr(room, name)
