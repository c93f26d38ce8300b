"""The flat record that compiled code reads, made from a preset and a phrase.

Everything that takes thinking is settled here, in Python and in exact numbers: which key sounds, whether its
pitch glides or jumps, at which sample and which part of it. What is left for the audio thread is a walk
through two lists of events.
"""

import math
from dataclasses import dataclass, field, replace
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.amplifier import AMPLIFIER, amplifier_record
from glidesmith.converter import converted_volts, held_time
from glidesmith.envelope import ENVELOPE, GATE_EVENT, envelope_record
from glidesmith.errors import SettingError
from glidesmith.keyboard import LEGATO, PRESS, RELEASE, KeyChange, key_changes
from glidesmith.oscillator import CYCLE, HIGHEST_SHARE
from glidesmith.slew import SLEW, Slew
from glidesmith.text import counted
from glidesmith.units import note_hz
from glidesmith.voice import quiet_sample
from glidesmith.wavetable import Wavetables, build_wavetables, read_cycle

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from glidesmith.phrase import Note, Phrase
    from glidesmith.preset import Preset, SlewSettings

LOWEST_RATE, HIGHEST_RATE = 8_000, 384_000
SETTINGS = np.dtype(
    [
        ("pitch", SLEW),
        ("gain", SLEW),
        ("envelope", ENVELOPE),
        ("amplifier", AMPLIFIER),
        ("enveloped", np.int64),
        ("sample_rate", np.float64),
        ("step_s", np.float64),
        ("octaves_per_volt", np.float64),
        ("octaves_at_zero", np.float64),
        ("steps_per_octave", np.float64),
        ("level", np.float64),
        ("drone_increment", np.int64),
        ("drone_level", np.float64),
        ("first_volts", np.float64),
        ("length", np.int64),
    ],
    align=True,
)
"""One preset's settings at one sample rate.

``step_s``: seconds a sample. ``octaves_at_zero``: log2 of cycles a sample at 0 V; ``octaves_per_volt``: 1 but
for tracking error. ``level``, ``drone_level``: amplitudes. ``drone_increment``: phase a sample. ``length``:
samples in all.
"""

PITCH_EVENT = np.dtype(
    [("sample", np.int64), ("fraction", np.float64), ("volts", np.float64), ("jump", np.int64)], align=True
)
"""At ``sample`` + ``fraction`` the pitch's target becomes ``volts``.

With ``jump`` the pitch is there at once.
"""


@dataclass(frozen=True, slots=True)
class PitchChange:
    """A new target for the pitch.

    What the phrase asks (``volts``, at ``time``) and what the converter makes of it.
    """

    time: Fraction
    note: int
    volts: float
    jump: bool
    held_time: Fraction
    held_volts: float


@dataclass(frozen=True, slots=True)
class GateChange:
    """A new level of the gate, from 0, which is closed, to 1.

    ``opens``: no key was held; ``trigger``: the envelope starts.
    """

    time: Fraction
    note: int
    level: float
    opens: bool
    trigger: bool


@dataclass(frozen=True)
class Program:
    """What compiled code needs to play one preset's phrase at one rate; see `compile_program`."""

    preset: "Preset"
    phrase: "Phrase"
    sample_rate: int
    settings: "NDArray[Any]"
    pitch_events: "NDArray[Any]"
    gate_events: "NDArray[Any]"
    wavetables: Wavetables
    pitch_changes: "tuple[PitchChange, ...]"
    gate_changes: "tuple[GateChange, ...]"
    cut_off: bool
    warnings: tuple[str, ...] = field(default=())

    @property
    def length(self) -> int:
        """Samples in all."""
        return int(self.settings["length"][0])


def slew_of(settings: "SlewSettings") -> Slew:
    """The slew that a preset's table describes."""
    return Slew(
        settings.law,
        settings.rise,
        settings.fall,
        settings.bend,
        settings.knee,
        settings.curvature,
        settings.timing,
    )


def note_volts(preset: "Preset", number: int) -> float:
    """Pitch control voltage of a MIDI note number at 1 V/oct, 0 V on the preset's ``zero_volts`` note."""
    return (number - preset.tuning.zero_volts) / 12.0


def _glides(change: KeyChange, glide: str) -> bool:
    if glide == "overlap":
        return change.kind != PRESS
    return glide == "always"


_latest: "tuple[tuple[Note, ...], tuple[KeyChange, ...]]" = ((), ())


def _key_changes(notes: "tuple[Note, ...]") -> "tuple[KeyChange, ...]":
    """The changes of the sounding key; those of the latest phrase are kept, for many presets play one."""
    global _latest
    latest = _latest
    if latest[0] is not notes:
        _latest = latest = (notes, tuple(key_changes(notes)))
    return latest[1]


