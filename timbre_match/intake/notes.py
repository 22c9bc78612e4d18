"""Held notes: where in a recording a note is steady, and how steady."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from timbre_match import units
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.envelope import (
    Envelope,
    falls_from_the_start,
    is_ringing,
    level_envelope,
    rises_again_db,
    steady_stretch,
)
from timbre_match.intake.locking import spread_of_harmonics
from timbre_match.intake.octave import settle_octave
from timbre_match.intake.pitch import HOP_S, PitchTrack, track_pitch, without_rumble
from timbre_match.intake.recording import Recording
from timbre_match.intake.spectrum import BandLimited
from timbre_match.intake.warp import Clock, refine_clock
from timbre_match.threads import single_threaded

NoteKind = Literal["held", "ringing"]

_SHORTEST_SEGMENT_S = 0.1
_SHORTEST_S = 0.06
_FEWEST_CYCLES = 4
_VOICED = 0.35
_QUIETEST_DB = 40.0
_TAIL_DB = 15.0
_SCRAP_S = 0.2
_ABOVE_FLOOR_DB = 6.0
_STEP_CENTS = 65.0
_STEP_FRAMES = 8
_SETTLE_S = 1.0
_BLUR_FRAMES = 3
_NAMED_WITHIN_CENTS = 70.0
_LOCKED_CENTS, _LOCKED_HARMONICS = 0.4, 6
"""On 200 real notes of plucked and struck strings six or more strong harmonics spread by 0.6 cents or more; those of a
diminuendo on a trumpet by 0.2."""
_GROWS_DB = 3.0
_FREE_CENTS, _FREE_HARMONICS = 1.2, 5
_REST_RISES_DB = 10.0
_CLOCK_BAND_HZ = 5600.0
"""Up to where harmonics tell the clock."""
_CLOCK_DENSITY = 3.0
"""At twice the rate, images would hang together from step to step and hide that a clear tone is perfectly steady."""


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class HeldNote:
    """A stretch of a recording in which one note is held or rings.

    Attributes
    ----------
    note : str
        Nearest equal-tempered note, e.g. ``"A4"``.
    f0_hz, cents : float
        Mean fundamental in Hz and its deviation from `note` in cents.
    start_s, end_s : float
        The steady stretch, seconds from the start of the recording.
    cycles : int
        Whole cycles of the fundamental between `start_s` and `end_s`.
    kind : {"held", "ringing"}
    track_s, track_hz : float64 arrays, shape (n,)
        The fundamental over time: times in seconds and frequencies in Hz; read-only.
    """

    note: str
    f0_hz: float
    cents: float
    start_s: float
    end_s: float
    cycles: int
    kind: NoteKind
    track_s: NDArray[np.float64]
    track_hz: NDArray[np.float64]

    def __post_init__(self) -> None:
        for name in ("track_s", "track_hz"):
            array = np.array(getattr(self, name), dtype=np.float64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)


@single_threaded
def held_notes(
    recording: Recording,
    *,
    notes: Sequence[str] | None = None,
    a4_hz: float = units.STANDARD_A4_HZ,
    kind: NoteKind | None = None,
) -> tuple[HeldNote, ...]:
    """Find the held and ringing notes of a recording, in order of time.

    Parameters
    ----------
    recording : Recording
    notes : sequence of str, optional
        The notes that were played. A note found an octave or a twelfth off one of these is moved to it; other notes
        are left out.
    a4_hz : float
        Tuning reference for the note names, Hz.
    kind : {"held", "ringing"}, optional
        What all notes are, where the instrument tells; otherwise each note's level and harmonics do.

    Returns
    -------
    tuple of HeldNote
        Attack, release and bow changes are left out of each.

    Raises
    ------
    NoHeldNoteError
        If no note is steady for long enough, or none of `notes` is there.
    """
    samples, rate = recording.spectrum.reduced()
    calm = without_rumble(samples, rate)
    track = track_pitch(calm, rate)
    envelope = level_envelope(calm, rate)
    signal = BandLimited(recording.spectrum, _CLOCK_BAND_HZ, density=_CLOCK_DENSITY)
    wanted_hz = None if notes is None else [units.note_to_hz(name, a4_hz) for name in notes]
    settled = []
    for first, last in _segments(track, envelope):
        f0_hz = _settled_hz(signal, track, first, last)
        if wanted_hz is not None:
            f0_hz *= _factor_to(f0_hz, wanted_hz)
        settled.append((first, last, f0_hz))
    found = []
    merged = _merged(settled, track, envelope)
    edges = [0, *(last for _, last, _ in merged), len(track.time_s) - 1]
    starts = [*(first for first, _, _ in merged), len(track.time_s) - 1]
    for index, (first, last, f0_hz) in enumerate(merged):
        # The window blurs periodicity at both ends of a note; the level tells better where it begins and ends.
        first = max(first - _BLUR_FRAMES, edges[index])
        last = min(last + _BLUR_FRAMES, starts[index + 1])
        note = _measured(signal, track, envelope, first, last, f0_hz, a4_hz, wanted_hz, kind)
        if note is not None and (wanted_hz is None or _is_one_of(note.f0_hz, wanted_hz)):
            found.append(note)
    found = _without_rests(_without_scraps(found), envelope)
    if not found:
        raise NoHeldNoteError(
            "no held note found" if notes is None else f"none of the notes {' '.join(notes)} found",
            where=recording.file,
            cause="noise, silence, chords, or notes shorter than about 0.2 s",
            remedy="record single notes, each held for a second or more, close to the microphone",
        )
    return tuple(found)


def _segments(track: PitchTrack, envelope: Envelope) -> list[tuple[int, int]]:
    """First and last frame of each stretch of one pitch without a new attack."""
    floor_db = float(np.percentile(track.level_db, 5))
    loudest_db = float(track.level_db.max())
    threshold_db = max(loudest_db - _QUIETEST_DB, min(floor_db + _ABOVE_FLOOR_DB, loudest_db - 20.0))
    voiced = (track.strength > _VOICED) & (track.level_db > threshold_db)
    # One or two doubtful frames do not end a note.
    voiced = scipy.ndimage.binary_closing(np.pad(voiced, 3), iterations=2)[3:-3]
    cuts = np.zeros(len(voiced), dtype=bool)
    cuts[_pitch_steps(track, voiced)] = True
    cuts[_frame_at(track, envelope.renewals_s)] = True
    segments, first = [], None
    for frame in range(len(voiced) + 1):
        inside = frame < len(voiced) and bool(voiced[frame])
        if first is not None and (not inside or cuts[frame]):
            segments.append((first, frame - 1))
            first = frame if inside else None
        elif first is None and inside:
            first = frame
    return [(a, b) for a, b in segments if (b - a + 1) * HOP_S >= _SHORTEST_SEGMENT_S]


def _frame_at(track: PitchTrack, instants_s: Sequence[float]) -> NDArray[np.int64]:
    """The frames next to instants in seconds."""
    hop_s = float(track.time_s[1] - track.time_s[0]) if len(track.time_s) > 1 else HOP_S
    frames = np.round(np.asarray(instants_s, dtype=np.float64) / hop_s).astype(np.int64)
    return np.asarray(np.minimum(frames, len(track.time_s) - 1))


def _pitch_steps(track: PitchTrack, voiced: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Frames at which the pitch steps to another note and stays there; vibrato is averaged away."""
    width = _STEP_FRAMES
    if len(voiced) < 2 * width + 1 or not voiced.any():
        return np.zeros(0, dtype=np.int64)
    frames = np.arange(len(voiced))
    cents = np.interp(frames, frames[voiced], 1200.0 * np.log2(track.f0_hz[voiced]))
    cents = scipy.ndimage.median_filter(cents, 3, mode="nearest")
    middle = np.lib.stride_tricks.sliding_window_view(cents, width).mean(axis=1)
    # middle[i] speaks for frames i ... i + width - 1: compare what comes before frame n with what comes after it.
    step = np.zeros(len(cents))
    step[width : len(cents) - width + 1] = np.abs(middle[width:] - middle[:-width])
    step[~voiced] = 0.0
    peak = (step > _STEP_CENTS) & (step == scipy.ndimage.maximum_filter1d(step, 2 * width + 1))
    # A plateau of equal medians is one step, at its middle.
    labels, count = scipy.ndimage.label(peak)
    return np.array([round(float(np.mean(np.nonzero(labels == i + 1)[0]))) for i in range(count)], dtype=np.int64)


