"""Held notes in synthetic recordings of the kinds that break simple trackers; the truth is what was put in."""

import numpy as np
import pytest
import scipy.ndimage
import scipy.signal

from tests.intake.sounds import RATE, Array, hum, recording_of
from timbre_match.errors import NoHeldNoteError
from timbre_match.intake.notes import HeldNote, NoteKind, held_notes
from timbre_match.units import cents_between, note_to_hz

NATURAL = tuple(1.0 / k for k in range(1, 13))


def tone(
    f0_hz: float | Array,
    length_s: float,
    amplitudes: tuple[float, ...] = NATURAL,
    *,
    fade_s: float = 0.03,
    seed: int = 1,
) -> Array:
    """A note with the given harmonics, phases drawn; `f0_hz` may move sample by sample."""
    rng = np.random.default_rng(seed)
    count = round(length_s * RATE)
    turns = np.cumsum(np.broadcast_to(f0_hz, count)) / RATE
    sound = np.zeros(count)
    for k, amplitude in enumerate(amplitudes, 1):
        if k * np.max(f0_hz) < 0.47 * RATE:
            sound += amplitude * np.cos(2.0 * np.pi * (k * turns + rng.uniform()))
    time_s = np.arange(count) / RATE
    rise = np.clip(np.minimum(time_s, length_s - time_s) / fade_s, 0.0, 1.0)
    return np.asarray(0.2 * sound / np.sqrt(np.mean(sound**2)) * np.sin(0.5 * np.pi * rise) ** 2)


def silence(length_s: float) -> Array:
    return np.zeros(round(length_s * RATE))


def with_noise(sound: Array, snr_db: float = 60.0, seed: int = 2) -> Array:
    """White noise that far under the power of 0.2 rms."""
    noise = np.random.default_rng(seed).standard_normal(len(sound))
    return np.asarray(sound + 0.2 * 10.0 ** (-snr_db / 20.0) * noise)


def found(
    *parts: Array, snr_db: float = 60.0, notes: list[str] | None = None, kind: NoteKind | None = None
) -> tuple[HeldNote, ...]:
    return held_notes(recording_of(with_noise(np.concatenate(parts), snr_db), RATE), notes=notes, kind=kind)


def the_one(*parts: Array, snr_db: float = 60.0) -> HeldNote:
    notes = found(*parts, snr_db=snr_db)
    assert len(notes) == 1, [(n.note, n.start_s, n.end_s) for n in notes]
    return notes[0]


def off_cents(note: HeldNote, f0_hz: float) -> float:
    return abs(cents_between(note.f0_hz, f0_hz))


@pytest.mark.parametrize("f0_hz", [65.4, 73.4, 98.0, 196.0])
def test_low_note_with_weak_odd_harmonics(f0_hz: float) -> None:
    # Odd harmonics 25 dB under the second, as on some low notes of cellos.
    odd = 10.0 ** (-25.0 / 20.0)
    amplitudes = tuple(odd if k % 2 else 2.0 / k for k in range(1, 21))
    assert off_cents(the_one(silence(0.3), tone(f0_hz, 1.5, amplitudes), silence(0.3)), f0_hz) < 3.0


@pytest.mark.parametrize("f0_hz", [261.6, 440.0, 1046.5, 2093.0, 3520.0])
def test_single_harmonic(f0_hz: float) -> None:
    assert off_cents(the_one(silence(0.3), tone(f0_hz, 1.0, (1.0,)), silence(0.3)), f0_hz) < 1.0


@pytest.mark.parametrize("f0_hz", [27.5, 29.1, 55.0, 110.0, 440.0, 1760.0, 4186.0])
@pytest.mark.parametrize("rate", [22_050, 48_000, 192_000])
def test_whole_compass_at_any_rate(f0_hz: float, rate: int) -> None:
    time_s = np.arange(rate) / rate
    count = min(12, int(0.47 * rate / f0_hz))
    sound = 0.1 * sum(np.cos(2.0 * np.pi * k * f0_hz * time_s + k * k) / k for k in range(1, count + 1))
    notes = held_notes(recording_of(np.asarray(sound), rate))
    assert [off_cents(note, f0_hz) < 1.0 for note in notes] == [True]


