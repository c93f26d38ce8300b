"""Facts about every glide and every gate, from the closed forms: in exact seconds, whatever the sample rate.

    facts = measure(load_preset("lead.toml"), load_phrase("line.mid"))
    print(table(facts))

A glide lands at the moment after which the pitch as heard (after converter, steps and tracking error) stays
within the tolerance of the note's tempered pitch. Its own interval runs from where the output is when the
change reaches the slew to the slew's target. What happens to the gain is in `gates`.
"""

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

from glidesmith.course import (
    GlideCourse,
    Stretch,
    fastest,
    gain_courses,
    heard_octaves,
    octaves_per_volt,
    pitch_course,
    stepped,
)
from glidesmith.errors import SettingError
from glidesmith.facts import Facts, GateFacts, GlideFacts, table
from glidesmith.gates import gate_facts
from glidesmith.program import PitchChange, check_sample_rate, gate_changes, pitch_changes, slew_of
from glidesmith.units import note_name

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator, Sequence

    from glidesmith.phrase import Phrase
    from glidesmith.preset import Preset
    from glidesmith.program import GateChange, Program

__all__ = ["Facts", "GateFacts", "GlideFacts", "measure", "table"]

SMALLEST_TOLERANCE, LARGEST_TOLERANCE = 0.01, 1200.0
"""Cents."""

_ROUNDING_VOLTS = 2e-14
"""How far off sums of doubles near 10 V may be: a pitch at the very edge of the tolerance is in tune."""


@dataclass(frozen=True, slots=True)
class TuneRange:
    """The pitches within tolerance of a note, as outputs of the slew: from ``low`` to ``high`` volts.

    With glissando steps (``steps`` per octave) the output may lie up to half a step beyond a step that is in
    tune; ``low`` > ``high`` where none is.
    """

    low: float
    high: float
    steps: int

    @classmethod
    def of(cls, preset: "Preset", note_volts: float, tolerance_cents: float) -> "TuneRange":
        """The range around a note."""
        steps, tracking = preset.pitch.steps_per_octave, octaves_per_volt(preset)
        low = (note_volts - tolerance_cents / 1200.0) / tracking - _ROUNDING_VOLTS
        high = (note_volts + tolerance_cents / 1200.0) / tracking + _ROUNDING_VOLTS
        if steps:
            low = (math.ceil(low * steps) - 0.5) / steps
            high = (math.floor(high * steps) + 0.5) / steps
        return cls(low, high, steps)

    def holds(self, volts: float) -> bool:
        """Whether an output of the slew is heard in tune."""
        if self.steps:  # half-way between two steps the upper one is heard
            return self.low <= float(stepped(volts, self.steps)) <= self.high and self.low < self.high
        return self.low <= volts <= self.high

    def part_of(self, stretch: Stretch) -> tuple[float, float] | None:
        """From when to when a stretch is in tune, in seconds; None where it never is."""
        begins, ends = self.holds(stretch.first), self.holds(stretch.last)
        if not stretch.moves:
            return (stretch.begin_s, stretch.end_s) if begins else None
        rises = stretch.last > stretch.first
        near, far = (self.low, self.high) if rises else (self.high, self.low)
        if not (begins or ends) and not self._is_crossed_by(stretch):
            return None
        enters = stretch.begin_s if begins else stretch.time_at(near)
        leaves = stretch.end_s if ends else stretch.time_at(far)
        return (enters, leaves) if enters < leaves else None

    def _is_crossed_by(self, stretch: Stretch) -> bool:
        ends = sorted((stretch.first, stretch.last))
        return ends[0] < self.low < self.high < ends[1]


def measure(
    preset: "Preset", phrase: "Phrase", tolerance_cents: float = 5.0, sample_rate: int = 48_000
) -> Facts:
    """What a preset makes of a phrase: the facts about every glide and gate.

    Parameters
    ----------
    preset, phrase
        As `load_preset` and `load_phrase` give them.
    tolerance_cents : float
        How near to its tempered pitch a note is in tune, 0.01 to 1200 cents.
    sample_rate : int
        Hz, 8,000 to 384,000: the rate that the facts are for. They come from closed forms, in seconds, and
        are the same for every rate.

    Returns
    -------
    Facts
        ``glides`` has an entry for every change of the pitch's target after the first note, a return to a
        held key included, ``gates`` one for every opening of the gate.

    Raises
    ------
    SettingError
        For a tolerance or a rate out of range.
    """
    tolerance = _check_tolerance(tolerance_cents)
    rate = check_sample_rate(sample_rate)
    changes = pitch_changes(preset, phrase)
    course = pitch_course(slew_of(preset.pitch.slew), changes)
    return _facts(preset, phrase, tolerance, rate, changes, course, gate_changes(preset, phrase))


def measure_program(program: "Program", course: GlideCourse, tolerance_cents: float = 5.0) -> Facts:
    """What `measure` finds of a program's preset and phrase; ``course`` is the program's `pitch_course`."""
    tolerance = _check_tolerance(tolerance_cents)
    changes, gates = program.pitch_changes, program.gate_changes
    return _facts(program.preset, program.phrase, tolerance, program.sample_rate, changes, course, gates)