def _settled_hz(signal: BandLimited, track: PitchTrack, first: int, last: int) -> float:
    """Fundamental in Hz of a segment, its octave decided over the loudest second."""
    frames = np.arange(first, last + 1)
    f0_hz = _folded(track.f0_hz[frames], _middle_hz(track.f0_hz[frames], track.strength[frames]))
    part = _loudest_part(track.level_db[frames])
    clock = settle_octave(signal, Clock(track.time_s[frames][part], f0_hz[part]))
    return float(np.median(clock.f0_hz))


def _merged(
    segments: list[tuple[int, int, float]], track: PitchTrack, envelope: Envelope
) -> list[tuple[int, int, float]]:
    """Segments with neighbours joined that turned out to be one note: the track had slipped an octave between them."""
    renewals = _frame_at(track, envelope.renewals_s)

    def peak_db(first: int, last: int) -> float:
        return float(track.level_db[first : last + 1].max())

    joined: list[tuple[int, int, float]] = []
    for first, last, f0_hz in segments:
        if joined:
            before, until, before_hz = joined[-1]
            renewed = bool(np.any((renewals >= until - 1) & (renewals <= first + 1)))
            same = abs(units.cents_between(f0_hz, before_hz)) < _STEP_CENTS
            if first - until <= 2 and same and not renewed:
                joined[-1] = (before, last, f0_hz if last - first > until - before else before_hz)
                continue
            # What is left of a note once most of it has died away is no new note.
            tail = peak_db(first, last) < peak_db(before, until) - _TAIL_DB
            if first - until <= 2 and tail and not renewed:
                continue
        joined.append((first, last, f0_hz))
    return joined