@pytest.mark.parametrize("f0_hz", [98.0, 293.7, 659.3])
def test_wide_vibrato_is_one_note(f0_hz: float) -> None:
    time_s = np.arange(2 * RATE) / RATE
    moving = f0_hz * 2.0 ** (50.0 * np.sin(2.0 * np.pi * 6.0 * time_s) / 1200.0)
    note = the_one(silence(0.2), tone(moving, 2.0), silence(0.2))
    assert off_cents(note, f0_hz) < 5.0
    assert note.kind == "held"
    assert note.end_s - note.start_s > 1.7
    # The track shows the vibrato's whole swing, 100 cents.
    assert cents_between(note.track_hz.max(), note.track_hz.min()) == pytest.approx(100.0, abs=10.0)


def test_legato_scale_without_gaps() -> None:
    names = ["G3", "A3", "B3", "C4", "D4", "E4", "F#4", "G4"]
    length_s = 0.5
    freq_hz = np.repeat([note_to_hz(name) for name in names], round(length_s * RATE))
    # The pitch glides from note to note in 20 ms, the phase and the sound go on.
    freq_hz = scipy.ndimage.uniform_filter1d(freq_hz, round(0.02 * RATE), mode="nearest")
    notes = found(silence(0.3), tone(freq_hz, len(names) * length_s), silence(0.3))
    assert [note.note for note in notes] == names
    edges_s = 0.3 + length_s * np.arange(len(names) + 1)
    for note, begin_s, end_s in zip(notes, edges_s, edges_s[1:], strict=False):
        # Attack (40 ms) and release (30 ms) are left out on purpose, and more of them next to silence; neither may
        # reach into a neighbour.
        first, last = note is notes[0], note is notes[-1]
        assert begin_s - 0.01 <= note.start_s <= begin_s + (0.12 if first else 0.08)
        assert end_s - (0.12 if last else 0.08) <= note.end_s <= end_s + 0.01
        assert off_cents(note, note_to_hz(note.note)) < 5.0


@pytest.mark.parametrize("f0_hz", [98.0, 220.0, 440.0])
def test_repeated_notes_with_only_a_bow_change_between(f0_hz: float) -> None:
    sound = tone(f0_hz, 4.0)
    time_s = np.arange(len(sound)) / RATE
    changes_s = (1.0, 2.0, 3.0)
    for change_s in changes_s:
        # 40 ms at 1 per cent, with 10 ms to fall and to rise.
        sound *= 1.0 - 0.99 * np.clip((0.03 - np.abs(time_s - change_s)) / 0.01, 0.0, 1.0)
    notes = found(silence(0.2), sound, silence(0.2))
    assert [off_cents(note, f0_hz) < 3.0 for note in notes] == [True] * 4
    for before, after, change_s in zip(notes, notes[1:], changes_s, strict=False):
        assert before.end_s <= 0.2 + change_s <= after.start_s


@pytest.mark.parametrize("f0_hz", [65.4, 196.0, 880.0])
def test_short_notes(f0_hz: float) -> None:
    note = the_one(silence(0.3), tone(f0_hz, 0.3), silence(0.3))
    assert off_cents(note, f0_hz) < 5.0
    assert 0.1 <= note.end_s - note.start_s <= 0.3


@pytest.mark.parametrize("f0_hz", [261.6, 587.3, 1174.7])
def test_breath_noise(f0_hz: float) -> None:
    # A flute: nearly one harmonic, noise 15 dB under it.
    note = the_one(silence(0.3), tone(f0_hz, 1.2, (1.0, 0.2, 0.1)), silence(0.3), snr_db=15.0)
    assert off_cents(note, f0_hz) < 3.0
    assert note.end_s - note.start_s > 0.8


@pytest.mark.parametrize(("f0_hz", "string_hz"), [(440.0, 293.7), (220.0, 146.8), (196.0, 293.7), (330.0, 110.0)])
def test_sympathetic_string(f0_hz: float, string_hz: float) -> None:
    # It rings on for a second after the note, 30 dB below it.
    string = 10.0**-1.5 * tone(string_hz, 2.5)
    sound = np.concatenate([tone(f0_hz, 1.5), silence(1.0)]) + string
    notes = found(silence(0.3), sound, silence(0.3))
    assert off_cents(max(notes, key=lambda note: note.end_s - note.start_s), f0_hz) < 3.0
    assert abs(notes[0].end_s - 1.8) < 0.1


@pytest.mark.parametrize("mains_hz", [50.0, 60.0])
@pytest.mark.parametrize("f0_hz", [98.0, 207.7, 440.0])
def test_mains_hum(f0_hz: float, mains_hz: float) -> None:
    # As loud as the hum that the reading of recordings warns of: 37 dB under the note. G2 is twice 49 Hz, a hard case.
    notes = found(hum(mains_hz)(np.concatenate([silence(0.3), tone(f0_hz, 1.5), silence(0.3)])))
    longest = max(notes, key=lambda note: note.end_s - note.start_s)
    assert off_cents(longest, f0_hz) < 3.0
    assert longest.end_s - longest.start_s > 1.2