def pitch_changes(preset: "Preset", phrase: "Phrase") -> tuple[PitchChange, ...]:
    """Every change of the pitch's target, the first note's included (which jumps)."""
    changes: list[PitchChange] = []
    for change in _key_changes(phrase.notes):
        if change.kind == RELEASE:
            continue
        volts = note_volts(preset, phrase.notes[change.note].number)
        jump = not changes or not _glides(change, preset.pitch.glide)
        if changes and volts == changes[-1].volts and not jump:
            continue
        time, held = change.time, volts
        if preset.converter:
            held = converted_volts(preset.converter, volts)[0]
            time = held_time(preset.converter, change.time)
        changes.append(PitchChange(change.time, change.note, volts, jump, time, held))
    return tuple(changes)


def gate_changes(preset: "Preset", phrase: "Phrase") -> tuple[GateChange, ...]:
    """Every change of the gate's level; velocity lowers it by up to the preset's ``velocity_db``."""
    changes: list[GateChange] = []
    retrigger = preset.envelope is not None and preset.envelope.retrigger
    for change in _key_changes(phrase.notes):
        if change.kind == RELEASE:
            changes.append(GateChange(change.time, change.note, 0.0, False, False))
            continue
        velocity = phrase.notes[change.note].velocity
        level = 10.0 ** (-preset.amplifier.velocity_db * (1.0 - velocity) / 20.0)
        opens = change.kind == PRESS
        changes.append(
            GateChange(change.time, change.note, level, opens, opens or (retrigger and change.kind == LEGATO))
        )
    return tuple(changes)


def sample_position(time: Fraction, sample_rate: int) -> tuple[int, float]:
    """The sample at or before ``time`` seconds, and how far beyond it the time lies, in samples from 0 to
    under 1.
    """
    exact = time * sample_rate
    sample = math.floor(exact)
    fraction = float(exact - sample)
    return (sample + 1, 0.0) if fraction == 1.0 else (sample, fraction)


def changes_let_through(changes: "Sequence[PitchChange]") -> "list[PitchChange]":
    """The changes after the first note that come through the converter: of several at one tick, the last."""
    later = {change.held_time: change for change in changes[1:]}
    return list(later.values())


def _pitch_events(changes: "Sequence[PitchChange]", sample_rate: int) -> "NDArray[Any]":
    rows = [
        (*sample_position(change.held_time, sample_rate), change.held_volts, change.jump)
        for change in changes_let_through(changes)
    ]
    return np.array(rows, PITCH_EVENT)


def _gate_events(changes: "Sequence[GateChange]", sample_rate: int) -> "NDArray[Any]":
    rows = [(*sample_position(c.time, sample_rate), c.level, c.trigger) for c in changes]
    return np.array(rows, GATE_EVENT)


def _lowest_hz(preset: "Preset", volts: "Sequence[float]", octaves_per_volt: float) -> float:
    """The lowest frequency that a phrase can reach: its lowest target, and a glissando step under it."""
    lowest = min(volts)
    if preset.pitch.steps_per_octave:
        lowest -= 1.0 / preset.pitch.steps_per_octave
    zero_hz = note_hz(preset.tuning.zero_volts, preset.tuning.a4_hz)
    return float(zero_hz * 2.0 ** (lowest * octaves_per_volt))


def _clip_warnings(preset: "Preset", phrase: "Phrase", changes: "Sequence[PitchChange]") -> tuple[str, ...]:
    if preset.converter is None:
        return ()
    clipped = {c.note for c in changes if converted_volts(preset.converter, c.volts)[1]}
    if not clipped:
        return ()
    first = min(clipped)
    volts = note_volts(preset, phrase.notes[first].number)
    low, high = (converted_volts(preset.converter, end)[0] for end in (-100.0, 100.0))
    return (
        f"converter: clips {counted(len(clipped), 'note', 'notes')} of the phrase to its codes, {low:+g} to "
        f"{high:+g} V (the first is note {first}, {volts:+.3f} V); raise converter.span_volts or move "
        "tuning.zero_volts",
    )


def _settings(preset: "Preset", sample_rate: int, first_volts: float) -> "NDArray[Any]":
    settings = np.zeros(1, SETTINGS)
    row = settings[0]
    row["pitch"] = slew_of(preset.pitch.slew).record()[0]
    row["gain"] = slew_of(preset.gain).record()[0]
    row["amplifier"] = amplifier_record(preset.amplifier.law, preset.amplifier.range_db)[0]
    if preset.envelope is not None:
        row["enveloped"] = 1
        row["envelope"] = envelope_record(preset.envelope)[0]
    row["sample_rate"] = sample_rate
    row["step_s"] = 1.0 / sample_rate
    row["octaves_per_volt"] = 1.0 + preset.tuning.scale_error_cents_per_octave / 1200.0
    row["octaves_at_zero"] = math.log2(note_hz(preset.tuning.zero_volts, preset.tuning.a4_hz) / sample_rate)
    row["steps_per_octave"] = preset.pitch.steps_per_octave
    row["level"] = 10.0 ** (preset.oscillator.level_db / 20.0)
    row["first_volts"] = first_volts
    if preset.drone is not None:
        hz = note_hz(preset.drone.note, preset.tuning.a4_hz)
        if hz < HIGHEST_SHARE * sample_rate:
            row["drone_increment"] = round(hz / sample_rate * CYCLE)
            row["drone_level"] = 10.0 ** (preset.drone.level_db / 20.0)
    return settings


