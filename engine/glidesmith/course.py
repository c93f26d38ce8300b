"""The exact course of a control through a phrase: closed form after closed form, in seconds.

The voice makes samples of these courses; what is measured, plotted or compared stands on the courses
themselves, so that no sample rate has a part in it. Time counts from the phrase's start. A course is
left-continuous, as everything in the engine: y(t) is the value before an event at t. It is cut into stretches
in which the output only rises, only falls or rests.
"""

import math
from abc import ABC, abstractmethod
from bisect import bisect_right
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Any

import numpy as np

from glidesmith.compiled import kernel
from glidesmith.envelope import GATE_EVENT, WALK, envelope_record, walk_reset, walk_to
from glidesmith.program import changes_let_through, sample_position, slew_of
from glidesmith.pursuit import FOLLOW, PIECE, pursued_level
from glidesmith.slew import GLIDE, HELD, Slew, glide_begin, glide_hold, glide_rate, glide_time, glide_volts
from glidesmith.target import HOLD, target_level

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import ArrayLike, NDArray

    from glidesmith.preset import Preset
    from glidesmith.program import GateChange, PitchChange

_AT_ONCE = Slew("linear", 0.0, 0.0)
_EVENT_RATE = 48_000
"""Walks take events as samples and fractions of a sample, at any rate; this one."""

_BESIDE_S = 1e-10
"""How far beyond the end of one stretch a walk is asked for the next one."""

_WALKS = 1024
"""How many stretches of a walk are recorded at a time."""

_PIECE_MOMENTS = 5

_GRADED = np.geomspace(1e-7, 1.0, 40)


@dataclass(frozen=True, slots=True)
class Stretch(ABC):
    """A part of a course, from ``begin_s`` to ``end_s``, in which the output only rises, only falls or rests.

    ``first`` and ``last`` are the values at its ends, as seen from inside it. ``moves`` is False where the
    output rests. ``end_s`` is infinite for the last rest of a course. ``origin_s`` is when the closed form's
    own time began.
    """

    form: Any
    origin_s: float
    begin_s: float
    end_s: float
    first: float
    last: float
    moves: bool

    @abstractmethod
    def time_at(self, level: float) -> float:
        """When the output is at ``level``, a value between ``first`` and ``last``; within the stretch."""

    @abstractmethod
    def moments(self, count: int) -> "NDArray[np.float64]":
        """At least two moments, in order, that show the stretch's shape; ``count`` says how finely."""

    def reaches(self, level: float, upwards: bool) -> float | None:
        """When the output first is at ``level`` or beyond it, in the direction given; None if it never is."""
        sign = 1.0 if upwards else -1.0
        if sign * (self.first - level) >= 0.0:
            return self.begin_s
        if sign * (self.last - level) >= 0.0:
            return self.time_at(level)
        return None


class Course(ABC):
    """One value's course. Before the first of its closed forms starts, the value is that form's first one.

    ``starts_s`` (n,) says when each closed form, an element of ``forms``, takes over.
    """

    def __init__(self, starts_s: "NDArray[np.float64]", forms: "NDArray[Any]") -> None:
        self.starts_s = starts_s
        self.forms = forms
        self._starts: list[float] = starts_s.tolist()

    @abstractmethod
    def _values(self, indices: "NDArray[np.intp]", times_s: "NDArray[np.float64]") -> "NDArray[np.float64]":
        """The values of the closed forms ``indices`` at ``times_s``."""

    @abstractmethod
    def _parts(self, index: int, begin_s: float, end_s: float) -> Iterator[Stretch]:
        """The stretches of one closed form between two moments that lie in it."""

    def at(self, times_s: "ArrayLike") -> "NDArray[np.float64]":
        """The value at each of ``times_s`` (n,), in any order; before what happens at that moment."""
        times = np.ascontiguousarray(times_s, dtype=np.float64).reshape(-1)
        return self._values(np.maximum(self.starts_s.searchsorted(times, "left") - 1, 0), times)

    def stretches(self, begin_s: float, end_s: float) -> Iterator[Stretch]:
        """The stretches between two moments, in order; together they cover all the time between them."""
        starts = self._starts
        index = max(bisect_right(starts, begin_s) - 1, 0)
        while begin_s < end_s:
            more = index + 1 < len(starts)
            next_s = min(starts[index + 1], end_s) if more else end_s
            if begin_s < next_s:
                yield from self._parts(index, begin_s, next_s)
            begin_s = next_s
            index += 1

    def corners(
        self, begin_s: float, end_s: float, count: int = 48
    ) -> "tuple[NDArray[np.float64], NDArray[np.float64]]":
        """Moments (s) and values of a line that shows the course; a jump is two values at one moment."""
        times: list[NDArray[np.float64]] = []
        values: list[NDArray[np.float64]] = []
        for stretch in self.stretches(begin_s, end_s):
            moments = stretch.moments(count)
            times.append(moments)
            values.append(self.at(moments))
            values[-1][0], values[-1][-1] = stretch.first, stretch.last
        return np.concatenate(times), np.concatenate(values)