@pytest.mark.parametrize("sound", ["silence", "noise", "click", "quiet noise", "room tone"])
def test_no_note(sound: str) -> None:
    rng = np.random.default_rng(5)
    samples = {
        "silence": silence(1.0),
        "noise": 0.1 * rng.standard_normal(RATE),
        "click": np.concatenate([silence(0.5), np.hanning(882) * rng.standard_normal(882), silence(0.5)]),
        "quiet noise": 1e-5 * rng.standard_normal(3 * RATE),
        # Brown noise, as of traffic.
        "room tone": 1e-3 * scipy.signal.lfilter([1.0], [1.0, -0.999], rng.standard_normal(2 * RATE)),
    }[sound]
    with pytest.raises(NoHeldNoteError) as caught:
        held_notes(recording_of(samples, RATE))
    assert caught.value.where == "tone"
    assert caught.value.remedy


@pytest.mark.parametrize("a4_hz", [415.0, 440.0, 442.0])
def test_tuning(a4_hz: float) -> None:
    (note,) = held_notes(recording_of(with_noise(tone(note_to_hz("D4", a4_hz), 1.0)), RATE), a4_hz=a4_hz)
    assert note.note == "D4"
    assert abs(note.cents) < 1.0
    (plain,) = held_notes(recording_of(with_noise(tone(note_to_hz("D4", a4_hz), 1.0)), RATE))
    # 1200 log2(a4 / 440): 415 Hz is -101.27 cents, a semitone lower, and 442 Hz +7.85 cents.
    assert plain.note == ("C#4" if a4_hz == 415.0 else "D4")
    assert plain.cents == pytest.approx({415.0: -1.27, 440.0: 0.0, 442.0: 7.85}[a4_hz], abs=0.5)


def test_named_notes_settle_the_octave_and_leave_others_out() -> None:
    parts = [silence(0.2), tone(440.0, 0.8), silence(0.2), tone(587.33, 0.8), silence(0.2)]
    assert [n.note for n in found(*parts)] == ["A4", "D5"]
    assert [n.note for n in found(*parts, notes=["A3", "D5"])] == ["A3", "D5"]
    assert [n.note for n in found(*parts, notes=["A4"])] == ["A4"]
    # A twelfth below A4 is D3.
    assert [n.note for n in found(*parts, notes=["D3"])] == ["D3"]
    moved = found(*parts, notes=["A5"])[0]
    assert moved.f0_hz == pytest.approx(880.0, rel=1e-3)
    with pytest.raises(NoHeldNoteError, match=r"none of the notes C2 F2 found"):
        found(*parts, notes=["C2", "F2"])


def test_plucked_note_rings_and_held_note_does_not() -> None:
    time_s = np.arange(3 * RATE) / RATE
    plucked = tone(196.0, 3.0, fade_s=0.004) * 10.0 ** (-3.0 * time_s / 2.5)
    assert the_one(silence(0.3), plucked, silence(0.3)).kind == "ringing"
    assert the_one(silence(0.3), tone(196.0, 3.0), silence(0.3)).kind == "held"
    # A long diminuendo under the bow begins with a slow attack.
    fading = tone(196.0, 3.0, fade_s=0.4) * 10.0 ** (-0.5 * time_s / 3.0)
    assert the_one(silence(0.3), fading, silence(0.3)).kind == "held"


def test_a_blown_note_that_falls_and_grows_again_is_held() -> None:
    # As it dies and swells its harmonics keep step, which no beating string does.
    time_s = np.arange(4 * RATE) / RATE
    level_db = np.interp(time_s, [0.0, 0.1, 2.5, 3.0, 4.0], [0.0, 0.0, -24.0, -14.0, -40.0])
    blown = tone(196.0, 4.0, fade_s=0.004) * 10.0 ** (level_db / 20.0)
    assert the_one(silence(0.3), blown, silence(0.3)).kind == "held"