def check_sample_rate(sample_rate: int) -> int:
    """``sample_rate`` itself where the engine can run at it: a whole number of hertz, 8,000 to 384,000."""
    if (
        isinstance(sample_rate, bool)
        or int(sample_rate) != sample_rate
        or not LOWEST_RATE <= sample_rate <= HIGHEST_RATE
    ):
        raise SettingError(
            f"sample rate {sample_rate!r}: give a whole number of hertz, {LOWEST_RATE} to {HIGHEST_RATE} "
            "(48000 is usual)"
        )
    return int(sample_rate)


def _check_kinds(preset: object, phrase: object) -> None:
    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

    if not isinstance(preset, Preset):
        raise SettingError(f"preset is of type {type(preset).__name__}: give what load_preset returns")
    if not isinstance(phrase, Phrase):
        raise SettingError(f"phrase is of type {type(phrase).__name__}: give what load_phrase returns")
    if not phrase.notes:
        raise SettingError("the phrase has no notes: give it at least one")


def compile_program(
    preset: "Preset",
    phrase: "Phrase",
    sample_rate: int,
    tail_s: float = 30.0,
    cycle: "NDArray[np.float64] | None" = None,
    lowest_hz: float = math.inf,
) -> Program:
    """Settle what a preset makes of a phrase at a sample rate.

    Parameters
    ----------
    preset, phrase
        As `load_preset` and `load_phrase` give them.
    sample_rate : int
        Hz, 8,000 to 384,000.
    tail_s : float
        The longest time, in seconds, that the sound may go on after the last gate.
    cycle : float64 (n,), optional
        What `read_cycle` gives of the oscillator's file, where that was read already.
    lowest_hz : float
        Down to where the wave must be ready, in Hz, if the phrase itself goes less far down.

    Raises
    ------
    SettingError
        For a rate or a tail out of range, and for an oscillator file that can't be used.
    """
    _check_kinds(preset, phrase)
    rate = check_sample_rate(sample_rate)
    if not 0.0 <= tail_s <= 3600.0:
        raise SettingError(f"tail {tail_s!r}: give 0 to 3600 seconds")
    pitch, gate = pitch_changes(preset, phrase), gate_changes(preset, phrase)
    first_volts = pitch[0].held_volts
    settings = _settings(preset, rate, first_volts)
    if preset.oscillator.wave == "file" and cycle is None:
        assert preset.oscillator.file is not None
        cycle = read_cycle(preset.oscillator.file, preset.where)
    lowest_hz = min(
        lowest_hz, _lowest_hz(preset, [c.held_volts for c in pitch], float(settings["octaves_per_volt"][0]))
    )
    tables = build_wavetables(preset.oscillator.wave, preset.oscillator.width, cycle, lowest_hz, rate)
    pitch_events, gate_events = _pitch_events(pitch, rate), _gate_events(gate, rate)
    cut_off = _set_length(settings, gate_events, tail_s)
    warnings = _clip_warnings(preset, phrase, pitch)
    return Program(
        preset,
        phrase,
        rate,
        settings,
        pitch_events,
        gate_events,
        tables,
        pitch,
        gate,
        cut_off,
        warnings,
    )


def _set_length(settings: "NDArray[Any]", gate_events: "NDArray[Any]", tail_s: float) -> bool:
    """Settle the program's length in samples; whether the sound would go on after it."""
    latest = int(gate_events["sample"][-1]) + 1 + math.ceil(tail_s * float(settings["sample_rate"][0]))
    quiet = quiet_sample(settings, gate_events, latest)
    settings["length"] = min(quiet, latest)
    return quiet > latest


def only_slews_differ(one: "Preset", other: "Preset") -> bool:
    """Whether two presets differ in nothing but slew settings and the times and sustain of an envelope.

    Then a phrase's events and the waves are the same, and what is playing can go on in place. Titles, paths
    and phrases don't count.
    """
    envelopes = one.envelope, other.envelope
    if (envelopes[0] is None) != (envelopes[1] is None):
        return False
    return (
        one.oscillator == other.oscillator
        and one.pitch.glide == other.pitch.glide
        and one.pitch.steps_per_octave == other.pitch.steps_per_octave
        and one.amplifier == other.amplifier
        and one.tuning == other.tuning
        and one.converter == other.converter
        and one.drone == other.drone
        and all(e is None or e.retrigger == getattr(envelopes[0], "retrigger", None) for e in envelopes)
    )


def resettled(program: Program, preset: "Preset", tail_s: float = 30.0) -> Program:
    """A program as `compile_program` would make it for a preset of which `only_slews_differ`, in a fraction
    of the time: events and waves are kept.
    """
    settings = _settings(preset, program.sample_rate, program.pitch_changes[0].held_volts)
    cut_off = _set_length(settings, program.gate_events, tail_s)
    return replace(program, preset=preset, settings=settings, cut_off=cut_off)