@kernel
def _fill_glides(starts_s: Any, glides: Any, indices: Any, times_s: Any, values: Any) -> None:
    for i in range(times_s.size):
        index = indices[i]
        values[i] = glide_volts(glides[index], max(times_s[i] - starts_s[index], 0.0))


@kernel
def _fill_times(glide: Any, levels: Any, elapsed: Any) -> None:
    for i in range(levels.size):
        elapsed[i] = glide_time(glide, levels[i])


@kernel
def _glide_value(glide: Any, elapsed: float) -> float:
    return glide_volts(glide, elapsed)


@kernel
def _glide_rate(glide: Any, elapsed: float) -> float:
    return glide_rate(glide, elapsed)


@dataclass(frozen=True, slots=True)
class GlideStretch(Stretch):
    """The motion of one glide (``form``, a `GLIDE` record), or the rest after it."""

    def time_at(self, level: float) -> float:
        """When the output is at ``level``, by the law's inverse."""
        if not self.moves:
            return self.begin_s
        at = self.origin_s + float(glide_time(self.form, level))
        return min(max(at, self.begin_s), self.end_s)

    def fastest(self) -> float:
        """The largest rate of change, up or down, per second.

        Every law's rate only grows or only falls on the way, but for `cosine`, which is fastest half-way.
        """
        if not self.moves:
            return 0.0
        begin, end = self.begin_s - self.origin_s, self.end_s - self.origin_s
        # At its end a glide's rate is 0 already; what counts is the rate just before.
        end = min(end, float(np.nextafter(self.form["lasts"], 0.0)))
        moments = [begin, end, min(max(0.5 * float(self.form["lasts"]), begin), end)]
        return max(abs(float(_glide_rate(self.form, moment))) for moment in moments)

    def moments(self, count: int) -> "NDArray[np.float64]":
        """Evenly spaced moments, and those of evenly spaced values."""
        if not self.moves:
            return np.array([self.begin_s, self.end_s])
        elapsed = np.empty(count)
        _fill_times(self.form, np.linspace(self.first, self.last, count), elapsed)
        by_value = np.clip(self.origin_s + elapsed, self.begin_s, self.end_s)
        return np.union1d(np.linspace(self.begin_s, self.end_s, count), by_value)


class GlideCourse(Course):
    """Glide after glide: ``forms`` are `GLIDE` records, each begun at its start."""

    def _values(self, indices: "NDArray[np.intp]", times_s: "NDArray[np.float64]") -> "NDArray[np.float64]":
        values = np.empty_like(times_s)
        _fill_glides(self.starts_s, self.forms, indices, times_s, values)
        return values

    def _parts(self, index: int, begin_s: float, end_s: float) -> Iterator[Stretch]:
        glide, start_s = self.forms[index], self._starts[index]
        target = float(glide["target"])
        arrival_s = start_s if glide["law"] == HELD else start_s + float(glide["lasts"])
        if begin_s < arrival_s:
            until_s = min(arrival_s, end_s)
            first = float(_glide_value(glide, max(begin_s - start_s, 0.0)))
            last = target if until_s == arrival_s else float(_glide_value(glide, until_s - start_s))
            yield GlideStretch(glide, start_s, begin_s, until_s, first, last, True)
            begin_s = until_s
        if begin_s < end_s:
            yield GlideStretch(glide, start_s, begin_s, end_s, target, target, False)

    def stair(self, steps: int, begin_s: float, end_s: float) -> "tuple[list[float], list[float]]":
        """The corners (seconds and volts) of the course as a glissando of ``steps`` an octave has it.

        Its steps stand where the course crosses half-way between two.
        """
        times: list[float] = []
        volts: list[float] = []
        for stretch in self.stretches(begin_s, end_s):
            here, there = (math.floor(value * steps + 0.5) for value in (stretch.first, stretch.last))
            way = 1 if there > here else -1
            times.append(stretch.begin_s)
            volts.append(here / steps)
            for step in range(here, there, way):
                at = stretch.time_at((step + 0.5 * way) / steps)
                times += [at, at]
                volts += [step / steps, (step + way) / steps]
            times.append(stretch.end_s)
            volts.append(there / steps)
        return times, volts

    def fastest(self, begin_s: float, end_s: float) -> float:
        """The largest rate of change, up or down, per second, between two moments. A jump has no rate."""
        return fastest(self.stretches(begin_s, end_s))


