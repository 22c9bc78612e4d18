"""Plucked and struck notes: where their partials lie, how strong they are at the onset, and how they die away.

Each partial is taken out in a band of its own around where a stiff string has it, and its decay is fitted there from
shortly after the onset on, when the noise of the pluck and the knock on the body have passed; the level that counts
is the fit's at the onset. (Partials followed in bands: Laroche 1993, J. Acoust. Soc. Am. 94:1958; decays of plucked
strings: Karjalainen et al. 2002, J. Audio Eng. Soc. 50:867.)
"""

import numpy as np
from numpy.typing import NDArray

from timbre_match import units
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import HeldNote
from timbre_match.intake.recording import Recording
from timbre_match.intake.spectrum import points_per_cycle
from timbre_match.measure.glide import common_glide, without_glide
from timbre_match.measure.onset import ONSET_SE_S, onset_of
from timbre_match.measure.partials import Partials, measure_partials, noise_of_bands
from timbre_match.measure.records import RINGING_ARRAYS, Recipe, Ringing
from timbre_match.measure.stiffness import StiffString, fit_law, search_partials, stretched_hz
from timbre_match.measure.subbands import Bands, cut_bands

_ATTACK_S = 0.02
_SETTLED = 1.0
"""The band's own response to the attack has passed after so many times the inverse of its half-width."""
_NARROWEST_HZ = 20.0
_RESOLVED = 90.0
"""Half-width times length of a band: some 360 samples tell of every decay."""


def measure_ringing(recording: Recording, note: HeldNote, *, a4_hz: float = units.STANDARD_A4_HZ) -> Recipe:
    """Measure the partials of a ringing note.

    Parameters
    ----------
    recording : Recording
    note : HeldNote
        Found in that recording.
    a4_hz : float
        Tuning reference for the note name, Hz.

    Returns
    -------
    Recipe
        Levels and phases at the onset, with `ringing`.

    Raises
    ------
    NoHeldNoteError
        If no partial stands out of the noise.
    """
    rate = recording.sample_rate_hz
    edge_hz = 0.98 * rate / 2.0
    if recording.low_pass_hz is not None:
        edge_hz = min(edge_hz, 0.97 * recording.low_pass_hz)
    onset_s = onset_of(recording.samples, rate, note)
    first, last = round((onset_s + _ATTACK_S) * rate), round(note.end_s * rate)
    expected_hz, f0_hz = search_partials(recording.samples[first:last], rate, note.f0_hz, edge_hz)
    k = np.arange(1, len(expected_hz) + 1)
    half_hz = min(0.45 * f0_hz, max(_NARROWEST_HZ, _RESOLVED / (note.end_s - onset_s)))
    begin_s = min(onset_s + _ATTACK_S + _SETTLED / half_hz, onset_s + 0.5 * (note.end_s - onset_s))
    bands = cut_bands(recording.samples, rate, onset_s, (begin_s, note.end_s), expected_hz, half_hz)
    noise = noise_of_bands(bands, half_hz)
    glide = common_glide(bands.time_s, bands.y, expected_hz, noise)
    bands = Bands(
        time_s=bands.time_s,
        y=without_glide(bands.time_s, bands.y, expected_hz, glide),
        noise_factor=bands.noise_factor,
    )
    partials = measure_partials(bands, noise, min(0.5 * half_hz, 0.1 * f0_hz + 3.0), half_hz)
    if not partials.heard.any():
        raise NoHeldNoteError(
            f"nothing of {note.note} at {onset_s:.2f} s stands out of the noise for long enough to be measured",
            where=recording.file,
            cause="the note is too soft against the noise around it",
            remedy="record closer to the microphone, or in a quieter room",
        )
    own_hz = expected_hz + partials.off_hz
    found = partials.found
    law = fit_law(k[found], own_hz[found], partials.freq_se_hz[found])
    return _recipe(
        note,
        a4_hz,
        onset_s,
        begin_s,
        partials,
        law,
        np.where(found, own_hz, stretched_hz(k, law.f0_hz, law.b)),
        edge_hz,
    )


def _recipe(
    note: HeldNote,
    a4_hz: float,
    onset_s: float,
    begin_s: float,
    partials: Partials,
    law: StiffString,
    freq_hz: NDArray[np.float64],
    edge_hz: float,
) -> Recipe:
    heard = partials.heard
    k = np.arange(1, len(heard) + 1)
    power = np.where(heard, partials.amplitude**2, 0.0)
    total = float(power.sum())
    share = power / total
    # d share_k = (dP_k - share_k dP_total) / P_total, with independent dP_k = 2 P_k d ln A_k.
    own = np.where(heard, 2.0 * partials.amplitude_se * power, 0.0) ** 2
    variance = (own * (1.0 - 2.0 * share) + share**2 * own.sum()) / total**2
    with np.errstate(divide="ignore", invalid="ignore"):
        level_db = np.where(heard, units.power_to_db(share), np.nan)
        se_db = np.where(heard, 10.0 / np.log(10.0) * np.sqrt(variance) / share, np.nan)
    # An onset that is read too late lowers most what dies fastest.
    fall_db_per_s = 60.0 / partials.t60_s
    common_db_per_s = float(np.nansum(share * fall_db_per_s))
    se_db = np.hypot(se_db, ONSET_SE_S * (fall_db_per_s - common_db_per_s))
    # Where the fundamental is not heard, the lowest that is tells the time origin.
    lowest = int(np.flatnonzero(heard)[0])
    phase = partials.phase_rad - k / k[lowest] * partials.phase_rad[lowest]
    return Recipe(
        note=note.note,
        f0_hz=law.f0_hz,
        cents=units.cents_between(law.f0_hz, units.note_to_hz(note.note, a4_hz)),
        start_s=begin_s,
        end_s=note.end_s,
        cycles=max(1, int((note.end_s - begin_s) * law.f0_hz)),
        points_per_cycle=points_per_cycle(law.f0_hz, edge_hz),
        kind=note.kind,
        k=k,
        freq_hz=freq_hz,
        level_db=level_db,
        se_db=se_db,
        floor_db=units.power_to_db(partials.floor_power / total),
        heard=heard,
        phase_rad=np.where(heard, (phase + np.pi) % (2.0 * np.pi) - np.pi, np.nan),
        ringing=Ringing(
            onset_s=onset_s,
            f0_se_hz=law.f0_se_hz,
            inharmonicity_b=law.b,
            inharmonicity_se=law.b_se,
            decay=partials.decay,
            **{name: getattr(partials, name) for name in RINGING_ARRAYS},
        ),
    )