def _measured(
    signal: BandLimited,
    track: PitchTrack,
    envelope: Envelope,
    first: int,
    last: int,
    f0_hz: float,
    a4_hz: float,
    wanted_hz: list[float] | None,
    kind: NoteKind | None,
) -> HeldNote | None:
    """The held note between two frames, or None where too little of it is steady."""
    begin_s, end_s = float(track.time_s[first]), float(track.time_s[last])
    if kind is None:
        kind = _kind(signal, track, envelope, first, last, f0_hz)
    ringing = kind == "ringing"
    start_s, stop_s = steady_stretch(envelope, begin_s, end_s, ringing=ringing)
    frames = np.flatnonzero((track.time_s >= start_s) & (track.time_s <= stop_s))
    if stop_s - start_s < _SHORTEST_S or len(frames) < 3:
        return None
    time_s = track.time_s[frames].copy()
    # The track reaches to both ends of the stretch.
    time_s[0], time_s[-1] = start_s, stop_s
    clock = refine_clock(signal, Clock(time_s, _folded(track.f0_hz[frames], f0_hz)))
    if clock.cycles < _FEWEST_CYCLES:
        return None
    mean_hz = clock.turns / (stop_s - start_s)
    name, cents = units.nearest_note(mean_hz, a4_hz)
    if wanted_hz:
        # A note that was asked for keeps its name, however far out of tune it was played.
        nearest = min(wanted_hz, key=lambda hz: abs(units.cents_between(mean_hz, hz)))
        name = units.nearest_note(nearest, a4_hz)[0]
        cents = units.cents_between(mean_hz, nearest)
    return HeldNote(
        note=name,
        f0_hz=mean_hz,
        cents=cents,
        start_s=start_s,
        end_s=stop_s,
        cycles=clock.cycles,
        kind=kind,
        track_s=clock.time_s,
        track_hz=clock.f0_hz,
    )


def _kind(signal: BandLimited, track: PitchTrack, envelope: Envelope, first: int, last: int, f0_hz: float) -> NoteKind:
    """Whether a note is held or rings: by its level over time, and in doubt by whether its harmonics are locked."""
    begin_s, end_s = float(track.time_s[first]), float(track.time_s[last])
    ringing = is_ringing(envelope, begin_s, end_s)
    if not ringing and not falls_from_the_start(envelope, begin_s, end_s):
        return "held"
    start_s, stop_s = steady_stretch(envelope, begin_s, end_s, ringing=True)
    frames = np.flatnonzero((track.time_s >= start_s) & (track.time_s <= stop_s))
    if len(frames) < 3:
        return "ringing" if ringing else "held"
    clock = refine_clock(signal, Clock(track.time_s[frames], _folded(track.f0_hz[frames], f0_hz)))
    spread = spread_of_harmonics(signal, clock)
    if ringing:
        # Harmonics that keep step cannot beat: if such a note grows again, someone blows or bows it.
        locked = spread.harmonics >= _LOCKED_HARMONICS and spread.cents < _LOCKED_CENTS
        driven = locked and rises_again_db(envelope, begin_s, end_s) > _GROWS_DB
        return "held" if driven else "ringing"
    free = spread.harmonics >= _FREE_HARMONICS and spread.cents > _FREE_CENTS
    return "ringing" if free else "held"