def fastest(stretches: Iterable[Stretch]) -> float:
    """The largest rate of change, up or down, per second, in these stretches of a glide's course."""
    return max((part.fastest() for part in stretches if isinstance(part, GlideStretch)), default=0.0)


def follow(slew: Slew, initial: float, events: "Iterable[tuple[Fraction, float, bool]]") -> GlideCourse:
    """The course of a slew's output.

    ``events`` are (time in seconds, new target, whether the output jumps there), in order of time;
    ``initial`` is the output before them. A target that is the present one already changes nothing, unless
    the output jumps.
    """
    record = slew.record()[0]
    glide = np.zeros(1, GLIDE)[0]
    glide_hold(glide, initial)
    times: list[Fraction] = [Fraction(0)]
    glides: list[Any] = [glide]
    for time, target, jumps in events:
        before = glides[-1]
        if target == before["target"] and not jumps:
            continue
        glide = np.zeros(1, GLIDE)[0]
        if jumps:
            glide_hold(glide, target)
        else:
            # The difference is exact, however far from the phrase's start.
            present = _glide_value(before, float(time - times[-1]))
            glide_begin(glide, record, float(present), target)
        times.append(time)
        glides.append(glide)
    return GlideCourse(np.array([float(time) for time in times]), np.array(glides, GLIDE))


def pitch_course(slew: Slew, changes: "Sequence[PitchChange]") -> GlideCourse:
    """The pitch after the slew, in volts, before glissando steps; ``changes`` as `pitch_changes` gives them.

    The first note is there from the start.
    """
    events = [(c.held_time, c.held_volts, c.jump) for c in changes_let_through(changes)]
    return follow(slew, changes[0].held_volts, events)


def stepped(volts: "ArrayLike", steps_per_octave: int) -> "NDArray[np.float64]":
    """The glissando: the nearest step of a grid at 0 V, half-way between two the upper one; 0: no grid."""
    exact = np.asarray(volts, dtype=np.float64)
    return np.floor(exact * steps_per_octave + 0.5) / steps_per_octave if steps_per_octave else exact


def octaves_per_volt(preset: "Preset") -> float:
    """1, but for the oscillator's tracking error."""
    return 1.0 + preset.tuning.scale_error_cents_per_octave / 1200.0


def heard_octaves(preset: "Preset", volts: "ArrayLike") -> "NDArray[np.float64]":
    """Octaves above the note at 0 V that are heard for the slew's volts: after steps and tracking error."""
    return np.asarray(stepped(volts, preset.pitch.steps_per_octave) * octaves_per_volt(preset))


@kernel
def _fill_pursuits(origins_s: Any, walks: Any, indices: Any, times_s: Any, values: Any) -> None:
    for i in range(times_s.size):
        walk = walks[indices[i]]
        elapsed = times_s[i] - origins_s[indices[i]]
        values[i] = pursued_level(walk.pursuit, walk.target, elapsed, target_level(walk.target, elapsed))


@kernel
def _pursued(walk: Any, elapsed: float) -> float:
    return pursued_level(walk.pursuit, walk.target, elapsed, target_level(walk.target, elapsed))


@kernel
def _pursuit_time(walk: Any, begin: float, end: float, level: float, rises: bool) -> float:
    """When a pursuit that only rises, or only falls, from ``begin`` to ``end`` (s) is at ``level``."""
    for _ in range(200):
        middle = 0.5 * (begin + end)
        if not begin < middle < end:
            break
        reached = pursued_level(walk.pursuit, walk.target, middle, target_level(walk.target, middle))
        if (reached >= level) if rises else (reached <= level):
            end = middle
        else:
            begin = middle
    return end


@dataclass(frozen=True, slots=True)
class PursuitStretch(Stretch):
    """A stretch of a slewed envelope; ``form`` is a `WALK` record."""

    def time_at(self, level: float) -> float:
        """When the output is at ``level``, by bisection of the closed form."""
        if not self.moves:
            return self.begin_s
        begin, end = self.begin_s - self.origin_s, self.end_s - self.origin_s
        at = self.origin_s + float(_pursuit_time(self.form, begin, end, level, self.last > self.first))
        return min(max(at, self.begin_s), self.end_s)

    def moments(self, count: int) -> "NDArray[np.float64]":
        """Evenly spaced moments, and others that crowd towards both ends, where a stretch may be quick."""
        if not self.moves:
            return np.array([self.begin_s, self.end_s])
        if self.form["pursuit"]["mode"] == PIECE:
            return np.linspace(self.begin_s, self.end_s, _PIECE_MOMENTS)  # one of many, and a cubic
        length = self.end_s - self.begin_s
        inner = np.concatenate(
            [
                self.begin_s + length * _GRADED,
                self.end_s - length * _GRADED,
                np.linspace(self.begin_s, self.end_s, count),
            ]
        )
        return np.unique(np.clip(inner, self.begin_s, self.end_s))