def test_a_string_that_beats_deeply_rings_all_the_same() -> None:
    time_s = np.arange(5 * RATE) / RATE
    k = np.arange(1, 9)[:, None]
    # Each partial a little off the multiples, and all of them beating together.
    partials = np.cos(2.0 * np.pi * k * 196.0 * np.sqrt(1.0 + 2e-4 * k**2) * time_s + k) / k
    beats = 1.0 + 0.85 * np.cos(2.0 * np.pi * 0.7 * time_s)
    sound = 0.1 * partials.sum(axis=0) * beats * 10.0 ** (-3.0 * time_s / 6.0)
    assert the_one(silence(0.3), sound, silence(0.3)).kind == "ringing"


def test_the_family_may_say_what_all_notes_are() -> None:
    time_s = np.arange(3 * RATE) / RATE
    plucked = tone(196.0, 3.0, fade_s=0.004) * 10.0 ** (-3.0 * time_s / 2.5)
    assert [note.kind for note in found(silence(0.3), plucked, silence(0.3), kind="held")] == ["held"]
    # Damped before it has died by enough to tell.
    short = tone(196.0, 0.6, fade_s=0.004) * 10.0 ** (-3.0 * time_s[: round(0.6 * RATE)] / 12.0)
    assert [note.kind for note in found(silence(0.3), short, silence(0.3))] == ["held"]
    assert [note.kind for note in found(silence(0.3), short, silence(0.3), kind="ringing")] == ["ringing"]


def test_what_is_left_of_a_ringing_note_is_no_note() -> None:
    # One that beats down into the noise two seconds after the pluck and comes back, far softer than it began.
    time_s = np.arange(5 * RATE) / RATE
    beats = np.abs(1.0 + 0.99 * np.exp(2j * np.pi * 0.25 * time_s)) / 2.0
    sound = tone(196.0, 5.0, fade_s=0.004) * 10.0 ** (-3.0 * time_s / 6.0) * beats
    assert [note.kind for note in found(silence(0.3), sound, silence(0.3))] == ["ringing"]


def test_second_pluck_while_the_first_rings() -> None:
    time_s = np.arange(2 * RATE) / RATE
    pluck = tone(196.0, 2.0, fade_s=0.004) * 10.0 ** (-3.0 * time_s / 3.0)
    sound = np.zeros(4 * RATE)
    sound[: 2 * RATE] += pluck
    sound[RATE : 3 * RATE] += pluck
    notes = found(silence(0.3), sound)
    assert [off_cents(note, 196.0) < 5.0 for note in notes] == [True, True]
    assert notes[1].start_s == pytest.approx(1.3, abs=0.1)


def test_octave_of_a_hundred_random_recipes() -> None:
    """Odd harmonics down to -25 dB against the even ones, 40 Hz to 2 kHz, levels scattered by several dB."""
    rng = np.random.default_rng(6)
    wrong = []
    for _ in range(100):
        f0_hz = float(40.0 * 50.0 ** rng.uniform())
        count = int(rng.integers(4, 1 + min(25, int(15_000 / f0_hz))))
        k = np.arange(1, count + 1)
        level_db = -rng.uniform(3.0, 9.0) * np.log2(k) + rng.normal(0.0, 4.0, count)
        level_db[::2] -= rng.uniform(0.0, 25.0)
        sound = tone(f0_hz, 0.8, tuple(10.0 ** (level_db / 20.0)), seed=int(rng.integers(1 << 30)))
        notes = found(silence(0.1), sound, silence(0.1), snr_db=50.0)
        longest = max(notes, key=lambda note: note.end_s - note.start_s)
        if off_cents(longest, f0_hz) > 20.0:
            wrong.append((round(f0_hz, 1), round(longest.f0_hz, 1), list(np.round(level_db - level_db.max(), 1))))
    assert not wrong


def test_gain_moves_nothing() -> None:
    sound = np.concatenate([silence(0.3), tone(220.0, 1.0), silence(0.3)])
    notes = [held_notes(recording_of(gain * with_noise(sound), RATE)) for gain in (1.0, 0.01, 0.5)]
    first = notes[0][0]
    for (other,) in notes[1:]:
        assert other.f0_hz == pytest.approx(first.f0_hz, rel=1e-7)
        assert (other.start_s, other.end_s, other.note) == (first.start_s, first.end_s, first.note)


def test_note_record_is_closed() -> None:
    note = the_one(tone(220.0, 1.0))
    for track in (note.track_s, note.track_hz):
        with pytest.raises(ValueError, match="read-only"):
            track[0] = 0.0
    assert note.cycles == int((note.end_s - note.start_s) * note.f0_hz + 1e-6)
    assert note.track_s[0] == note.start_s
    assert note.track_s[-1] == note.end_s