def _without_rests(notes: list[HeldNote], envelope: Envelope) -> list[HeldNote]:
    """The notes less what is left of a ringing one after it has been lost for a moment, in a beat or near the floor."""
    kept: list[HeldNote] = []
    for note in notes:
        if kept and kept[-1].kind == "ringing":
            rung = kept[-1]
            between_db = _levels_between(envelope, rung.end_s - 0.1, note.start_s)
            peak_db = float(_levels_between(envelope, note.start_s, note.end_s).max())
            before_db = float(_levels_between(envelope, rung.start_s, rung.end_s).max())
            anew = any(rung.end_s - 0.1 < instant_s < note.start_s + 0.1 for instant_s in envelope.renewals_s)
            same = abs(units.cents_between(note.f0_hz, rung.f0_hz)) < _STEP_CENTS
            faint = peak_db < max(float(between_db.min()), envelope.floor_db) + _REST_RISES_DB
            # A beat may pass through nothing, which looks like a new beginning but for the attack.
            quiet = faint or (same and peak_db < before_db - _TAIL_DB)
            if quiet and (not anew or note.kind == "held"):
                continue
        kept.append(note)
    return kept


def _levels_between(envelope: Envelope, begin_s: float, end_s: float) -> NDArray[np.float64]:
    first = min(len(envelope.level_db) - 1, max(0, round(begin_s / envelope.step_s)))
    return envelope.level_db[first : max(first, round(end_s / envelope.step_s)) + 1]


def _without_scraps(notes: list[HeldNote]) -> list[HeldNote]:
    """The notes less what an attack or a release left: bits of under 0.2 s beside a note of thrice the length."""
    kept = []
    for index, note in enumerate(notes):
        length_s = note.end_s - note.start_s
        beside = [other for other in notes[max(0, index - 1) : index + 2] if other is not note]
        scrap = length_s < _SCRAP_S and any(
            max(other.start_s - note.end_s, note.start_s - other.end_s) < _SCRAP_S
            and other.end_s - other.start_s > 3.0 * length_s
            for other in beside
        )
        if not scrap:
            kept.append(note)
    return kept


def _middle_hz(f0_hz: NDArray[np.float64], strength: NDArray[np.float64]) -> float:
    """Median of the track, weighted by strength."""
    order = np.argsort(f0_hz)
    weight = np.cumsum(strength[order])
    return float(f0_hz[order][np.searchsorted(weight, 0.5 * weight[-1])])


def _folded(f0_hz: NDArray[np.float64], around_hz: float) -> NDArray[np.float64]:
    """The track with frames that are octaves or twelfths off `around_hz` moved to it, and others bridged."""
    factors = np.array([1.0, 2.0, 0.5, 3.0, 1.0 / 3.0, 4.0, 0.25])
    off = np.abs(np.log2(f0_hz[:, None] * factors / around_hz))
    best = off.argmin(axis=1)
    good = off[np.arange(len(f0_hz)), best] < 1.5 / 12.0
    if not good.any():
        return np.full(len(f0_hz), around_hz)
    index = np.arange(len(f0_hz))
    return np.asarray(np.interp(index, index[good], (f0_hz * factors[best])[good]))


def _loudest_part(level_db: NDArray[np.float64]) -> slice:
    """The frames of the loudest stretch of up to 1 s."""
    width = max(4, int(_SETTLE_S / HOP_S))
    if len(level_db) <= width:
        return slice(0, len(level_db))
    power = np.cumsum(np.concatenate([[0.0], 10.0 ** (level_db / 10.0)]))
    first = int(np.argmax(power[width:] - power[:-width]))
    return slice(first, first + width)


def _factor_to(f0_hz: float, wanted_hz: list[float]) -> float:
    """What moves `f0_hz` to one of the notes that were played: an octave or a twelfth at most."""
    for factor in (1.0, 0.5, 2.0, 1.0 / 3.0, 3.0):
        if _is_one_of(f0_hz * factor, wanted_hz):
            return factor
    return 1.0


def _is_one_of(f0_hz: float, wanted_hz: list[float]) -> bool:
    return any(abs(units.cents_between(f0_hz, hz)) < _NAMED_WITHIN_CENTS for hz in wanted_hz)
