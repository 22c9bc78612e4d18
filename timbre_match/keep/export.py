"""Profiles for other programs: a table (CSV), the profile file (JSON), and one period per note as sound (WAV)."""

import csv
import io
import re
from collections import defaultdict
from pathlib import Path

import numpy as np
import soundfile
from numpy.typing import NDArray

from timbre_match.errors import OutputError
from timbre_match.keep.files import save_profile
from timbre_match.keep.writing import write_folder_whole, write_whole
from timbre_match.measure.dtfs import synthesise
from timbre_match.measure.profile import Profile
from timbre_match.measure.records import RINGING_ARRAYS, Recipe

CYCLE_POINTS = 2048
CYCLE_RATE_HZ = 48_000
CYCLE_PEAK_DB = -1.0

COLUMNS = (
    "instrument",
    "stage",
    "family",
    "take",
    "recording",
    "note",
    "f0_hz",
    "cents",
    "start_s",
    "end_s",
    "kind",
    "k",
    "freq_hz",
    "level_db",
    "se_db",
    "floor_db",
    "heard",
    "phase_rad",
    "inharmonicity_b",
    "inharmonicity_se",
    "onset_s",
    "decay",
    *RINGING_ARRAYS,
)

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def export_csv(profile: Profile, path: str | Path) -> None:
    """Write one row per take, note and harmonic, with the columns of :data:`COLUMNS` in a first row.

    The file is UTF-8 after RFC 4180. Takes count from 1; the recordings of a take stand in one cell with "; " between
    them; `heard` is true or false; what is not a number is an empty cell, and so is
    what only ringing notes have. A text that a spreadsheet would run as a
    formula (it begins with =, +, -, @, a tab or a carriage return) gets an apostrophe in front; numbers stay numbers.

    Raises
    ------
    OutputError
        If `path` cannot be written.
    """
    table = io.StringIO(newline="")
    writer = csv.writer(table, lineterminator="\r\n")
    writer.writerow(COLUMNS)
    for number, take in enumerate(profile.takes, start=1):
        recording = "; ".join(source.file for source in take.recordings)
        for recipe in take.notes:
            texts = [_defused(text) for text in (profile.instrument, profile.stage, profile.family)]
            texts += [str(number), _defused(recording), _defused(recipe.note)]
            texts += [_number(recipe.f0_hz, 6), _number(recipe.cents, 4)]
            texts += [_number(recipe.start_s, 6), _number(recipe.end_s, 6), recipe.kind]
            decays = _decay_cells(recipe)
            for index, k in enumerate(recipe.k.tolist()):
                writer.writerow(
                    [
                        *texts,
                        k,
                        _number(recipe.freq_hz[index], 6),
                        _number(recipe.level_db[index], 4),
                        _number(recipe.se_db[index], 6),
                        _number(recipe.floor_db[index], 4),
                        "true" if recipe.heard[index] else "false",
                        _number(recipe.phase_rad[index], 6),
                        *decays[index],
                    ]
                )
    # A name that came from an undecodable file name may hold half characters, which UTF-8 has no bytes for.
    write_whole(path, table.getvalue().encode("utf-8", "replace"))


def export_json(profile: Profile, path: str | Path) -> None:
    """Write the profile file itself, as :func:`timbre_match.keep.files.save_profile` does.

    Raises
    ------
    OutputError
        If `path` cannot be written.
    """
    save_profile(profile, path)


def export_cycles(profile: Profile, folder: str | Path) -> None:
    """Write one period per note as a WAV file (24 bits, 2,048 points, marked as 48 kHz) into a new folder.

    Each period is that of :func:`averaged_cycle`, scaled to a peak of -1 dB re full scale: levels between notes are
    not kept. Played at its marked rate every period sounds at 23.4 Hz; a sampler gives it its pitch. Files are named
    after their notes, with s for sharp ("F#4" is Fs4.wav).

    Raises
    ------
    OutputError
        If the profile has no heard harmonic, or `folder` holds files already or cannot be written.
    """
    notes: dict[str, list[Recipe]] = defaultdict(list)
    for take in profile.takes:
        for recipe in take.notes:
            if recipe.heard.any():
                notes[_file_name(recipe.note)].append(recipe)
    if not notes:
        raise OutputError(
            "the profile holds no heard harmonic, so there is no period to write",
            where=str(folder),
            remedy="measure it again from recordings with held notes",
        )
    write_folder_whole(folder, {name: _wav(averaged_cycle(recipes)) for name, recipes in notes.items()})


def averaged_cycle(recipes: list[Recipe]) -> NDArray[np.float64]:
    """One period of 2,048 points from the recipes of one note, by the DTFS synthesis equation.

    The level of a harmonic is the mean in dB over the recipes in which it is heard, its amplitude is proportional to
    10^(level / 20), and its phase is that of the first recipe in which it is heard: phases of different takes cannot
    be averaged without cancelling, and one take's belong together. Harmonics that no recipe hears are left out, and
    so are those above the 1,023rd.

    Parameters
    ----------
    recipes : list of Recipe
        At least one, with at least one heard harmonic among them; the first take's comes first.

    Returns
    -------
    float64 array, shape (2048,)
        Peak at -1 dB re full scale.
    """
    levels_db: dict[int, list[float]] = defaultdict(list)
    phases: dict[int, float] = {}
    for recipe in recipes:
        for index in np.flatnonzero(recipe.heard & (recipe.k < CYCLE_POINTS // 2)):
            k = int(recipe.k[index])
            levels_db[k].append(float(recipe.level_db[index]))
            phases.setdefault(k, float(recipe.phase_rad[index]))
    coefficients = np.zeros(CYCLE_POINTS, dtype=np.complex128)
    for k, heard_db in levels_db.items():
        coefficients[k] = 10.0 ** (np.mean(heard_db) / 20.0) * np.exp(1j * phases[k])
        coefficients[CYCLE_POINTS - k] = np.conj(coefficients[k])
    period = synthesise(coefficients).real
    return np.asarray(period * (10.0 ** (CYCLE_PEAK_DB / 20.0) / np.abs(period).max()))


def _decay_cells(recipe: Recipe) -> list[list[str]]:
    """The cells that only ringing notes fill, harmonic by harmonic."""
    ringing = recipe.ringing
    if ringing is None:
        return [[""] * (4 + len(RINGING_ARRAYS))] * len(recipe.k)
    note = [_number(ringing.inharmonicity_b, 12), _number(ringing.inharmonicity_se, 12), _number(ringing.onset_s, 6)]
    return [
        [*note, shape or "", *(_number(getattr(ringing, name)[index], 6) for name in RINGING_ARRAYS)]
        for index, shape in enumerate(ringing.decay)
    ]


def _wav(period: NDArray[np.float64]) -> bytes:
    file = io.BytesIO()
    # 24 bits rather than floats, since libsndfile stamps float files with the time and no two would be the same.
    soundfile.write(file, period, CYCLE_RATE_HZ, format="WAV", subtype="PCM_24")
    return file.getvalue()


def _file_name(note: str) -> str:
    """File name that every system takes: no #, which shells and addresses read as something else."""
    return re.sub(r"[^A-Za-z0-9-]", "_", note.replace("#", "s").replace("♯", "s").replace("♭", "b")) + ".wav"


def _defused(text: str) -> str:
    return "'" + text if text.startswith(_FORMULA_STARTS) else text


def _number(value: float, digits: int) -> str:
    return repr(round(float(value), digits) + 0.0) if np.isfinite(value) else ""
