"""Whether a difference speaks of the strings: the first suspects, and the ones that can be exchanged.

A string's inharmonicity B hangs on its gauge, core and tension alone (Fletcher 1964, *J. Acoust. Soc. Am.* 36), and so
not on the body. Strings that have grown old lose their high partials all over, in strength and in sustain, whatever the
body does (common practice, no source).
"""

import math

import numpy as np
from scipy import stats

from timbre_match.compare.records import (
    CurvePoint,
    Interval,
    Region,
    StringNote,
    Strings,
    Sustain,
    SustainRegion,
)
from timbre_match.compare.target import Target
from timbre_match.compare.verdicts import false_discovery_threshold
from timbre_match.measure.profile import Profile
from timbre_match.measure.records import Ringing
from timbre_match.units import note_number

_SCATTER = 0.04
"""Scatter of log B from pluck to pluck beyond its own error, for want of a published figure: strength of the pluck and
pressure of the finger stretch the string. The takes' own scatter counts where it is larger."""
_LEAST_RATIO = 1.1
_LEAST_B_OVER_ERROR = 3.0
_HIGH_HZ = 1500.0
_TOP_OCTAVES = 0.5
_NAMED = 6
_Z95 = 1.959963984540054


def compare_strings(
    profile: Profile,
    target: Target,
    regions: tuple[Region, ...],
    body_curve: tuple[CurvePoint, ...],
    sustain: Sustain | None,
) -> tuple[Strings | None, tuple[str, ...]]:
    """Compare inharmonicity note by note, and look for a loss of high partials with nothing below.

    Returns
    -------
    strings : Strings or None
        None where no note rings on both sides.
    remarks : tuple of str
    """
    ours, theirs = _inharmonicity((profile,)), _inharmonicity(target.members)
    names = sorted(ours.keys() & theirs.keys(), key=note_number)
    if not names:
        return None, ()
    pairs = [(name, _mean_log_b(ours[name]), _mean_log_b(theirs[name])) for name in names]
    found = [
        (name, one, other, math.hypot(one[1], other[1]))
        for name, one, other in pairs
        if one is not None and other is not None
    ]
    p = np.array([2.0 * stats.norm.sf(abs(one[0] - other[0]) / sd) for _, one, other, sd in found])
    threshold = false_discovery_threshold(p) if found else 0.0
    notes = tuple(
        StringNote(
            note=name,
            b=math.exp(one[0]),
            target_b=math.exp(other[0]),
            ratio=Interval(
                value=math.exp(one[0] - other[0]),
                low=math.exp(one[0] - other[0] - _Z95 * sd),
                high=math.exp(one[0] - other[0] + _Z95 * sd),
            ),
            p=float(chance),
            differs=bool(chance <= threshold and abs(one[0] - other[0]) > math.log(_LEAST_RATIO)),
        )
        for (name, one, other, sd), chance in zip(found, p, strict=True)
    )
    dull = _dull_from(regions, body_curve, sustain)
    strings = Strings(notes=notes, dull_from_hz=dull)
    return strings, _remarks(strings)


def _inharmonicity(profiles: tuple[Profile, ...]) -> dict[str, list[Ringing]]:
    found: dict[str, list[Ringing]] = {}
    for profile in profiles:
        for take in profile.takes:
            for recipe in take.notes:
                if recipe.ringing is not None:
                    found.setdefault(recipe.note, []).append(recipe.ringing)
    return found


def _mean_log_b(notes: list[Ringing]) -> tuple[float, float] | None:
    """Mean of log B over the takes and its standard error; None where a B does not stand out of its own error."""
    clear = [
        one
        for one in notes
        if math.isfinite(one.inharmonicity_se) and one.inharmonicity_b > _LEAST_B_OVER_ERROR * one.inharmonicity_se
    ]
    if len(clear) < len(notes) or any(one.inharmonicity_b <= 0 for one in clear):
        return None
    log_b = np.log([one.inharmonicity_b for one in clear])
    own = np.array([one.inharmonicity_se / one.inharmonicity_b for one in clear])
    scatter = float(np.var(log_b, ddof=1)) if len(clear) > 1 else 0.0
    return float(np.mean(log_b)), math.sqrt((float(np.mean(own**2)) + max(_SCATTER**2, scatter)) / len(clear))


def _dull_from(
    regions: tuple[Region, ...], body_curve: tuple[CurvePoint, ...], sustain: Sustain | None
) -> float | None:
    """Where a loss begins that reaches the highest partials, with nothing different below it; None where none does.

    The loss may be in strength, in sustain, or in both; a gain anywhere speaks against old strings.
    """
    sustain_regions, curve = ((), ()) if sustain is None else (sustain.regions, sustain.curve)
    starts = [
        _loss_from(regions, "weaker", body_curve[-1].freq_hz if body_curve else 0.0),
        _loss_from(sustain_regions, "shorter", curve[-1].freq_hz if curve else 0.0),
    ]
    lowest = min(starts)
    return lowest if _HIGH_HZ <= lowest < math.inf else None


def _loss_from(regions: tuple[Region, ...] | tuple[SustainRegion, ...], word: str, top_hz: float) -> float:
    """Lower end of the only region, if it is a loss that reaches the top; infinity where nothing differs at all.

    Where something else differs it is 0, from where on no loss is one of high partials alone.
    """
    if not regions:
        return math.inf
    if len(regions) > 1 or regions[0].verdict != word or regions[0].high_hz < top_hz / 2.0**_TOP_OCTAVES:
        return 0.0
    return regions[0].low_hz


def _remarks(strings: Strings) -> tuple[str, ...]:
    remarks = []
    differing = [one for one in strings.notes if one.differs]
    if differing:
        named = "; ".join(
            f"{one.note} {one.ratio.value:.2f} times the target's ({one.ratio.low:.2f} to {one.ratio.high:.2f})"
            for one in differing[:_NAMED]
        )
        more = f"; and {len(differing) - _NAMED} more" if len(differing) > _NAMED else ""
        remarks.append(
            f"the strings are not the same: inharmonicity differs in {len(differing)} of {len(strings.notes)} notes, "
            f"{named}{more}. The body does not do that: another gauge, core or age of string does, or the same note on "
            "another string. Put the target's strings on, play the same notes on the same strings, and measure again, "
            "before anything else"
        )
    if strings.dull_from_hz is not None:
        remarks.append(
            f"all that is lost lies above {strings.dull_from_hz:.0f} Hz and reaches to the highest partials, with "
            "nothing different below: so do old strings; put fresh ones on and measure again, before anything else"
        )
    return tuple(remarks)