def _facts(
    preset: "Preset",
    phrase: "Phrase",
    tolerance: float,
    rate: int,
    changes: "Sequence[PitchChange]",
    course: GlideCourse,
    gates: "Sequence[GateChange]",
) -> Facts:
    unslewed, slewed = gain_courses(preset, gates)
    return Facts(
        title_of(preset),
        title_of(phrase),
        tolerance,
        rate,
        tuple(_glide_facts(preset, phrase, changes, course, tolerance)),
        tuple(gate_facts(preset, gates, unslewed, slewed)),
    )


def title_of(source: "Preset | Phrase") -> str:
    """The title of a preset or a phrase, or the name of its file where it has none."""
    return source.title or (source.path.stem if source.path else "untitled")


def _check_tolerance(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise SettingError(f"tolerance {value!r}: give a number of cents, 0.01 to 1200 (5 is usual)")
    if not SMALLEST_TOLERANCE <= value <= LARGEST_TOLERANCE:
        raise SettingError(f"tolerance {value!r} cents is out of range: 0.01 to 1200 (5 is usual)")
    return float(value)


def _glide_facts(
    preset: "Preset",
    phrase: "Phrase",
    changes: "Sequence[PitchChange]",
    course: GlideCourse,
    tolerance_cents: float,
) -> "Iterator[GlideFacts]":
    """An entry for every change of the target; a jump to the pitch that is the target already is none."""
    targets = [i for i in range(1, len(changes)) if changes[i].volts != changes[i - 1].volts]
    for index, following in zip(targets, (*targets[1:], None), strict=True) if targets else ():
        change, before = changes[index], changes[index - 1]
        end = phrase.end if following is None else changes[following].time
        tuned = TuneRange.of(preset, change.volts, tolerance_cents)
        begin_s, end_s = float(change.time), float(end)
        stretches = tuple(course.stretches(begin_s, end_s))
        parts = _tuned_parts(tuned, stretches)
        landing_s = parts[-1][0] - begin_s if parts and parts[-1][1] == end_s else None
        gate_s = min(end_s, float(phrase.notes[change.note].end))
        numbers = phrase.notes[before.note].number, phrase.notes[change.note].number
        yield GlideFacts(
            change.note,
            begin_s,
            note_name(numbers[0]),
            note_name(numbers[1]),
            float(numbers[1] - numbers[0]),
            landing_s,
            *_own_course(course, change, end_s, stretches),
            _cents_off(preset, course, change, end_s) if landing_s is None else 0.0,
            _fraction_within(parts, begin_s, gate_s),
        )


def _tuned_parts(tuned: TuneRange, stretches: "Iterable[Stretch]") -> list[tuple[float, float]]:
    """From when to when the pitch is in tune in these stretches, in order; parts that abut are joined."""
    parts: list[tuple[float, float]] = []
    for stretch in stretches:
        part = tuned.part_of(stretch)
        if part is None:
            continue
        if parts and parts[-1][1] == part[0]:
            part = (parts.pop()[0], part[1])
        parts.append(part)
    return parts


def _fraction_within(parts: "Iterable[tuple[float, float]]", begin_s: float, end_s: float) -> float:
    covered = sum(max(0.0, min(part[1], end_s) - part[0]) for part in parts)
    return min(covered / (end_s - begin_s), 1.0)


def _own_course(
    course: GlideCourse, change: PitchChange, end_s: float, stretches: "Sequence[Stretch]"
) -> tuple[float | None, float | None, float]:
    """Midpoint and 10 to 90 % of the glide's own interval in seconds, fastest rate in semitones a second.

    ``stretches`` are the course's from the change to ``end_s``.
    """
    come_s = float(change.held_time)
    if come_s >= end_s:
        return None, None, 0.0
    if come_s != float(change.time):
        stretches = tuple(course.stretches(come_s, end_s))
    origin = float(course.at([come_s])[0])
    way = change.held_volts - origin
    tenth, middle, nine_tenths = (
        _first_at(stretches, origin + share * way, way >= 0.0, end_s) for share in (0.1, 0.5, 0.9)
    )
    rise_s = nine_tenths - tenth if tenth is not None and nine_tenths is not None else None
    midpoint_s = middle - float(change.time) if middle is not None else None
    return midpoint_s, rise_s, 12.0 * fastest(stretches)


def _first_at(stretches: "Iterable[Stretch]", level: float, upwards: bool, end_s: float) -> float | None:
    for stretch in stretches:
        at = stretch.reaches(level, upwards)
        if at is not None:
            return at if at < end_s else None
    return None


def _cents_off(preset: "Preset", course: GlideCourse, change: PitchChange, at_s: float) -> float:
    """How far the pitch as heard is from the note's tempered pitch, just before a moment."""
    return 1200.0 * abs(float(heard_octaves(preset, course.at([at_s]))[0]) - change.volts)