class PursuitCourse(Course):
    """A slewed envelope's course: ``forms`` are the states of a walk (`WALK`) in each of its stretches."""

    def __init__(self, starts_s: "NDArray[np.float64]", forms: "NDArray[Any]") -> None:
        super().__init__(starts_s, forms)
        self.origins_s = (forms["start_sample"] + forms["start_fraction"]) / _EVENT_RATE

    def _values(self, indices: "NDArray[np.intp]", times_s: "NDArray[np.float64]") -> "NDArray[np.float64]":
        values = np.empty_like(times_s)
        _fill_pursuits(self.origins_s, self.forms, indices, times_s, values)
        return values

    def _parts(self, index: int, begin_s: float, end_s: float) -> Iterator[Stretch]:
        walk, origin_s = self.forms[index], float(self.origins_s[index])
        rests = walk["pursuit"]["mode"] == FOLLOW and walk["target"]["motion"] == HOLD
        # A jump, and the end of what was there before, lie at the very start of a stretch.
        start = float(np.nextafter(walk["pursuit"]["since"], np.inf))
        first = float(_pursued(walk, max(begin_s - origin_s, start)))
        last = first if rests else float(_pursued(walk, max(end_s - origin_s, start)))
        yield PursuitStretch(walk, origin_s, begin_s, end_s, first, last, not rests)


@kernel
def _record_walk(
    walk: Any, slew: Any, envelope: Any, events: Any, rate: float, beside: float, walks: Any, starts: Any
) -> int:
    """Keep the walk's state in each of its stretches, as many as ``walks`` (n,) takes; returns their number.

    ``starts`` (n + 1,) gets the times (s) at which they take over, from ``starts[0]`` on, and that of the
    next one, which is infinite where there is none.
    """
    for count in range(walks.size):
        walks[count] = walk
        border = (float(walk.start_sample) + (walk.start_fraction + walk.pursuit.until * rate)) / rate
        if walk.event < events.size:
            border = min(border, (float(events[walk.event].sample) + events[walk.event].fraction) / rate)
        starts[count + 1] = border
        if not border < np.inf:
            return count + 1
        starts[count + 1] = max(border, starts[count])
        position = (starts[count + 1] + beside) * rate
        whole = np.floor(position)
        walk_to(walk, slew, envelope, events, rate, int(whole), position - whole)
    return int(walks.size)


def _gate_events(changes: "Sequence[GateChange]") -> "NDArray[Any]":
    rows = [(*sample_position(c.time, _EVENT_RATE), c.level, c.trigger) for c in changes]
    return np.array(rows, GATE_EVENT)


def envelope_course(preset: "Preset", slew: Slew, changes: "Sequence[GateChange]") -> PursuitCourse:
    """The level, 0 to 1, that a slew makes of the preset's envelope; ``changes`` are `gate_changes`' own."""
    assert preset.envelope is not None
    records = slew.record()[0], envelope_record(preset.envelope)[0]
    events, walk = _gate_events(changes), np.zeros(1, WALK)[0]
    walk_reset(walk)
    begin_s, starts, forms = 0.0, [], []
    while begin_s < np.inf:
        walks, starts_s = np.zeros(_WALKS, WALK), np.zeros(_WALKS + 1)
        starts_s[0] = begin_s
        count = _record_walk(walk, *records, events, float(_EVENT_RATE), _BESIDE_S, walks, starts_s)
        starts.append(starts_s[:count])
        forms.append(walks[:count])
        begin_s = float(starts_s[count])
    return PursuitCourse(np.concatenate(starts), np.concatenate(forms))


def gain_courses(preset: "Preset", changes: "Sequence[GateChange]") -> tuple[Course, Course]:
    """The gain control, 0 to 1, before and after the gain slew; ``changes`` as `gate_changes` gives them."""
    slew = slew_of(preset.gain)
    if preset.envelope is not None:
        return envelope_course(preset, _AT_ONCE, changes), envelope_course(preset, slew, changes)
    levels = [(change.time, change.level, False) for change in changes]
    return follow(_AT_ONCE, 0.0, levels), follow(slew, 0.0, levels)
