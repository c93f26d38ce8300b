"""One slot's settings and phrase at one tempo, whole, as the audio thread takes them."""

import math
from dataclasses import dataclass, replace
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.errors import SettingError
from glidesmith.program import (
    PITCH_EVENT,
    Program,
    compile_program,
    only_slews_differ,
    resettled,
    sample_position,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset

LOWEST_KEY_HZ = 30.0
"""Waves are ready for played keys down to this frequency; under it they lose their highest partials."""

ENDLESS = 1 << 62
"""The length, in samples, of a program that loops."""


@dataclass(frozen=True)
class Snapshot:
    """What the deck needs to play one slot.

    ``program`` is that of a render; ``later_pitch_events`` are those of a loop's second round and all after
    it, which has no first note. ``loop_samples``: the length of a round, 0 without a loop. ``unit_samples``:
    samples that a second of the phrase, at its own tempo, takes. ``gain_db``: the slot's level match.
    ``source``: the phrase at its own tempo and pitch, the tempo, the transposition, and whether it loops.
    """

    program: Program
    settings: "NDArray[Any]"
    pitch_events: "NDArray[Any]"
    later_pitch_events: "NDArray[Any]"
    gate_events: "NDArray[Any]"
    loop_samples: int
    unit_samples: float
    slot: int
    gain_db: float
    source: "tuple[Phrase, Fraction, int, bool]"


def moved_phrase(phrase: "Phrase", tempo: Fraction = Fraction(1), transpose: int = 0) -> "Phrase":
    """The phrase ``tempo`` times as fast and ``transpose`` semitones higher.

    Raises SettingError where a note would leave MIDI's 0 to 127, or the tempo is not over 0.
    """
    if tempo <= 0:
        raise SettingError(f"tempo {tempo}: give a number over 0")
    numbers = [note.number for note in phrase.notes]
    if numbers and (min(numbers) + transpose < 0 or max(numbers) + transpose > 127):
        raise SettingError(
            f"transposing by {transpose:+d} semitones takes the phrase out of MIDI's notes 0 to 127; "
            f"{-min(numbers):+d} to {127 - max(numbers):+d} fit"
        )
    if tempo == 1 and transpose == 0:
        return phrase
    notes = tuple(
        replace(note, start=note.start / tempo, end=note.end / tempo, number=note.number + transpose)
        for note in phrase.notes
    )
    bpm = None if phrase.tempo_bpm is None else float(phrase.tempo_bpm * tempo)
    return replace(phrase, notes=notes, tempo_bpm=bpm)


def loop_length_s(phrase: "Phrase") -> Fraction:
    """How long a round is, in exact seconds: to the phrase's end, or to the end of the beat that it ends in.

    Phrases that count time without beats end with their last note. A phrase that ends within a thousandth of
    a beat after a beat ends on it: tempi in MIDI files are rounded to microseconds.
    """
    if phrase.tempo_bpm is None:
        return phrase.end
    beat = Fraction(60) / Fraction(phrase.tempo_bpm)
    beats = math.ceil(phrase.end / beat - Fraction(1, 1000))
    return max(beats * beat, phrase.end)


def snapshot_of(
    preset: "Preset",
    phrase: "Phrase",
    sample_rate: int,
    *,
    tempo: Fraction = Fraction(1),
    transpose: int = 0,
    loop: bool = True,
    slot: int = 0,
    gain_db: float = 0.0,
    cycle: "NDArray[np.float64] | None" = None,
    earlier: Snapshot | None = None,
) -> Snapshot:
    """Settle what a slot plays.

    Parameters
    ----------
    preset, phrase
        As `load_preset` and `load_phrase` give them.
    sample_rate : int
        Hz, 8,000 to 384,000.
    tempo : Fraction
        How many times as fast as the phrase's own tempo.
    transpose : int
        Semitones.
    loop : bool
        Whether the phrase starts anew at its end. Without, it is the program of `render`.
    slot : int
        A number told back in the deck's trace.
    gain_db : float
        The gain that matches the slot's loudness to the others'.
    cycle : float64 (n,), optional
        What `read_cycle` gives of the oscillator's file, where that was read already.
    earlier : Snapshot, optional
        One whose events and waves are used again where only slews differ; the result is the same.

    Raises
    ------
    SettingError
        As `compile_program` does, and for a transposition that leaves MIDI's notes.
    """
    source = (phrase, tempo, transpose, loop)
    if earlier is not None and _goes_on(earlier, preset, source, sample_rate):
        program = resettled(earlier.program, preset)
        settings = program.settings.copy()
        if loop:
            settings["length"] = ENDLESS
        return replace(earlier, program=program, settings=settings, slot=slot, gain_db=gain_db)
    moved = moved_phrase(phrase, tempo, transpose)
    program = compile_program(preset, moved, sample_rate, cycle=cycle, lowest_hz=LOWEST_KEY_HZ)
    settings = program.settings.copy()
    length = 0
    if loop:
        settings["length"] = ENDLESS
        length = math.ceil(loop_length_s(moved) * sample_rate)
    gates = _open_over_the_seam(_within(program.gate_events, length), length)
    return Snapshot(
        program,
        settings,
        _within(program.pitch_events, length),
        _within(_later_events(program), length),
        gates,
        length,
        float(sample_rate / tempo),
        slot,
        gain_db,
        source,
    )


def _goes_on(earlier: Snapshot, preset: "Preset", source: "tuple[Any, ...]", sample_rate: int) -> bool:
    """Whether an earlier snapshot's events and waves are those of ``preset`` too.

    A file's content may have changed under its name, so waves from files are always made anew.
    """
    same_phrase = earlier.source[0] is source[0] and earlier.source[1:] == source[1:]
    return (
        same_phrase
        and earlier.program.sample_rate == sample_rate
        and preset.oscillator.wave != "file"
        and only_slews_differ(earlier.program.preset, preset)
    )


def _later_events(program: Program) -> "NDArray[Any]":
    """A later round's pitch events: as the first's, and its first note comes from the last one before it."""
    changes = {change.held_time: change for change in program.pitch_changes}
    rows = []
    for change in changes.values():
        jump = change.jump if change is not program.pitch_changes[0] else _jumps_again(program)
        rows.append((*sample_position(change.held_time, program.sample_rate), change.held_volts, jump))
    return np.array(rows, PITCH_EVENT)


def _jumps_again(program: Program) -> bool:
    """Whether a round's first note jumps: no key is held where it begins, so only ``always`` glides to it."""
    return program.preset.pitch.glide != "always"


def _open_over_the_seam(gates: "NDArray[Any]", length: int) -> "NDArray[Any]":
    """Gate events without the one that closes where a round ends if the next begins with a note.

    A key that goes down as another goes up leaves no gap in a phrase either.
    """
    closes = gates[-1]["level"] == 0.0 and gates[-1]["sample"] == length
    opens = gates[0]["sample"] == 0 and gates[0]["fraction"] == 0.0
    return gates[:-1].copy() if length and closes and opens and gates.size > 1 else gates


def _within(events: "NDArray[Any]", length: int) -> "NDArray[Any]":
    """The events, of which none is after ``length`` samples: a converter's last tick may be. 0: no limit."""
    if length and events.size:
        late = events["sample"] >= length
        if late.any():
            events = events.copy()
            events["sample"][late] = length
            events["fraction"][late] = 0.0
    return events
