"""Recipes as JSON and back."""

import math

import numpy as np

from timbre_match.keep import layout
from timbre_match.measure.records import RINGING_ARRAYS, Recipe, Ringing

Json = dict[str, object]

_OF_NOTE = {"onset_s": 6, "f0_se_hz": 6, "inharmonicity_b": 12, "inharmonicity_se": 12}
_OF_PARTIAL = {name: 4 if name.endswith("_db") else 6 for name in RINGING_ARRAYS}
"""Keys of ringing notes and of their harmonics, and to how many decimals they are kept."""


def rounded(value: float | None, digits: int) -> float | None:
    """Round, with None for what is no number, and 0 rather than -0."""
    if value is None or not math.isfinite(value):
        return None
    return round(float(value), digits) + 0.0


def recipe_body(recipe: Recipe) -> Json:
    """What a profile file says of a note; of a ringing one with its decays."""
    body: Json = {
        "note": recipe.note,
        "f0_hz": rounded(recipe.f0_hz, 6),
        "cents": rounded(recipe.cents, 4),
        "start_s": rounded(recipe.start_s, 6),
        "end_s": rounded(recipe.end_s, 6),
        "cycles": int(recipe.cycles),
        "points_per_cycle": int(recipe.points_per_cycle),
        "kind": recipe.kind,
    }
    harmonics: list[Json] = [
        {
            "k": k,
            "freq_hz": rounded(freq_hz, 6),
            "level_db": rounded(level_db, 4),
            "se_db": rounded(se_db, 6),
            "floor_db": rounded(floor_db, 4),
            "heard": heard,
            "phase_rad": rounded(phase_rad, 6),
        }
        for k, freq_hz, level_db, se_db, floor_db, heard, phase_rad in zip(
            recipe.k.tolist(),
            recipe.freq_hz.tolist(),
            recipe.level_db.tolist(),
            recipe.se_db.tolist(),
            recipe.floor_db.tolist(),
            recipe.heard.tolist(),
            recipe.phase_rad.tolist(),
            strict=True,
        )
    ]
    if recipe.ringing is not None:
        ringing = recipe.ringing
        body |= {name: rounded(getattr(ringing, name), digits) for name, digits in _OF_NOTE.items()}
        for index, harmonic in enumerate(harmonics):
            harmonic["decay"] = ringing.decay[index]
            values = {
                name: rounded(float(getattr(ringing, name)[index]), digits) for name, digits in _OF_PARTIAL.items()
            }
            # Most apply to one shape of decay only.
            harmonic |= {name: value for name, value in values.items() if value is not None or name == "t60_s"}
    return body | {"harmonics": harmonics}


def read_recipe(note: layout.Note) -> Recipe:
    """The recipe that a profile file holds."""
    harmonics = note.harmonics
    return Recipe(
        note=note.note,
        f0_hz=note.f0_hz,
        cents=note.cents,
        start_s=note.start_s,
        end_s=note.end_s,
        cycles=note.cycles,
        points_per_cycle=note.points_per_cycle,
        kind=note.kind,
        k=np.array([harmonic.k for harmonic in harmonics]),
        freq_hz=np.array([harmonic.freq_hz for harmonic in harmonics]),
        # As floats, None becomes NaN.
        level_db=np.array([harmonic.level_db for harmonic in harmonics], dtype=np.float64),
        se_db=np.array([harmonic.se_db for harmonic in harmonics], dtype=np.float64),
        floor_db=np.array([harmonic.floor_db for harmonic in harmonics], dtype=np.float64),
        heard=np.array([harmonic.heard for harmonic in harmonics]),
        phase_rad=np.array([harmonic.phase_rad for harmonic in harmonics], dtype=np.float64),
        ringing=_read_ringing(note),
    )


def _read_ringing(note: layout.Note) -> Ringing | None:
    if note.inharmonicity_b is None or note.onset_s is None or note.f0_se_hz is None:
        return None
    return Ringing(
        onset_s=note.onset_s,
        f0_se_hz=note.f0_se_hz,
        inharmonicity_b=note.inharmonicity_b,
        inharmonicity_se=math.nan if note.inharmonicity_se is None else note.inharmonicity_se,
        decay=tuple(harmonic.decay for harmonic in note.harmonics),
        **{
            name: np.array([getattr(harmonic, name) for harmonic in note.harmonics], dtype=np.float64)
            for name in RINGING_ARRAYS
        },
    )
